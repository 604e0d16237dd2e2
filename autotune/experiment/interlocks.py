"""When a test stops by itself (S2): a list of pure functions ``(view) -> Trip | None``, and the one list of codes.

Every comparison is written so that NaN trips: what must hold is asked for, and anything else is a trip.
"""

from collections.abc import Callable
from dataclasses import dataclass, field
from enum import Enum
from math import isfinite

from autotune.experiment.cycles import Cycles
from autotune.experiment.deadlines import has_come
from autotune.experiment.held import Held, is_ours
from autotune.experiment.plan import TestPlan
from autotune.experiment.trace import Trace
from autotune.loop.limits import AsFound, Limits
from autotune.loop.mode import LoopMode
from autotune.loop.outcome import Trip
from autotune.loop.quality import Quality
from autotune.loop.sample import Sample, WatchReading

WRONG_SIDE_HYSTERESES = 3.0
"""PV is on the wrong side when it is there by more than this many half-widths of the hysteresis."""

FREE_CLAMPS = frozenset({Quality.GOOD, Quality.SUSPECT, Quality.CLAMPED})
"""Qualities of OP that still are a reading: an output at an end of its range is a fact, not a fault."""


class TripCode(Enum):
    """Every reason to stop, with what it means and what to do next; texts may change, codes don't."""

    PV_RANGE = ("PV left the limits of the test", "let PV settle; widen the limits or make the steps smaller")
    PV_PREDICTED = ("PV would leave its limits within the dead time", "make the steps smaller")
    PV_RATE = ("PV moved faster than allowed", "look for a spike or a faulty transmitter; check the limit")
    PV_DEVIATION = ("PV went too far from where it rested", "make the steps smaller, or start at a quieter time")
    PV_QUALITY = ("PV is not good, or somebody forces it", "check the transmitter and remove the forcing")
    PV_FROZEN = ("PV has stood still longer than it did at rest", "check the transmitter and the PLC's input")
    VIEW_INCOMPLETE = ("a reading lacks output, setpoint, mode or guard", "check the tags with 'autotune check'")
    SAMPLE_STALE = (
        "a reading is too old, or the PLC's clock stands",
        "check that the PLC runs and the network is quick",
    )
    HEARTBEAT_LOST = ("the PLC no longer echoes our heartbeat", "check that the PLC is in run")
    LINK_LOST = ("the loop could not be seen any more", "check cable, switch and controller")
    OP_NOT_FOLLOWING = ("the output did not come to what was written", "check mode, clamps and rate of the block")
    WATCH = ("a condition outside the loop no longer holds", "put the plant back into the state that the test needs")
    GUARD_GAVE_BACK = (
        "the PLC's guard is no longer armed",
        "read why at the panel; the loop was given back by the PLC",
    )
    STOP_PRESSED = ("stop was pressed at the plant's own panel", "ask the person who pressed it")
    PLC_RESTARTED = ("the PLC restarted or was downloaded", "check the loop by hand; nothing more is written")
    TAKE_OVER_LATE = ("the loop did not come to manual, or the guard not to us, in time", "check enable and mode")
    NO_SWITCH = ("PV did not cross its reference in time", "check that the output moves the plant; larger steps")
    WRONG_SIGN = ("PV went the wrong way", "check the action (direct or reverse) of the loop")
    TEST_TOO_LONG = ("the test took longer than allowed, without enough whole cycles", "allow more time")
    TOO_MANY_CYCLES = ("the cycles ran out before enough of them were usable", "allow more cycles, or fit the steps")
    DRIFT = ("the mean of PV drifts", "start at a quieter time")
    TICKS_MISSED = ("we could not keep our scan", "use a less loaded computer")
    OPERATOR_ABORT = ("a person ended the test", "nothing; the loop is handed back")
    WRITE_REFUSED = ("the controller refused a write", "check access rights and the range of the tag")
    WRITE_NOT_HEARD = ("a write was not answered and can't be seen to have landed", "check the network")

    @property
    def meaning(self) -> str:
        """What has happened."""
        return self.value[0]

    @property
    def remedy(self) -> str:
        """What to do next."""
        return self.value[1]


