"""Every interlock at its bound, one step of a float beyond, and at what is no number (S2)."""

from collections.abc import Callable
from dataclasses import replace
from math import inf, nan, nextafter
from typing import Any

import pytest

from autotune.experiment import interlocks as il
from autotune.experiment.cycles import Cycles, RelayCycle
from autotune.experiment.interlocks import OF_A_CYCLE, OF_THE_CLOCK, OF_THE_LOOP, OF_THE_PLC, Interlock, TripCode, View
from autotune.experiment.trace import Trace
from autotune.loop.limits import WatchLimit
from autotune.loop.mode import LoopMode
from autotune.loop.outcome import Trip
from autotune.loop.quality import Quality
from autotune.loop.sample import GuardState, Stamp, WatchReading
from tests.experiment.bench import LIMITS, plan_for
from tests.experiment.readings import found, guard, held, reading, view

EVERY = (*OF_THE_PLC, *OF_THE_LOOP, *OF_THE_CLOCK, *OF_A_CYCLE)


def above(bound: float) -> float:
    return nextafter(bound, inf)


def below(bound: float) -> float:
    return nextafter(bound, -inf)


def code(trip: Trip | None) -> str | None:
    return None if trip is None else trip.code


def limited(**limits: Any) -> View:
    """A view with these limits."""
    return view(plan=plan_for(replace(LIMITS, **limits)))


def test_a_loop_with_which_all_is_well_trips_nothing() -> None:
    assert [code(interlock(view())) for interlock in EVERY] == [None] * len(EVERY)


@pytest.mark.parametrize("pv_pct", [5.0, above(5.0), 40.0, below(95.0), 95.0])
def test_pv_at_its_limits_is_inside(pv_pct: float) -> None:
    assert il.pv_range(view(sample=reading(pv_pct=pv_pct))) is None


@pytest.mark.parametrize("pv_pct", [below(5.0), above(95.0), inf, -inf, nan, None])
def test_pv_beyond_its_limits_trips(pv_pct: float | None) -> None:
    assert code(il.pv_range(view(sample=reading(pv_pct=pv_pct)))) == "PV_RANGE"


def rising(rate_pct_per_s: float) -> Trace:
    """PV on a straight line, which leaves no doubt of its rate."""
    return Trace(recent=tuple((0.5 * k, 40.0 + 0.5 * k * rate_pct_per_s) for k in range(8)))


@pytest.mark.parametrize(
    ("pv_pct", "rate_pct_per_s", "ahead_s", "trips"),
    [
        (93.0, 1.0, 2.0, False),
        (above(93.0), 1.0, 2.0, True),
        (93.0, 1.0, above(95.0) - 93.0, True),
        (7.0, -1.0, 2.0, False),
        (7.0, -1.0, 7.0 - below(5.0), True),
        (93.0, 1.0, 0.0, False),
        (93.0, 1.0, inf, True),
        (93.0, 1.0, nan, True),
        (nan, 1.0, 2.0, True),
    ],
)
def test_pv_must_stay_inside_for_what_is_left_of_the_dead_time(
    pv_pct: float, rate_pct_per_s: float, ahead_s: float, trips: bool
) -> None:
    seen = view(sample=reading(pv_pct=pv_pct), trace=rising(rate_pct_per_s), ahead_s=ahead_s)
    assert code(il.pv_predicted(seen)) == ("PV_PREDICTED" if trips else None)


def test_noise_alone_predicts_nothing() -> None:
    noisy = Trace(recent=tuple((0.1 * k, 40.0 + (0.5 if k % 2 else -0.5)) for k in range(8)))
    assert noisy.sure_rate_pct_per_s == 0.0
    assert il.pv_predicted(view(sample=reading(pv_pct=94.9), trace=noisy, ahead_s=1e6)) is None


