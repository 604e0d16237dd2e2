"""The guard of the PLC, scan by scan.  The same logic stands in Structured Text."""

from dataclasses import replace
from math import inf, nan

import pytest
from hypothesis import given
from hypothesis import strategies as st

from simulator.guard import Guard, GuardInputs, GuardLimits, GuardState, GuardWrites

NOTHING = GuardWrites()
MAN, AUTO, CAS = 0, 1, 2
TOKEN, OTHER_TOKEN = 777, 888
LIMITS = GuardLimits(op_low_pct=10.0, op_high_pct=90.0, pv_low_eu=40.0, pv_high_eu=95.0, timeout_s=2.0, enable_s=900.0)
REST = GuardInputs(
    clock_ms=0,
    is_enable_pressed=False,
    is_stop_pressed=False,
    holder_request=0,
    heartbeat=0,
    sequence=0,
    op_request_pct=0.0,
    pv_eu=78.0,
    is_pv_failed=False,
    op_pct=45.0,
    sp_eu=78.0,
    mode=AUTO,
)


class Bench:
    """A guard and the block it writes into, scanned every 50 ms."""

    def __init__(self, clock_ms: int = 0, **changes: object) -> None:
        self.guard = Guard(LIMITS)
        self.seen = replace(REST, clock_ms=clock_ms, **changes)  # type: ignore[arg-type]  # a test's own words
        self.guard.scan(self.seen)

    def scan(self, **changes: object) -> GuardWrites:
        """One scan later with these changes; the block obeys what the guard writes."""
        clock_ms = (self.seen.clock_ms + 50) % 2**32
        self.seen = replace(self.seen, **{"clock_ms": clock_ms, **changes})  # type: ignore[arg-type]  # as above
        writes = self.guard.scan(self.seen)
        obeyed = {"op_pct": writes.op_pct, "sp_eu": writes.sp_eu, "mode": writes.mode}
        self.seen = replace(self.seen, **{name: wish for name, wish in obeyed.items() if wish is not None})  # type: ignore[arg-type]  # as above
        return writes

    def enable(self) -> None:
        self.scan(is_enable_pressed=True)
        self.scan(is_enable_pressed=False)

    def arm(self) -> None:
        self.enable()
        self.scan(holder_request=TOKEN, heartbeat=1, sequence=5)
        assert self.guard.state is GuardState.ARMED

    def move(self, op_pct: float) -> GuardWrites:
        """What a healthy holder writes: token, new heartbeat, next sequence number and its wish."""
        return self.scan(
            holder_request=TOKEN,
            heartbeat=(self.seen.heartbeat + 1) % 65536,
            sequence=(self.seen.sequence + 1) % 65536,
            op_request_pct=op_pct,
        )


def moved_bench() -> Bench:
    """Armed from AUTO at 45 %, taken to manual and moved to 55 %."""
    bench = Bench()
    bench.arm()
    bench.scan(mode=MAN)
    assert bench.move(55.0) == GuardWrites(op_pct=55.0)
    return bench


def test_the_first_scan_writes_nothing_and_believes_nothing() -> None:
    guard = Guard(LIMITS)
    assert guard.scan(replace(REST, is_enable_pressed=True, holder_request=TOKEN, heartbeat=9)) == NOTHING
    assert guard.heartbeat_echo == 9
    # the button is still pressed: no edge, no permission
    guard.scan(replace(REST, clock_ms=50, is_enable_pressed=True, holder_request=TOKEN))
    assert (guard.is_enabled, guard.holder) == (False, 0)


def test_the_heartbeat_is_echoed_in_every_scan_and_state() -> None:
    bench = Bench()
    for heartbeat in (3, 4, 65535):
        bench.scan(heartbeat=heartbeat)
        assert bench.guard.heartbeat_echo == heartbeat


