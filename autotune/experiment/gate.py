"""The last pure check before every write (S1, S3): may this command go out now?

The machine only asks for what passes here; the shell asks once more, as the last thing before the wire.
"""

from math import isfinite

from autotune.experiment.commands import ClaimLoop, Command, DriveOutput, HandBack, ReleaseLoop, SetMode, SetSetpoint
from autotune.experiment.phases import Phase
from autotune.experiment.room import allowed_op_pct
from autotune.experiment.state import Experiment
from autotune.loop.limits import AsFound
from autotune.loop.mode import LoopMode
from autotune.loop.outcome import Refusal

ROUNDING_RATIO = 1e-9
"""What the sums of a ramp may lose to rounding."""

REMEDY = "nothing was sent; report this with the journal"


def gate(experiment: Experiment, command: Command) -> Refusal | None:
    """Judge a command of ``step`` in the phase that it left behind; ``None`` lets it pass."""
    if isinstance(command, HandBack):
        return None if experiment.phase is Phase.RESTORING else _refusal("GATE_PHASE", "hand-back outside RESTORING")
    if isinstance(command, ReleaseLoop):
        is_open = experiment.phase is Phase.RELEASED
        return None if is_open else _refusal("GATE_PHASE", f"release in {experiment.phase.value}")
    if experiment.as_found is None or experiment.phase not in (Phase.BASELINE, Phase.TESTING):
        return _refusal("GATE_PHASE", f"{type(command).__name__} in {experiment.phase.value}")
    if isinstance(command, ClaimLoop):
        return _judge_token(experiment, command.token)
    if isinstance(command, SetMode):
        return None if command.mode is LoopMode.MAN else _refusal("GATE_MODE", "a test asks for no mode but manual")
    if isinstance(command, DriveOutput):
        return _judge_output(experiment, experiment.as_found, command)
    return _refusal("GATE_SETPOINT", "a test writes no setpoint")


def gate_hand_back(as_found: AsFound, token: int, command: Command) -> Refusal | None:
    """Judge a command of ``next_hand_back_step``: only what was found, and our own token, may be written."""
    if isinstance(command, DriveOutput):
        is_home = command.op_pct == as_found.op_pct and isfinite(command.op_pct)
        return None if is_home and command.token == token else _refusal("GATE_OUTPUT", "a hand-back drives as found")
    if isinstance(command, SetMode):
        return None if command.mode is as_found.mode else _refusal("GATE_MODE", "a hand-back asks the mode as found")
    if isinstance(command, SetSetpoint):
        is_home = command.sp_pct == as_found.sp_pct and isfinite(command.sp_pct)
        return None if is_home else _refusal("GATE_SETPOINT", "a hand-back writes the setpoint as found")
    if isinstance(command, ClaimLoop):
        return None if command.token == token else _refusal("GATE_TOKEN", "the token is not ours")
    return None if isinstance(command, ReleaseLoop) else _refusal("GATE_PHASE", "a hand-back inside a hand-back")


def _judge_token(experiment: Experiment, token: int) -> Refusal | None:
    return None if token == experiment.plan.token else _refusal("GATE_TOKEN", f"token {token} is not ours")


def _judge_output(experiment: Experiment, as_found: AsFound, command: DriveOutput) -> Refusal | None:
    low_pct, high_pct = allowed_op_pct(experiment.plan.limits, as_found)
    if not (isfinite(command.op_pct) and low_pct <= command.op_pct <= high_pct):
        return _refusal("GATE_OUTPUT", f"output {command.op_pct} % is outside {low_pct} .. {high_pct} %")
    if experiment.phase is Phase.BASELINE and command.op_pct != as_found.op_pct:
        return _refusal("GATE_OUTPUT", "the baseline is held at the output as found")
    rate, before = experiment.plan.limits.op_rate_pct_per_s, experiment.recording.moves.last
    if rate is not None and before is not None and command.op_pct != as_found.op_pct:
        reach_pct = rate * experiment.plan.scan_s * (1.0 + ROUNDING_RATIO)
        if not abs(command.op_pct - before.op_pct) <= reach_pct:
            return _refusal("GATE_RATE", f"output {command.op_pct} % after {before.op_pct} % is too fast")
    return _judge_token(experiment, command.token)


def _refusal(code: str, reason: str) -> Refusal:
    return Refusal(code, reason, REMEDY)