@dataclass(frozen=True, slots=True)
class View:
    """What the interlocks look at: the reading just taken and what the test knows.

    Before the relay starts ``hysteresis_pct`` and ``reference_pct`` are ``None``.  ``rise_pct`` is PV above the
    reference on the side to which the output now pushes it; ``ahead_s`` is how long PV would run on if the output
    turned now; ``wrong_for_s`` how long PV has been on the wrong side, ``wrong_at_most_s`` how long that may be.
    ``moved_s`` is when the output last moved, ``unheard_s`` when a write went unheard that no reading has shown.
    ``view_due_s``, ``take_over_due_s``, ``switch_due_s`` and ``end_due_s`` are deadlines, ``None`` where none runs.
    """

    t_s: float
    plan: TestPlan
    sample: Sample
    as_found: AsFound
    held: Held
    trace: Trace
    is_claimed: bool = False
    moved_s: float | None = None
    unheard_s: float | None = None
    frozen_after_s: float | None = None
    reference_pct: float | None = None
    ahead_s: float = 0.0
    view_due_s: float | None = None
    take_over_due_s: float | None = None
    switch_due_s: float | None = None
    end_due_s: float | None = None
    wrong_for_s: float = 0.0
    wrong_at_most_s: float = 0.0
    cycles: Cycles = field(default=Cycles())

    @property
    def limits(self) -> Limits:
        """The limits of the test."""
        return self.plan.limits

    @property
    def pv_pct(self) -> float:
        """PV, or NaN where it is not known, so that every comparison fails."""
        return self.sample.pv_pct if self.sample.pv_pct is not None else float("nan")

    @property
    def op_pct(self) -> float:
        """OP, or NaN where it is not known, so that every comparison fails."""
        return self.sample.op_pct if self.sample.op_pct is not None else float("nan")

    def trip(self, code: TripCode, detail: str) -> Trip:
        """A trip of this code, now."""
        return to_trip(code, detail, self.t_s)


Interlock = Callable[[View], Trip | None]


def to_trip(code: TripCode, detail: str, t_s: float) -> Trip:
    """A trip with the code's own words and the figures behind it."""
    return Trip(code.name, f"{code.meaning}: {detail}; {code.remedy}", t_s)


def plc_restarted(view: View) -> Trip | None:
    """The PLC's count of restarts is the one found, or it has none."""
    found = view.as_found.boot_count
    if found is None or view.sample.boot_count == found:
        return None
    return view.trip(TripCode.PLC_RESTARTED, f"restart count {view.sample.boot_count} instead of {found}")


def guard_gave_back(view: View) -> Trip | None:
    """Once claimed, the guard stays armed; a holder other than us and none is a takeover and judged there."""
    guard = view.sample.guard
    if not view.is_claimed or (guard is not None and is_ours(guard, view.held.token)):
        return None
    if guard is not None and guard.holder not in (None, 0, view.held.token):
        return None
    state = "not readable" if guard is None else f"{guard.state.value}, held by {guard.holder}"
    return view.trip(TripCode.GUARD_GAVE_BACK, f"the guard is {state}")


def stop_pressed(view: View) -> Trip | None:
    """Nobody presses stop."""
    guard = view.sample.guard
    if guard is None or guard.is_stop_pressed is not True:
        return None
    return view.trip(TripCode.STOP_PRESSED, "the stop input is on")


def view_incomplete(view: View) -> Trip | None:
    """Output, setpoint, mode and guard are read wherever they were read before."""
    sample = view.sample
    missing = [
        name
        for name, is_there in (
            ("output", isfinite(view.op_pct) and sample.op_quality in FREE_CLAMPS),
            ("mode", sample.mode is not LoopMode.NOT_KNOWN),
            ("setpoint", view.as_found.sp_pct is None or (sample.sp_pct is not None and isfinite(sample.sp_pct))),
            ("guard", not view.plan.has_guard or sample.guard is not None),
        )
        if not is_there
    ]
    return view.trip(TripCode.VIEW_INCOMPLETE, f"no usable {' and '.join(missing)}") if missing else None


def sample_stale(view: View) -> Trip | None:
    """The reading is young enough, and the PLC's clock goes on."""
    age_s = view.t_s - view.sample.taken.earliest_s
    if not abs(age_s) <= view.limits.sample_age_s:
        return view.trip(TripCode.SAMPLE_STALE, f"PV was sampled {age_s:.3f} s ago")
    stood_s = view.trace.clock_stood_s
    if not stood_s <= view.limits.sample_age_s:
        return view.trip(TripCode.SAMPLE_STALE, f"the PLC's clock has stood for {stood_s:.3f} s")
    return None


