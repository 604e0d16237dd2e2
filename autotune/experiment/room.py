"""How far the output may go in a test (S1)."""

from dataclasses import dataclass

from autotune.loop.limits import AsFound, Limits


@dataclass(frozen=True, slots=True)
class Room:
    """How far the output may move up and down from as found, in percent of span; neither is negative."""

    up_pct: float
    down_pct: float


def allowed_op_pct(limits: Limits, as_found: AsFound) -> tuple[float, float]:
    """The lowest and highest output that a test may ask for, in percent of span; as found is always inside."""
    low_pct = max(as_found.op_pct - limits.step_down_pct, limits.op_low_pct)
    high_pct = min(as_found.op_pct + limits.step_up_pct, limits.op_high_pct)
    return min(low_pct, as_found.op_pct), max(high_pct, as_found.op_pct)


def room_of(limits: Limits, as_found: AsFound) -> Room:
    """The room around the output as found."""
    low_pct, high_pct = allowed_op_pct(limits, as_found)
    return Room(up_pct=high_pct - as_found.op_pct, down_pct=as_found.op_pct - low_pct)


def clamped_op_pct(limits: Limits, as_found: AsFound, op_pct: float) -> float:
    """``op_pct`` moved into what a test may ask for."""
    low_pct, high_pct = allowed_op_pct(limits, as_found)
    return min(max(op_pct, low_pct), high_pct)


def next_op_pct(limits: Limits, as_found: AsFound, held_pct: float, wanted_pct: float, moving_s: float) -> float:
    """The next output on the way to ``wanted_pct``: inside the room, and no faster than the loop's rate allows.

    ``moving_s`` is the time in which this move may be made.
    """
    wanted_pct = clamped_op_pct(limits, as_found, wanted_pct)
    if limits.op_rate_pct_per_s is None:
        return wanted_pct
    reach_pct = limits.op_rate_pct_per_s * max(moving_s, 0.0)
    if abs(wanted_pct - held_pct) <= reach_pct:
        return wanted_pct
    return held_pct + (reach_pct if wanted_pct > held_pct else -reach_pct)
