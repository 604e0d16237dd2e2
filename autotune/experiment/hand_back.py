"""Giving the loop back as found: read, decide, write, read again.

The shell reads the loop, asks ``next_hand_back_step`` and performs what it answers, until it is done or
``hand_back_within_s`` is over.  The same decision serves after our own death: it reads first, and gives back only
what still holds our last write.
"""

from dataclasses import dataclass, replace
from math import isfinite

from autotune.experiment.commands import Command, ReleaseLoop, SetSetpoint
from autotune.experiment.events import HandBackResult
from autotune.experiment.held import Held, ask_mode, claim, confirmed, drive, is_ours, is_released, may_release
from autotune.experiment.plan import TestPlan
from autotune.experiment.takeover import has_sp_changed, sign_of_takeover
from autotune.loop.limits import AsFound
from autotune.loop.mode import LoopMode
from autotune.loop.quality import Quality
from autotune.loop.sample import GuardState, Sample


@dataclass(frozen=True, slots=True)
class HandBackWrites:
    """Not done yet: store ``held``, perform ``commands`` in order (none: just wait a scan), then read again."""

    commands: tuple[Command, ...]
    held: Held


@dataclass(frozen=True, slots=True)
class HandBackDone:
    """The hand-back is over; ``detail`` names what to enter by hand, should anybody doubt it."""

    result: HandBackResult
    detail: str


HandBackStep = HandBackWrites | HandBackDone


def by_hand(as_found: AsFound) -> str:
    """What to enter at the panel to have the loop as found."""
    setpoint = "not read" if as_found.sp_pct is None else f"{as_found.sp_pct:.2f} %"
    return f"as found: output {as_found.op_pct:.2f} %, setpoint {setpoint}, mode {as_found.mode.value}"


def hand_back_overdue(as_found: AsFound, reason: str) -> HandBackDone:
    """How a hand-back ends that could not be shown to hold in time."""
    return HandBackDone(HandBackResult.NOT_CONFIRMED, f"{reason}; {by_hand(as_found)}")


def next_hand_back_step(plan: TestPlan, as_found: AsFound, held: Held, sample: Sample) -> HandBackStep:
    """Decide the next step of a hand-back from what was just read.

    Order: output, setpoint where it tracks in manual, mode, token; each is verified by the next reading.  Nothing
    is written after a restart of the PLC, after its guard gave back, or onto a loop that somebody took.
    """
    if held.taken is not None:
        return _taken(held.taken, as_found)
    if as_found.boot_count is not None and sample.boot_count != as_found.boot_count:
        return _after_restart(plan, as_found, held, sample)
    if not _is_readable(plan, sample):
        return HandBackWrites((), held)
    if sample.guard is not None and sample.guard.state is GuardState.GAVE_BACK:
        held = replace(held, has_guard_given_back=True)
    if held.has_guard_given_back or (sample.guard is not None and not is_ours(sample.guard, held.token)):
        return _verify_only(plan, as_found, held, sample)
    taken = sign_of_takeover(plan, as_found, held, sample)
    if taken is not None:
        return _release_once(replace(held, taken=taken), sample, _taken(taken, as_found))
    return _give_back(plan, as_found, confirmed(held, sample, plan.limits.op_resolution_pct), sample)


def _taken(sign: str, as_found: AsFound) -> HandBackDone:
    return HandBackDone(HandBackResult.TAKEN, f"{sign}; {by_hand(as_found)}")


def _is_readable(plan: TestPlan, sample: Sample) -> bool:
    has_output = sample.op_pct is not None and isfinite(sample.op_pct)
    return has_output and sample.mode is not LoopMode.NOT_KNOWN and (sample.guard is not None) == plan.has_guard


def is_as_found(plan: TestPlan, as_found: AsFound, sample: Sample) -> bool:
    """Whether the loop reads as found; in automatic the output is the block's own and not compared."""
    if sample.mode is not as_found.mode or (not _is_sp_free(plan, as_found) and has_sp_changed(as_found, sample)):
        return False
    return as_found.mode is not LoopMode.MAN or _is_at_home(plan, as_found, sample)


def _is_sp_free(plan: TestPlan, as_found: AsFound) -> bool:
    """Whether the setpoint moves by itself in the mode as found."""
    return plan.sp_tracks_in_manual and as_found.mode is LoopMode.MAN


