"""The plan of a test follows from the loop, and its times from the scans."""

from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.config.bundled import bundled_path
from autotune.config.load import load
from autotune.config.test_plan import plan_for, timed_limits
from autotune.config.types import Controller, LoopConfig, ModbusEndpoint

REHEARSAL = load(bundled_path("rehearsal.toml"))
EXAMPLE = load(bundled_path("example-modbus.toml"))


def loop_of(name: str) -> LoopConfig:
    loop = REHEARSAL.loop(name) or EXAMPLE.loop(name)
    assert loop is not None
    return loop


def bare_loop() -> LoopConfig:
    loop = EXAMPLE.loop("FIC-101")
    assert loop is not None
    return loop


def test_a_plan_carries_what_the_loop_tells() -> None:
    loop = loop_of("TIC-204")
    plan = plan_for(loop, 4711)
    assert (plan.loop, plan.token, plan.action, plan.relay) == ("TIC-204", 4711, loop.action, loop.relay)
    assert (plan.scan_s, plan.plc_scan_s, plan.has_guard, plan.has_clock_tags) == (0.1, 0.05, True, True)
    assert (plan.look_around_s, plan.baseline_s, plan.hand_back_within_s) == (2.0, 4.0, 10.0)
    assert (plan.baseline_noise_at_most_pct, plan.baseline_drift_at_most_pct_per_s) == (2.0, 0.5)
    assert plan.take_over_within_s == 5.0
    assert plan.convergence == loop.convergence
    assert plan.limits == loop.limits


def test_setpoint_tracking_comes_from_the_block() -> None:
    assert plan_for(loop_of("TIC-311"), 1).sp_tracks_in_manual
    assert not plan_for(loop_of("TIC-204"), 1).sp_tracks_in_manual


def test_a_loop_without_clock_tags_says_so() -> None:
    plan = plan_for(bare_loop(), 1)
    assert (plan.has_clock_tags, plan.has_guard) == (False, False)


@pytest.mark.parametrize(("is_accepted", "expected"), [(False, False), (True, True)])
def test_no_guard_needs_a_person_s_consent(is_accepted: bool, expected: bool) -> None:
    assert plan_for(bare_loop(), 1, is_no_guard_accepted=is_accepted).accepts_no_guard is expected


def test_consent_counts_only_where_the_configuration_allows_it() -> None:
    assert not plan_for(loop_of("TIC-204"), 1, is_no_guard_accepted=True).accepts_no_guard


@pytest.mark.parametrize("token", [0, -1, 2**32])
def test_a_token_out_of_range_is_refused(token: int) -> None:
    with pytest.raises(ValueError, match="token"):
        plan_for(loop_of("TIC-204"), token)


@pytest.mark.parametrize("token", [1, 2**32 - 1])
def test_the_ends_of_the_tokens_range_are_tokens(token: int) -> None:
    assert plan_for(loop_of("TIC-204"), token).token == token


def test_the_times_follow_from_scans_and_deadlines() -> None:
    endpoint = ModbusEndpoint("host", 502, 1, request_timeout_s=0.4)
    controller = Controller("plc", endpoint, plc_scan_s=0.1, io_time_s=0.02)
    told = replace(loop_of("TIC-204").limits, step_up_pct=12.0, step_down_pct=8.0, op_rate_pct_per_s=10.0)
    limits = timed_limits(told, 0.2, controller, guard_timeout_s=3.0)
    assert limits.op_move_s == pytest.approx(0.4 + 2 * 0.1 + 0.02 + 20 / 10 + 0.2)
    assert limits.sample_age_s == pytest.approx(0.4 + 0.1 + 0.02 + 0.2)
    assert limits.heartbeat_s == pytest.approx(1.5)


def test_an_unknown_plc_scan_counts_as_one_of_ours() -> None:
    controller = Controller("plc", ModbusEndpoint("host", 502, 1, request_timeout_s=0.4), plc_scan_s=None)
    limits = timed_limits(loop_of("TIC-204").limits, 0.2, controller, guard_timeout_s=None)
    assert limits.op_move_s == pytest.approx(0.4 + 2 * 0.2 + 0.2)
    assert limits.sample_age_s == pytest.approx(0.4 + 0.2 + 0.2)
    assert limits.heartbeat_s == limits.sample_age_s


@given(st.floats(0.01, 100.0), st.floats(3.0, 1000.0))
def test_the_heartbeat_is_missed_here_before_the_guard_misses_it(scan_s: float, scans: float) -> None:
    guard_timeout_s = scans * scan_s
    limits = timed_limits(loop_of("TIC-204").limits, scan_s, loop_of("TIC-204").controller, guard_timeout_s)
    assert 2 * scan_s <= limits.heartbeat_s < guard_timeout_s


def test_the_times_do_not_grow_when_derived_twice() -> None:
    loop = loop_of("TIC-310")
    assert timed_limits(loop.limits, loop.scan_s, loop.controller, loop.guard_timeout_s) == loop.limits
