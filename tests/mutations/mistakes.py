"""The planted mistakes: each breaks one promise that a person at the plant relies on."""

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Change:
    """``old`` stands in ``file`` exactly once and gives way to ``new``."""

    file: str
    old: str
    new: str


@dataclass(frozen=True, slots=True)
class Mistake:
    """What is broken, how, and the tests that must notice."""

    name: str
    changes: tuple[Change, ...]
    tests: tuple[str, ...]


RUNNER = "autotune/service/runner.py"
OF_THE_RUNNER = ("tests/service/test_runner.py", "tests/service/test_runner_faults.py")

MISTAKES: tuple[Mistake, ...] = (
    Mistake(
        "no last-resort hand-back",
        (
            Change(
                RUNNER,
                "        if self.experiment.phase.is_touched:\n            ended",
                "        if False:\n            ended",
            ),
        ),
        OF_THE_RUNNER,
    ),
    Mistake(
        "a second cancel is heard in a hand-back",
        (
            Change(
                "autotune/service/deaf.py",
                "            cancellation = heard\n",
                "            if cancellation is not None:\n"
                "                task.cancel()\n"
                "            cancellation = heard\n",
            ),
        ),
        OF_THE_RUNNER,
    ),
    Mistake(
        "the state is stored after the effect",
        (
            Change(
                RUNNER,
                "        self.experiment, commands = step(self.experiment, event)\n",
                "        self._earlier = self.experiment\n"
                "        self.experiment, commands = step(self.experiment, event)\n",
            ),
            Change(
                RUNNER,
                "        report = await self._link.write(values)\n",
                "        later, self.experiment = self.experiment, self._earlier\n"
                "        report = await self._link.write(values)\n"
                "        self.experiment = later\n",
            ),
        ),
        OF_THE_RUNNER,
    ),
    Mistake(
        "a PV that is no number passes its range",
        (
            Change(
                "autotune/experiment/interlocks.py",
                "    if view.limits.pv_low_pct <= view.pv_pct <= view.limits.pv_high_pct:\n",
                "    if not (view.pv_pct < view.limits.pv_low_pct or view.pv_pct > view.limits.pv_high_pct):\n",
            ),
        ),
        ("tests/experiment/test_interlocks.py",),
    ),
    Mistake(
        "an output that is no number counts as following",
        (
            Change(
                "autotune/experiment/interlocks.py",
                "    if off_pct <= resolution_pct or (not is_late and",
                "    if not off_pct > resolution_pct or (not is_late and",
            ),
        ),
        ("tests/experiment/test_interlocks.py",),
    ),
    Mistake(
        "a trip skips RESTORING",
        (
            Change(
                "autotune/experiment/phases.py",
                "(Phase.TESTING, Trigger.TRIPPED): Phase.RESTORING",
                "(Phase.TESTING, Trigger.TRIPPED): Phase.ABORTED",
            ),
        ),
        ("tests/experiment/test_phases.py",),
    ),
    Mistake(
        "a write goes out before the journal has it",
        (
            Change(
                RUNNER,
                "        self._record_command(command, gate(self.experiment, command))\n",
                "        early = Written(_now_s(), command, await self._write(command))\n"
                "        self._record_command(command, gate(self.experiment, command))\n",
            ),
            Change(
                RUNNER,
                "        return Written(_now_s(), command, await self._write(command))\n",
                "        return early\n",
            ),
        ),
        OF_THE_RUNNER,
    ),
    Mistake(
        "a test goes on writing after somebody took the loop",
        (
            Change(
                "autotune/experiment/watching.py",
                "    if sign is not None:\n        return release(experiment, sample, sign)\n",
                "",
            ),
        ),
        ("tests/experiment/test_machine.py", "tests/experiment/test_takeover.py"),
    ),
    Mistake(
        "a hand-back writes onto a loop that somebody took",
        (
            Change(
                "autotune/experiment/hand_back.py",
                "    if taken is not None:\n",
                "    if taken is not None and held.taken is not None:\n",
            ),
        ),
        ("tests/experiment/test_hand_back.py",),
    ),
    Mistake(
        "a write of settings goes on after somebody changed the mode",
        (
            Change(
                "autotune/confirmed_write/machine.py",
                "    if reading.mode is not state.mode_held:\n        return _put_back(",
                "    if reading.mode is LoopMode.NOT_KNOWN:\n        return _put_back(",
            ),
        ),
        ("tests/confirmed_write/test_machine.py",),
    ),
    Mistake(
        "a write of settings goes on after somebody moved the output",
        (
            Change(
                "autotune/confirmed_write/machine.py",
                "    return None if abs(read_pct - held_pct) <= OP_HELD_PCT else output_taken(held_pct, read_pct)\n",
                "    return None if abs(read_pct - held_pct) <= 100.0 else output_taken(held_pct, read_pct)\n",
            ),
        ),
        ("tests/confirmed_write/test_machine.py",),
    ),
    Mistake(
        "a recovery writes without looking whether the loop is still ours",
        (
            Change(
                "autotune/service/recovery.py",
                "    if doubt is not None:\n",
                "    if doubt is not None and not doubt:\n",
            ),
        ),
        ("tests/service/test_recovery.py",),
    ),
    Mistake(
        "a hand-back writes before it reads",
        (
            Change(
                "autotune/service/hand_back.py",
                "            sample = await self._reader.read_sample()\n",
                "            home_pct, next_number = self._as_found.op_pct, self.held.sequence + 1\n"
                "            await self._write(DriveOutput(home_pct, self.held.token, 0, next_number))\n"
                "            sample = await self._reader.read_sample()\n",
            ),
            Change(
                "autotune/service/hand_back.py",
                "from autotune.experiment.commands import HandBack\n",
                "from autotune.experiment.commands import DriveOutput, HandBack\n",
            ),
        ),
        ("tests/service/test_recovery.py", *OF_THE_RUNNER),
    ),
    Mistake(
        "the write list is ignored",
        (
            Change(
                "autotune/field/write_list.py",
                '            raise WriteForbidden(f"{self.loop}: {name!r} is not on the write list")\n',
                "            return\n",
            ),
        ),
        ("tests/field/test_write_list.py",),
    ),
    Mistake(
        "a number outside its range is let on the wire",
        (Change("autotune/field/write_list.py", "not permit.allows(held)", "not isinstance(held, int | float)"),),
        ("tests/field/test_write_list.py",),
    ),
    Mistake(
        "a confirmation is good for two writes",
        (
            Change(
                "autotune/confirmed_write/confirmation.py",
                "    if confirmation in spent:\n",
                "    if confirmation in spent and not spent:\n",
            ),
        ),
        ("tests/confirmed_write/test_confirmation.py",),
    ),
    Mistake(
        "the gate lets every output pass",
        (
            Change(
                "autotune/experiment/gate.py",
                "    if not (isfinite(command.op_pct) and low_pct <= command.op_pct <= high_pct):\n",
                "    if not isfinite(command.op_pct) and low_pct <= high_pct:\n",
            ),
        ),
        ("tests/experiment/test_gate.py",),
    ),
)