@pytest.mark.parametrize(
    ("rate_pct_per_s", "trips"),
    [(3.0, False), (-3.0, False), (above(3.0), True), (below(-3.0), True), (inf, True), (-inf, True), (nan, True)],
)
def test_pv_may_not_move_faster_than_allowed(rate_pct_per_s: float, trips: bool) -> None:
    seen = replace(limited(pv_rate_pct_per_s=3.0), trace=Trace(rate_pct_per_s=rate_pct_per_s))
    assert code(il.pv_rate(seen)) == ("PV_RATE" if trips else None)
    assert il.pv_rate(replace(limited(), trace=Trace(rate_pct_per_s=rate_pct_per_s))) is None


@pytest.mark.parametrize(
    ("pv_pct", "trips"),
    [(48.0, False), (32.0, False), (above(48.0), True), (below(32.0), True), (inf, True), (nan, True), (None, True)],
)
def test_pv_may_not_go_too_far_from_its_reference(pv_pct: float | None, trips: bool) -> None:
    seen = replace(limited(pv_deviation_pct=8.0), sample=reading(pv_pct=pv_pct))
    assert code(il.pv_deviation(replace(seen, reference_pct=40.0))) == ("PV_DEVIATION" if trips else None)
    assert il.pv_deviation(seen) is None, "there is no reference yet"
    assert il.pv_deviation(view(sample=reading(pv_pct=pv_pct), reference_pct=40.0)) is None, "it is switched off"


@pytest.mark.parametrize("quality", list(Quality))
def test_only_a_good_pv_may_feed_a_test(quality: Quality) -> None:
    tripped = code(il.pv_quality(view(sample=reading(pv_quality=quality))))
    assert tripped == (None if quality is Quality.GOOD else "PV_QUALITY")


@pytest.mark.parametrize("pv_pct", [None, nan, inf, -inf])
def test_a_pv_that_is_no_number_is_not_good_whatever_its_status_says(pv_pct: float | None) -> None:
    assert code(il.pv_quality(view(sample=reading(pv_pct=pv_pct)))) == "PV_QUALITY"


@pytest.mark.parametrize(("stood_s", "trips"), [(6.0, False), (above(6.0), True), (inf, True), (nan, True)])
def test_pv_may_not_stand_still_for_longer_than_it_did_at_rest(stood_s: float, trips: bool) -> None:
    stood = Trace(pv_stood_s=stood_s)
    assert code(il.pv_frozen(view(trace=stood, frozen_after_s=6.0))) == ("PV_FROZEN" if trips else None)
    assert il.pv_frozen(view(trace=stood, frozen_after_s=None)) is None


@pytest.mark.parametrize(
    ("changes", "missing"),
    [
        ({"op_pct": None}, "output"),
        ({"op_pct": nan}, "output"),
        ({"op_pct": inf}, "output"),
        ({"op_quality": Quality.BAD}, "output"),
        ({"op_quality": Quality.FORCED}, "output"),
        ({"op_quality": Quality.UNCERTAIN}, "output"),
        ({"mode": LoopMode.NOT_KNOWN}, "mode"),
        ({"sp_pct": None}, "setpoint"),
        ({"sp_pct": nan}, "setpoint"),
        ({"op_pct": None, "mode": LoopMode.NOT_KNOWN}, "output and mode"),
    ],
)
def test_a_reading_without_what_was_read_before_trips(changes: dict[str, Any], missing: str) -> None:
    trip = il.view_incomplete(view(sample=reading(**changes)))
    assert trip is not None
    assert trip.code == "VIEW_INCOMPLETE"
    assert f"no usable {missing};" in trip.text


def test_what_was_never_read_is_not_missed() -> None:
    assert il.view_incomplete(view(sample=reading(sp_pct=None), as_found=found(sp_pct=None))) is None
    assert il.view_incomplete(view(sample=reading(op_quality=Quality.CLAMPED))) is None


def test_a_guard_that_can_no_longer_be_read_trips() -> None:
    assert code(il.view_incomplete(view(plan=plan_for(has_guard=True)))) == "VIEW_INCOMPLETE"
    assert code(il.guard_gave_back(view(is_claimed=True))) == "GUARD_GAVE_BACK"


