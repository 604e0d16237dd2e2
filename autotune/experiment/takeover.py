"""Whose loop it is: has a person, a sequence or the plant taken it while we held it?"""

from math import isfinite

from autotune.experiment.held import Held, expected_modes
from autotune.experiment.plan import TestPlan
from autotune.loop.limits import AsFound
from autotune.loop.mode import LoopMode
from autotune.loop.sample import Sample

SP_SAME_PCT = 0.01
"""Setpoints closer than this are the same one: rounding of a 32-bit float in any engineering unit."""


def sign_of_takeover(plan: TestPlan, as_found: AsFound, held: Held, sample: Sample) -> str | None:
    """What shows that the loop is somebody else's now, in words; ``None`` while it may be ours.

    What could not be read is no sign: an interlock deals with it.
    """
    if sample.guard is not None and sample.guard.holder not in (None, 0, held.token):
        return f"the PLC's guard is held by token {sample.guard.holder}, not by ours"
    expected = expected_modes(held, as_found)
    if sample.mode is not LoopMode.NOT_KNOWN and sample.mode not in expected:
        return f"the mode is {sample.mode.value} though {' or '.join(mode.value for mode in expected)} was expected"
    if not plan.sp_tracks_in_manual and has_sp_changed(as_found, sample):
        return f"the setpoint is {sample.sp_pct:.2f} % though it was found at {as_found.sp_pct:.2f} %"
    return _sign_in_output(plan, as_found, held, sample)


def has_sp_changed(as_found: AsFound, sample: Sample) -> bool:
    """Whether both setpoints are known and differ."""
    return (
        as_found.sp_pct is not None
        and sample.sp_pct is not None
        and isfinite(sample.sp_pct)
        and abs(sample.sp_pct - as_found.sp_pct) > SP_SAME_PCT
    )


def _sign_in_output(plan: TestPlan, as_found: AsFound, held: Held, sample: Sample) -> str | None:
    if sample.mode is not LoopMode.MAN or sample.op_pct is None or not isfinite(sample.op_pct):
        return None
    resolution_pct = plan.limits.op_resolution_pct
    if held.op_pct is None:
        is_foreign = as_found.mode is LoopMode.MAN and not abs(sample.op_pct - as_found.op_pct) <= resolution_pct
        return _foreign_output(sample.op_pct, as_found.op_pct) if is_foreign else None
    if held.has_op_in_reach(sample.op_pct, resolution_pct):
        return None
    return _foreign_output(sample.op_pct, held.op_pct)


def _foreign_output(op_pct: float, expected_pct: float) -> str:
    return f"the output is {op_pct:.2f} %, which nothing of ours explains: {expected_pct:.2f} % was expected"