@pytest.mark.parametrize(
    ("is_enabled", "is_stopped", "token", "is_armed"),
    [
        (True, False, TOKEN, True),
        (False, False, TOKEN, False),
        (True, True, TOKEN, False),
        (True, False, 0, False),
    ],
)
def test_a_loop_is_lent_only_when_enabled_not_stopped_and_asked_for(
    is_enabled: bool, is_stopped: bool, token: int, is_armed: bool
) -> None:
    bench = Bench()
    if is_enabled:
        bench.enable()
    assert bench.scan(holder_request=token, is_stop_pressed=is_stopped) == NOTHING
    assert (bench.guard.state is GuardState.ARMED) == is_armed
    assert bench.guard.holder == (token if is_armed else 0)
    assert bench.guard.is_test_active == is_armed


def test_the_permission_lasts_for_its_time_and_no_longer() -> None:
    bench = Bench()
    bench.enable()
    granted_ms = bench.seen.clock_ms - 50
    bench.scan(clock_ms=granted_ms + 900_000)
    assert bench.guard.is_enabled
    bench.scan(clock_ms=granted_ms + 900_001, holder_request=TOKEN)
    assert (bench.guard.is_enabled, bench.guard.holder) == (False, 0)


def test_an_expired_permission_does_not_end_a_running_test() -> None:
    bench = moved_bench()
    for _ in range(3):
        bench.scan(clock_ms=bench.seen.clock_ms + 400_000, heartbeat=bench.seen.heartbeat + 1)
    assert not bench.guard.is_enabled
    assert bench.guard.state is GuardState.ARMED


def test_the_holder_lets_go_and_nothing_is_written() -> None:
    bench = moved_bench()
    assert bench.scan(holder_request=0) == NOTHING
    assert bench.guard.state is GuardState.IDLE
    assert bench.guard.holder == 0
    assert not bench.guard.is_test_active
    assert not bench.guard.is_alarm
    assert bench.guard.is_enabled


def test_a_move_takes_effect_in_the_scan_that_sees_it_and_is_stamped_and_counted() -> None:
    bench = moved_bench()
    first_ms = bench.seen.clock_ms
    assert (bench.guard.op_effect_ms, bench.guard.op_effect_count) == (first_ms, 1)
    assert bench.scan() == NOTHING
    assert (bench.guard.op_effect_ms, bench.guard.op_effect_count) == (first_ms, 1)
    assert bench.move(35.0) == GuardWrites(op_pct=35.0)
    assert (bench.guard.op_effect_ms, bench.guard.op_effect_count) == (first_ms + 100, 2)


@pytest.mark.parametrize(
    ("last", "sequence", "is_passed_on"),
    [
        (5, 6, True),
        (5, 5, False),
        (5, 4, False),
        (65535, 0, True),
        (65535, 32766, True),
        (65535, 32767, False),
        (0, 32767, True),
        (0, 32768, False),
        (0, 65535, False),
        (40000, 7000, True),
    ],
)
def test_only_a_newer_sequence_number_is_passed_on(last: int, sequence: int, is_passed_on: bool) -> None:
    bench = Bench(mode=MAN)
    bench.enable()
    bench.scan(holder_request=TOKEN, sequence=last)
    writes = bench.scan(sequence=sequence, op_request_pct=50.0)
    assert writes == (GuardWrites(op_pct=50.0) if is_passed_on else NOTHING)


@pytest.mark.parametrize("wish_pct", [9.999, 90.001, -inf, inf, nan, -5.0, 1e30])
def test_a_wish_outside_the_guards_own_limits_is_dropped_and_used_up(wish_pct: float) -> None:
    bench = moved_bench()
    assert bench.move(wish_pct) == NOTHING
    assert bench.guard.op_effect_count == 1
    # the same number with a mended wish is no newer
    assert bench.scan(op_request_pct=50.0) == NOTHING


@pytest.mark.parametrize("wish_pct", [10.0, 90.0])
def test_the_limits_themselves_may_be_reached(wish_pct: float) -> None:
    assert moved_bench().move(wish_pct) == GuardWrites(op_pct=wish_pct)


def test_a_wish_in_automatic_is_used_up_and_never_waits_for_manual() -> None:
    bench = Bench()
    bench.arm()
    assert bench.move(55.0) == NOTHING
    assert bench.scan(mode=MAN) == NOTHING