@pytest.mark.parametrize(
    ("taken_s", "trips"),
    [(99.0, False), (below(99.0), True), (101.0, False), (above(101.0), True), (inf, True), (-inf, True), (nan, True)],
)
def test_a_reading_may_not_be_too_old_nor_from_the_future(taken_s: float, trips: bool) -> None:
    seen = replace(limited(sample_age_s=1.0), sample=reading(taken=Stamp.at(taken_s)))
    assert code(il.sample_stale(seen)) == ("SAMPLE_STALE" if trips else None)


@pytest.mark.parametrize(("stood_s", "trips"), [(1.0, False), (above(1.0), True), (nan, True), (inf, True)])
def test_the_clock_of_the_plc_has_to_go_on(stood_s: float, trips: bool) -> None:
    seen = replace(limited(sample_age_s=1.0), trace=Trace(clock_stood_s=stood_s))
    assert code(il.sample_stale(seen)) == ("SAMPLE_STALE" if trips else None)


@pytest.mark.parametrize(("stood_s", "trips"), [(1.0, False), (above(1.0), True), (nan, True), (inf, True)])
def test_the_heartbeat_has_to_be_echoed_where_there_is_an_echo(stood_s: float, trips: bool) -> None:
    seen = view(as_found=found(guard=guard()), is_claimed=True, trace=Trace(echo_stood_s=stood_s))
    assert code(il.heartbeat_lost(seen)) == ("HEARTBEAT_LOST" if trips else None)
    assert il.heartbeat_lost(replace(seen, as_found=found(guard=guard(heartbeat_echo=None)))) is None
    assert il.heartbeat_lost(replace(seen, is_claimed=False)) is None
    assert il.heartbeat_lost(view(is_claimed=True, trace=Trace(echo_stood_s=stood_s))) is None


@pytest.mark.parametrize(
    ("op_pct", "moved_s", "trips"),
    [
        (50.0, 0.0, False),
        (50.25, 0.0, False),
        (above(50.25), 99.5, False),  # still on its way
        (above(50.25), below(99.5), True),
        (below(49.75), below(99.5), True),
        (60.0, 99.5, False),
        (60.0, 99.0, True),
        (nan, 99.9, False),  # a reading without output is judged elsewhere
        (nan, 99.0, True),
        (60.0, nan, True),
    ],
)
def test_the_output_has_to_come_to_what_was_written(op_pct: float, moved_s: float, trips: bool) -> None:
    seen = replace(limited(op_resolution_pct=0.25, op_move_s=0.5), sample=reading(op_pct=op_pct), moved_s=moved_s)
    assert code(il.op_not_following(seen)) == ("OP_NOT_FOLLOWING" if trips else None)


def test_an_output_that_was_never_driven_has_nothing_to_follow() -> None:
    assert il.op_not_following(view(sample=reading(op_pct=99.0), moved_s=None)) is None
    assert il.op_not_following(view(sample=reading(op_pct=99.0), held=held(op_pct=None))) is None


@pytest.mark.parametrize(("behind_pct", "trips"), [(1.25, False), (1.3, True), (nan, True)])
def test_on_a_ramp_the_output_may_lag_only_as_far_as_its_rate_explains(behind_pct: float, trips: bool) -> None:
    seen = limited(op_resolution_pct=0.05, op_move_s=0.5, op_rate_pct_per_s=2.0)  # 0.05 + 2 (0.5 + 0.1)
    seen = replace(seen, sample=reading(op_pct=50.0 - behind_pct), moved_s=100.0)
    assert code(il.op_not_following(seen)) == ("OP_NOT_FOLLOWING" if trips else None)


PUMP = WatchLimit("pump", 1.0, 1.0, "hot-water pump runs")