def pv_quality(view: View) -> Trip | None:
    """PV is good."""
    if view.sample.pv_quality is Quality.GOOD and isfinite(view.pv_pct):
        return None
    return view.trip(TripCode.PV_QUALITY, f"PV is {view.sample.pv_quality.value}")


def pv_range(view: View) -> Trip | None:
    """PV is inside its limits."""
    if view.limits.pv_low_pct <= view.pv_pct <= view.limits.pv_high_pct:
        return None
    return view.trip(TripCode.PV_RANGE, f"{_band(view.pv_pct, view.limits)}")


def pv_predicted(view: View) -> Trip | None:
    """PV stays inside its limits even if it goes on at its rate for what is left of the dead time.

    The rate is lowered by two of its standard deviations, so that noise alone predicts nothing.
    """
    predicted_pct = view.pv_pct + view.trace.sure_rate_pct_per_s * view.ahead_s
    if view.limits.pv_low_pct <= predicted_pct <= view.limits.pv_high_pct:
        return None
    return view.trip(TripCode.PV_PREDICTED, f"in {view.ahead_s:.2f} s {_band(predicted_pct, view.limits)}")


def pv_rate(view: View) -> Trip | None:
    """PV moves no faster than allowed from one reading to the next."""
    limit = view.limits.pv_rate_pct_per_s
    if limit is None or abs(view.trace.rate_pct_per_s) <= limit:
        return None
    return view.trip(TripCode.PV_RATE, f"{view.trace.rate_pct_per_s:.3f} %/s against {limit:.3f} %/s")


def pv_deviation(view: View) -> Trip | None:
    """PV stays near its reference."""
    limit_pct = view.limits.pv_deviation_pct
    if limit_pct is None or view.reference_pct is None or abs(view.pv_pct - view.reference_pct) <= limit_pct:
        return None
    return view.trip(TripCode.PV_DEVIATION, f"PV {view.pv_pct:.2f} %, reference {view.reference_pct:.2f} %")


def pv_frozen(view: View) -> Trip | None:
    """PV does not stand still for longer than it may."""
    if view.frozen_after_s is None or view.trace.pv_stood_s <= view.frozen_after_s:
        return None
    return view.trip(TripCode.PV_FROZEN, f"no change for {view.trace.pv_stood_s:.2f} s")


def watch(view: View) -> Trip | None:
    """Every condition outside the loop is read, good and inside its limits."""
    detail = first_watch_fault(view.limits, view.sample)
    return None if detail is None else view.trip(TripCode.WATCH, detail)


def first_watch_fault(limits: Limits, sample: Sample) -> str | None:
    """The first watch entry that does not hold, in words."""
    readings = {reading.name: reading for reading in sample.watch}
    for limit in limits.watch:
        reading = readings.get(limit.name, WatchReading(limit.name, None, Quality.BAD))
        reading_eu = reading.reading_eu if reading.reading_eu is not None else float("nan")
        if not (reading.quality is Quality.GOOD and limit.low_eu <= reading_eu <= limit.high_eu):
            meaning = f" ({limit.meaning})" if limit.meaning else ""
            wanted = f"{limit.low_eu:g} .. {limit.high_eu:g} wanted"
            return f"{limit.name}{meaning} reads {reading.reading_eu} ({reading.quality.value}), {wanted}"
    return None


def heartbeat_lost(view: View) -> Trip | None:
    """The PLC echoes our heartbeat, where it was seen to offer an echo."""
    found = view.as_found.sample.guard
    has_echo = view.is_claimed and found is not None and found.heartbeat_echo is not None
    if not has_echo or view.trace.echo_stood_s <= view.limits.heartbeat_s:
        return None
    return view.trip(TripCode.HEARTBEAT_LOST, f"no new echo for {view.trace.echo_stood_s:.2f} s")


def op_not_following(view: View) -> Trip | None:
    """The output is where it was written to, or has not had the time to come there."""
    if view.held.op_pct is None or view.moved_s is None:
        return None
    off_pct = abs(view.op_pct - view.held.op_pct)
    resolution_pct = view.limits.op_resolution_pct
    rate = view.limits.op_rate_pct_per_s
    behind_pct = resolution_pct + (rate * (view.limits.op_move_s + view.plan.scan_s) if rate is not None else 0.0)
    is_late = not view.t_s - view.moved_s <= view.limits.op_move_s
    if off_pct <= resolution_pct or (not is_late and (rate is None or off_pct <= behind_pct)):
        return None
    return view.trip(TripCode.OP_NOT_FOLLOWING, f"output {view.op_pct:.2f} %, written {view.held.op_pct:.2f} %")