def test_a_foreign_token_moves_nothing_and_keeps_nothing_alive() -> None:
    bench = moved_bench()
    writes = [
        bench.scan(holder_request=OTHER_TOKEN, heartbeat=n, sequence=50 + n, op_request_pct=60.0) for n in range(60)
    ]
    assert GuardWrites(op_pct=60.0) not in writes
    assert bench.guard.state is GuardState.GAVE_BACK
    assert writes.count(GuardWrites(45.0, 78.0, AUTO)) == 1


def scans_until_given_back(bench: Bench) -> tuple[int, GuardWrites]:
    for number in range(1, 1000):
        writes = bench.scan()
        if bench.guard.state is GuardState.GAVE_BACK:
            return number, writes
    raise AssertionError("never given back")


def test_without_a_new_heartbeat_the_loop_is_given_back_as_found() -> None:
    bench = moved_bench()
    number, writes = scans_until_given_back(bench)
    assert number == 41  # the first scan later than 2.0 s
    assert writes == GuardWrites(op_pct=45.0, sp_eu=78.0, mode=AUTO)
    assert bench.guard.is_alarm
    assert bench.guard.holder == 0
    assert not bench.guard.is_test_active
    assert not bench.guard.is_enabled


def test_the_timeout_holds_across_the_wrap_of_the_clock() -> None:
    bench = Bench(clock_ms=2**32 - 1000, mode=MAN)
    bench.arm()
    bench.move(50.0)
    number, writes = scans_until_given_back(bench)
    assert number == 41
    assert writes == GuardWrites(45.0, 78.0, MAN)


@pytest.mark.parametrize(
    "change",
    [
        {"is_stop_pressed": True},
        {"pv_eu": 95.001},
        {"pv_eu": 39.999},
        {"pv_eu": inf},
        {"pv_eu": -inf},
        {"pv_eu": nan},
    ],
)
def test_stop_or_pv_out_of_limits_gives_back_in_the_same_scan(change: dict[str, object]) -> None:
    bench = moved_bench()
    assert bench.scan(**change) == GuardWrites(45.0, 78.0, AUTO)
    assert bench.guard.state is GuardState.GAVE_BACK


@pytest.mark.parametrize("pv_eu", [40.0, 95.0])
def test_pv_at_its_limits_is_still_inside(pv_eu: float) -> None:
    bench = moved_bench()
    bench.scan(pv_eu=pv_eu)
    assert bench.guard.state is GuardState.ARMED


def test_onto_a_failed_pv_automatic_is_not_given_back() -> None:
    bench = moved_bench()
    assert bench.scan(pv_eu=nan, is_pv_failed=True) == GuardWrites(45.0, 78.0, MAN)


def test_a_late_heartbeat_and_a_wish_in_the_same_scan_give_back_only() -> None:
    bench = moved_bench()
    assert bench.scan(is_stop_pressed=True, sequence=bench.seen.sequence + 1, op_request_pct=60.0) == GuardWrites(
        45.0, 78.0, AUTO
    )


@pytest.mark.parametrize("taken", [{"mode": AUTO}, {"mode": CAS}, {"op_pct": 55.001}, {"op_pct": nan}])
def test_a_loop_that_a_person_has_taken_is_theirs(taken: dict[str, object]) -> None:
    bench = moved_bench()
    bench.scan(**taken)
    assert bench.scan(is_stop_pressed=True) == NOTHING
    assert bench.guard.state is GuardState.GAVE_BACK
    assert bench.guard.is_alarm


def test_a_move_that_meets_a_persons_output_in_the_same_scan_is_not_passed_on() -> None:
    bench = moved_bench()
    assert bench.scan(op_pct=60.0, sequence=bench.seen.sequence + 1, op_request_pct=38.0) == NOTHING


def test_before_the_first_move_the_output_of_automatic_counts_as_found() -> None:
    bench = Bench()
    bench.arm()
    bench.scan(op_pct=45.3)
    bench.scan(op_pct=45.4)
    bench.scan(mode=MAN)
    _, writes = scans_until_given_back(bench)
    assert writes == GuardWrites(45.4, 78.0, AUTO)