@pytest.mark.parametrize(
    ("readings", "trips"),
    [
        ((WatchReading("pump", 1.0, Quality.GOOD),), False),
        ((WatchReading("other", 0.0, Quality.BAD), WatchReading("pump", 1.0, Quality.GOOD)), False),
        ((WatchReading("pump", above(1.0), Quality.GOOD),), True),
        ((WatchReading("pump", below(1.0), Quality.GOOD),), True),
        ((WatchReading("pump", 1.0, Quality.UNCERTAIN),), True),
        ((WatchReading("pump", None, Quality.GOOD),), True),
        ((WatchReading("pump", nan, Quality.GOOD),), True),
        ((), True),
    ],
)
def test_every_condition_of_the_watch_list_has_to_hold(readings: tuple[WatchReading, ...], trips: bool) -> None:
    seen = replace(limited(watch=(PUMP,)), sample=reading(watch=readings))
    trip = il.watch(seen)
    assert code(trip) == ("WATCH" if trips else None)
    assert trip is None or "pump (hot-water pump runs)" in trip.text


@pytest.mark.parametrize(
    ("changes", "tripped"),
    [
        ({}, None),
        ({"holder": None}, None),
        ({"state": GuardState.IDLE}, "GUARD_GAVE_BACK"),
        ({"state": GuardState.GAVE_BACK, "holder": 0}, "GUARD_GAVE_BACK"),
        ({"state": GuardState.NOT_KNOWN}, "GUARD_GAVE_BACK"),
        ({"holder": 0}, "GUARD_GAVE_BACK"),
        ({"holder": 99}, None),  # that is a takeover
    ],
)
def test_once_claimed_the_guard_has_to_stay_armed_for_us(changes: dict[str, Any], tripped: str | None) -> None:
    seen = view(sample=reading(guard=guard(**changes)), is_claimed=True)
    assert code(il.guard_gave_back(seen)) == tripped
    assert il.guard_gave_back(replace(seen, is_claimed=False)) is None


@pytest.mark.parametrize(("is_pressed", "tripped"), [(True, "STOP_PRESSED"), (False, None), (None, None)])
def test_stop_at_the_panel_stops(is_pressed: bool | None, tripped: str | None) -> None:
    assert code(il.stop_pressed(view(sample=reading(guard=guard(is_stop_pressed=is_pressed))))) == tripped


@pytest.mark.parametrize(
    ("found_count", "count", "tripped"),
    [(3, 3, None), (3, 4, "PLC_RESTARTED"), (3, 0, "PLC_RESTARTED"), (3, None, "PLC_RESTARTED"), (None, 4, None)],
)
def test_a_restart_of_the_plc_is_seen(found_count: int | None, count: int | None, tripped: str | None) -> None:
    seen = view(as_found=found(boot_count=found_count), sample=reading(boot_count=count))
    assert code(il.plc_restarted(seen)) == tripped


@pytest.mark.parametrize(("unheard_s", "trips"), [(None, False), (99.5, False), (below(99.5), True), (nan, True)])
def test_an_unheard_write_has_to_show_soon(unheard_s: float | None, trips: bool) -> None:
    assert code(il.write_not_heard(replace(limited(op_move_s=0.5), unheard_s=unheard_s))) == (
        "WRITE_NOT_HEARD" if trips else None
    )


@pytest.mark.parametrize(
    ("interlock", "due", "tripped"),
    [
        (il.link_lost, "view_due_s", "LINK_LOST"),
        (il.take_over_late, "take_over_due_s", "TAKE_OVER_LATE"),
        (il.no_switch, "switch_due_s", "NO_SWITCH"),
        (il.took_too_long, "end_due_s", "TEST_TOO_LONG"),
    ],
)
@pytest.mark.parametrize(
    ("due_s", "has_come"), [(None, False), (above(100.0), False), (100.0, True), (99.0, True), (nan, True)]
)
def test_a_deadline_trips_when_it_comes(
    interlock: Interlock, due: str, tripped: str, due_s: float | None, has_come: bool
) -> None:
    assert code(interlock(view(**{due: due_s}))) == (tripped if has_come else None)