def write_not_heard(view: View) -> Trip | None:
    """A write that was not answered shows in a reading soon."""
    if view.unheard_s is None or view.t_s - view.unheard_s <= view.limits.op_move_s:
        return None
    return view.trip(TripCode.WRITE_NOT_HEARD, f"not seen for {view.t_s - view.unheard_s:.2f} s")


def link_lost(view: View) -> Trip | None:
    """A reading comes in time; where a write went unheard before, that is what matters."""
    if not has_come(view.view_due_s, view.t_s):
        return None
    code = TripCode.LINK_LOST if view.unheard_s is None else TripCode.WRITE_NOT_HEARD
    return view.trip(code, f"no reading came by {view.t_s:.2f} s")


def take_over_late(view: View) -> Trip | None:
    """Guard and manual come to us in time."""
    if not has_come(view.take_over_due_s, view.t_s):
        return None
    return view.trip(TripCode.TAKE_OVER_LATE, f"longer than {view.plan.take_over_within_s:.1f} s")


def took_too_long(view: View) -> Trip | None:
    """The test ends in time; with enough cycles for findings that is a good end."""
    if not has_come(view.end_due_s, view.t_s) or view.cycles.has_enough_for_findings:
        return None
    return view.trip(TripCode.TEST_TOO_LONG, f"{len(view.cycles.usable)} usable cycles")


def no_switch(view: View) -> Trip | None:
    """The relay switches in time."""
    if not has_come(view.switch_due_s, view.t_s):
        return None
    return view.trip(TripCode.NO_SWITCH, f"no switch for {view.limits.switch_within_s:.1f} s")


def wrong_sign(view: View) -> Trip | None:
    """PV does not stay on the wrong side for longer than inverse response and dead time explain."""
    if view.wrong_for_s <= view.wrong_at_most_s:
        return None
    return view.trip(TripCode.WRONG_SIGN, f"on the wrong side for {view.wrong_for_s:.2f} s")


def drift(view: View) -> Trip | None:
    """PV's mean stays from one usable cycle to the next."""
    limit, slope = view.limits.drift_pct_per_s, view.cycles.drift_pct_per_s
    if limit is None or slope is None or abs(slope) <= limit:
        return None
    return view.trip(TripCode.DRIFT, f"{slope:.4f} %/s against {limit:.4f} %/s")


def too_many_cycles(view: View) -> Trip | None:
    """There are cycles left; with enough of them usable that is a good end."""
    if len(view.cycles.whole) < view.limits.cycles_at_most or view.cycles.has_enough_for_findings:
        return None
    return view.trip(TripCode.TOO_MANY_CYCLES, f"{len(view.cycles.whole)} cycles, {len(view.cycles.usable)} usable")


def _band(pv_pct: float, limits: Limits) -> str:
    return f"PV {pv_pct:.2f} %, limits {limits.pv_low_pct:.2f} .. {limits.pv_high_pct:.2f} %"


OF_THE_PLC: tuple[Interlock, ...] = (plc_restarted, stop_pressed, guard_gave_back)
"""Judged before whose loop it is: what the PLC itself did to the loop is nobody's takeover."""

OF_THE_CLOCK: tuple[Interlock, ...] = (link_lost, take_over_late, took_too_long, no_switch)
"""Judged on every sample, and when a deadline comes without one."""

OF_THE_LOOP: tuple[Interlock, ...] = (
    view_incomplete,
    sample_stale,
    pv_quality,
    pv_range,
    pv_rate,
    pv_predicted,
    pv_deviation,
    pv_frozen,
    watch,
    heartbeat_lost,
    op_not_following,
    write_not_heard,
    wrong_sign,
)
"""Judged on every sample of a touched loop."""

OF_A_CYCLE: tuple[Interlock, ...] = (drift, too_many_cycles)
"""Judged whenever a cycle has been completed."""


def first_trip(view: View, interlocks: tuple[Interlock, ...]) -> Trip | None:
    """The first interlock that fires; ``None`` when all hold."""
    return next((trip for interlock in interlocks if (trip := interlock(view)) is not None), None)