def _after_restart(plan: TestPlan, as_found: AsFound, held: Held, sample: Sample) -> HandBackStep:
    if sample.boot_count is None:
        return HandBackWrites((), held)
    if is_as_found(plan, as_found, sample):
        return HandBackDone(HandBackResult.RESTORED, f"the PLC restarted and reads as found; {by_hand(as_found)}")
    return hand_back_overdue(as_found, "the PLC restarted, so nothing was written")


def _verify_only(plan: TestPlan, as_found: AsFound, held: Held, sample: Sample) -> HandBackStep:
    """The guard no longer passes anything of ours on: see what it left, and at most release the token."""
    if sample.guard is not None and sample.guard.holder not in (None, 0, held.token):
        return _taken(f"the PLC's guard is held by token {sample.guard.holder}", as_found)
    if is_as_found(plan, as_found, sample):
        result = HandBackResult.GUARD_GAVE_BACK if held.has_guard_given_back else HandBackResult.RESTORED
        return _release_once(held, sample, HandBackDone(result, by_hand(as_found)))
    if has_failed_pv(sample) and _is_at_home(plan, as_found, sample):
        return _release_once(held, sample, hand_back_overdue(as_found, _pv_failed(as_found)))
    if held.has_release_been_asked:  # which comes only after the loop was seen as found
        return _taken("the loop changed after it was seen as found and our token had gone", as_found)
    return HandBackWrites((), held)


def _release_once(held: Held, sample: Sample, done: HandBackDone) -> HandBackStep:
    """Take our request back once, even where the guard has let us go: else it would arm for us at the next chance."""
    if held.has_release_been_asked or not may_release(sample.guard, held.token):
        return done
    return HandBackWrites((ReleaseLoop(),), replace(held, has_release_been_asked=True))


def has_failed_pv(sample: Sample) -> bool:
    """Whether PV has failed, so that no automatic may be given back onto it."""
    return sample.pv_quality is Quality.BAD or sample.pv_pct is None or not isfinite(sample.pv_pct)


def _pv_failed(as_found: AsFound) -> str:
    return f"PV has failed, so the loop stays in manual instead of {as_found.mode.value}"


def _is_at_home(plan: TestPlan, as_found: AsFound, sample: Sample) -> bool:
    """Whether the output stands in manual where it was found."""
    is_manual = sample.mode is LoopMode.MAN and sample.op_pct is not None
    return is_manual and abs((sample.op_pct or 0.0) - as_found.op_pct) <= plan.limits.op_resolution_pct


def _give_back(plan: TestPlan, as_found: AsFound, held: Held, sample: Sample) -> HandBackStep:
    is_driven = sample.mode is LoopMode.MAN and held.op_pct is not None and sample.op_pct is not None
    if is_driven and not (held.op_pct == as_found.op_pct and _is_at_home(plan, as_found, sample)):
        held, driven = drive(held, as_found.op_pct, sample.op_pct or 0.0)
        return HandBackWrites((driven,), held)
    if sample.mode is not as_found.mode:
        return _give_back_mode(plan, as_found, held, sample)
    if not _is_sp_free(plan, as_found) and has_sp_changed(as_found, sample):
        return _mend_setpoint(as_found, held)
    return _release(held, sample, HandBackDone(HandBackResult.RESTORED, by_hand(as_found)))


def _give_back_mode(plan: TestPlan, as_found: AsFound, held: Held, sample: Sample) -> HandBackStep:
    if has_failed_pv(sample):
        return _release(held, sample, hand_back_overdue(as_found, _pv_failed(as_found)))
    commands: tuple[Command, ...] = ()
    if sample.guard is not None:
        held, alive = claim(held)
        commands = (alive,)
    if plan.sp_tracks_in_manual and as_found.sp_pct is not None:
        commands = (*commands, SetSetpoint(as_found.sp_pct))
    held, asked = ask_mode(held, as_found.mode, sample.mode)
    return HandBackWrites((*commands, asked), held)


def _mend_setpoint(as_found: AsFound, held: Held) -> HandBackStep:
    """Where SP tracked PV up to the change of mode, it is written once more in the mode as found, never fought for."""
    if held.has_sp_been_mended or as_found.sp_pct is None:
        return HandBackWrites((), held)
    return HandBackWrites((SetSetpoint(as_found.sp_pct),), replace(held, has_sp_been_mended=True))


def _release(held: Held, sample: Sample, done: HandBackDone) -> HandBackStep:
    """The token goes last, and is seen to go."""
    if is_released(sample.guard, held.token):
        return done
    return HandBackWrites((ReleaseLoop(),), replace(held, has_release_been_asked=True))