def test_without_a_view_an_unheard_write_is_what_matters() -> None:
    assert code(il.link_lost(view(view_due_s=100.0, unheard_s=99.0))) == "WRITE_NOT_HEARD"


@pytest.mark.parametrize(
    ("wrong_for_s", "at_most_s", "trips"),
    [
        (0.0, 0.0, False),
        (3.0, 3.0, False),
        (above(3.0), 3.0, True),
        (inf, 3.0, True),
        (nan, 3.0, True),
        (1.0, nan, True),
    ],
)
def test_pv_may_not_stay_on_the_wrong_side(wrong_for_s: float, at_most_s: float, trips: bool) -> None:
    seen = view(wrong_for_s=wrong_for_s, wrong_at_most_s=at_most_s)
    assert code(il.wrong_sign(seen)) == ("WRONG_SIGN" if trips else None)


def usable(*means_pct: float) -> Cycles:
    return Cycles(whole=tuple(RelayCycle(0.0, 4.0, 2.0, mean_pct, 5.0, is_usable=True) for mean_pct in means_pct))


@pytest.mark.parametrize(
    ("means_pct", "trips"),
    [((40.0,), False), ((40.0, 41.0), False), ((41.0, 40.0), False), ((40.0, 41.1), True), ((40.0, nan), True)],
)
def test_the_mean_of_pv_may_not_drift(means_pct: tuple[float, ...], trips: bool) -> None:
    seen = replace(limited(drift_pct_per_s=0.25), cycles=usable(*means_pct))
    assert code(il.drift(seen)) == ("DRIFT" if trips else None)
    assert il.drift(view(cycles=usable(*means_pct))) is None, "it is switched off"


def test_running_out_of_cycles_trips_only_while_they_are_not_enough_for_findings() -> None:
    unusable = Cycles(whole=(RelayCycle(0.0, 4.0, 2.0, 40.0, 5.0, is_usable=False),) * 3)
    assert il.too_many_cycles(replace(limited(cycles_at_most=4), cycles=unusable)) is None
    assert code(il.too_many_cycles(replace(limited(cycles_at_most=3), cycles=unusable))) == "TOO_MANY_CYCLES"
    assert il.too_many_cycles(replace(limited(cycles_at_most=2), cycles=usable(1.0, 1.0))) is None
    assert il.took_too_long(view(end_due_s=0.0, cycles=usable(1.0, 1.0))) is None


@pytest.mark.parametrize("found_nan", [nan, inf, -inf])
@pytest.mark.parametrize(
    "poison",
    [
        lambda bad: view(sample=reading(pv_pct=bad)),
        lambda bad: view(sample=reading(op_pct=bad)),
        lambda bad: view(sample=reading(sp_pct=bad)),
        lambda bad: view(sample=reading(taken=Stamp.at(bad))),
        lambda bad: view(ahead_s=bad, trace=rising(1.0)),
        lambda bad: view(wrong_for_s=abs(bad)),
    ],
)
def test_what_is_no_number_trips_something_wherever_it_stands(
    poison: Callable[[float], View], found_nan: float
) -> None:
    assert il.first_trip(poison(found_nan), EVERY) is not None


@pytest.mark.parametrize("trip_code", list(TripCode))
def test_every_code_says_what_it_means_and_what_to_do(trip_code: TripCode) -> None:
    assert trip_code.name == trip_code.name.upper()
    assert trip_code.meaning
    assert trip_code.remedy
    trip = il.to_trip(trip_code, "figures", 3.0)
    assert (trip.code, trip.t_s) == (trip_code.name, 3.0)
    assert trip.text == f"{trip_code.meaning}: figures; {trip_code.remedy}"


def test_no_two_codes_mean_the_same() -> None:
    assert len({trip_code.meaning for trip_code in TripCode}) == len(TripCode) == len(TripCode.__members__)