def test_a_loop_found_in_manual_goes_back_to_manual() -> None:
    bench = Bench(mode=MAN, op_pct=33.0)
    bench.arm()
    bench.move(40.0)
    assert bench.scan(is_stop_pressed=True) == GuardWrites(33.0, 78.0, MAN)


def test_a_setpoint_that_tracked_pv_in_manual_is_given_back() -> None:
    bench = moved_bench()
    bench.scan(sp_eu=81.0)
    assert bench.scan(is_stop_pressed=True) == GuardWrites(45.0, 78.0, AUTO)


def test_after_giving_back_a_late_write_lands_nowhere() -> None:
    bench = moved_bench()
    bench.scan(is_stop_pressed=True)
    bench.scan(is_stop_pressed=False)
    for _ in range(5):
        assert bench.move(60.0) == NOTHING
    assert bench.guard.state is GuardState.GAVE_BACK


@pytest.mark.parametrize(
    ("token", "is_pressed", "state"),
    [
        (0, True, GuardState.IDLE),
        (0, False, GuardState.GAVE_BACK),
        (TOKEN, True, GuardState.GAVE_BACK),
        (TOKEN, False, GuardState.GAVE_BACK),
    ],
)
def test_only_a_free_mailbox_and_a_fresh_press_of_enable_lead_back_to_idle(
    token: int, is_pressed: bool, state: GuardState
) -> None:
    bench = moved_bench()
    bench.scan(is_stop_pressed=True)
    bench.scan(is_stop_pressed=False, holder_request=token)
    bench.scan(is_enable_pressed=is_pressed)
    assert bench.guard.state is state
    assert bench.guard.is_alarm == (state is GuardState.GAVE_BACK)
    assert bench.guard.is_enabled == (state is GuardState.IDLE)


def test_a_button_that_is_still_held_is_no_fresh_press() -> None:
    bench = moved_bench()
    bench.scan(is_enable_pressed=True)
    bench.scan(is_stop_pressed=True, is_enable_pressed=True)
    bench.scan(is_stop_pressed=False, holder_request=0, is_enable_pressed=True)
    assert bench.guard.state is GuardState.GAVE_BACK


inputs = st.builds(
    GuardInputs,
    clock_ms=st.just(0),
    is_enable_pressed=st.booleans(),
    is_stop_pressed=st.sampled_from([False, False, False, True]),
    holder_request=st.sampled_from([0, TOKEN, TOKEN, TOKEN, OTHER_TOKEN]),
    heartbeat=st.integers(0, 3),
    sequence=st.integers(0, 65535),
    op_request_pct=st.floats(width=32),
    pv_eu=st.one_of(st.floats(60.0, 80.0), st.floats(width=32)),
    is_pv_failed=st.booleans(),
    op_pct=st.floats(0.0, 100.0, width=32),
    sp_eu=st.floats(60.0, 80.0),
    mode=st.sampled_from([MAN, MAN, AUTO, CAS]),
)


@given(story=st.lists(inputs, max_size=60), steps_ms=st.lists(st.sampled_from([50, 50, 50, 2500]), max_size=60))
def test_whatever_happens_writes_stay_inside_the_limits_or_are_as_found(
    story: list[GuardInputs], steps_ms: list[int]
) -> None:
    guard, clock_ms, seen_op_pct = Guard(LIMITS), 2**32 - 200, set()
    for seen, step_ms in zip(story, steps_ms, strict=False):
        clock_ms = (clock_ms + step_ms) % 2**32
        before = guard.state
        writes = guard.scan(replace(seen, clock_ms=clock_ms))
        seen_op_pct.add(seen.op_pct)
        if writes != NOTHING:
            assert before is GuardState.ARMED
            assert seen.mode == MAN
            assert writes.op_pct is not None
            is_move = writes.sp_eu is None
            assert LIMITS.op_low_pct <= writes.op_pct <= LIMITS.op_high_pct if is_move else writes.op_pct in seen_op_pct
        assert (guard.holder != 0) == guard.is_test_active == (guard.state is GuardState.ARMED)
        assert guard.is_alarm == (guard.state is GuardState.GAVE_BACK)
