"""The excitation."""

from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.experiment.plan import FirstMove, RelayPlan
from autotune.experiment.relay import (
    FITS_AT_MOST,
    Relay,
    fitted,
    hysteresis_pct,
    is_switch_due,
    level_pct,
    start_relay,
    switched,
    with_smaller_steps,
)
from autotune.experiment.room import Room
from autotune.experiment.steadiness import Rest
from tests.experiment.readings import found

ROOM = Room(up_pct=10.0, down_pct=10.0)
HIGH = Relay(step_up_pct=6.0, step_down_pct=4.0, is_high=True, switched_s=10.0)


def rest(noise_pct: float) -> Rest:
    return Rest(100, 40.0, noise_pct, 0.0, 0.0, None)


@pytest.mark.parametrize(
    ("plan", "noise_pct", "expected_pct"),
    [
        (RelayPlan(5.0, 5.0), 0.2, 0.5),  # 2.5 times the noise
        (RelayPlan(5.0, 5.0), 0.0, 0.05),  # never below its least width
        (RelayPlan(5.0, 5.0, hysteresis_pct=0.3), 0.2, 0.3),  # as asked
    ],
)
def test_the_hysteresis_comes_from_the_noise_unless_it_is_asked_for(
    plan: RelayPlan, noise_pct: float, expected_pct: float
) -> None:
    assert hysteresis_pct(plan, rest(noise_pct)) == pytest.approx(expected_pct)


@pytest.mark.parametrize(("first", "level"), [(FirstMove.UP, 56.0), (FirstMove.DOWN, 46.0)])
def test_the_first_move_goes_where_it_was_asked_to(first: FirstMove, level: float) -> None:
    relay = start_relay(RelayPlan(6.0, 4.0, first_move=first), ROOM, 1.0, 10.0)
    assert level_pct(relay, found()) == level
    assert level_pct(switched(relay, 11.0), found()) == 102.0 - level


def test_the_relay_starts_inside_its_room() -> None:
    relay = start_relay(RelayPlan(6.0, 4.0), Room(3.0, 2.0), 1.0, 0.0)
    assert (relay.step_up_pct, relay.step_down_pct, relay.amplitude_pct) == (3.0, 2.0, 2.5)


@pytest.mark.parametrize(
    ("is_high", "rise_pct", "is_due"),
    [(True, 0.5, False), (True, 0.500001, True), (True, -9.0, False), (False, -0.5, False), (False, -0.51, True)],
)
def test_a_switch_is_due_when_pv_has_left_the_hysteresis_where_it_is_pushed(
    is_high: bool, rise_pct: float, is_due: bool
) -> None:
    assert is_switch_due(replace(HIGH, is_high=is_high), rise_pct, 0.5, 0.0, 20.0) is is_due


def test_no_switch_is_due_while_blanking_lasts() -> None:
    assert not is_switch_due(HIGH, 1.0, 0.5, 2.0, 11.9)
    assert is_switch_due(HIGH, 1.0, 0.5, 2.0, 12.0)


def test_smaller_steps_count_from_the_next_switch_on_and_end_the_fitting() -> None:
    wished = with_smaller_steps(HIGH)
    assert (wished.step_up_pct, wished.step_down_pct) == (6.0, 4.0)
    smaller = switched(wished, 11.0)
    assert [smaller.step_up_pct, smaller.step_down_pct] == pytest.approx([3.6, 2.4])
    assert fitted(smaller, 1.0, 4.0, ROOM) == smaller


def test_a_wish_for_smaller_steps_overrules_an_enlargement_that_was_waiting() -> None:
    enlarged = fitted(HIGH, 1.0, 1.5, ROOM)
    assert enlarged.next_ratio == pytest.approx(1.5)
    assert with_smaller_steps(enlarged).next_ratio == pytest.approx(0.6)


@pytest.mark.parametrize(
    ("swing_pct", "wanted_pct", "ratio"),
    [
        (2.0, 2.4, 1.0),  # fits well enough
        (2.0, 3.0, 1.5),
        (2.0, 9.0, 10.0 / 6.0),  # the room ends it
        (8.0, 4.0, 0.5),
        (99.0, 1.0, 0.25),  # never below a quarter at once
        (0.0, 1.0, 1.0),  # nothing seen, nothing fitted
    ],
)
def test_steps_are_fitted_to_the_wanted_swing_within_bounds(swing_pct: float, wanted_pct: float, ratio: float) -> None:
    assert fitted(HIGH, swing_pct, wanted_pct, ROOM).next_ratio == pytest.approx(ratio)


def test_a_swing_that_still_grows_is_not_enlarged_but_one_too_large_is_reduced() -> None:
    assert fitted(HIGH, 2.0, 3.0, ROOM, may_enlarge=False) == HIGH
    assert fitted(HIGH, 8.0, 4.0, ROOM, may_enlarge=False).next_ratio == pytest.approx(0.5)


def test_steps_are_never_more_than_doubled_at_once() -> None:
    assert fitted(HIGH, 1.0, 9.0, Room(90.0, 90.0)).next_ratio == 2.0


def test_steps_that_fill_their_room_stay() -> None:
    assert fitted(HIGH, 1.0, 9.0, Room(6.0, 4.0)) == HIGH


def test_the_steps_are_fitted_only_a_few_times() -> None:
    relay, swings = HIGH, 0
    for _ in range(9):
        before = relay
        relay = switched(fitted(relay, 1.0, 0.7, ROOM), 1.0)
        swings += relay.fits != before.fits
    assert swings == FITS_AT_MOST


def test_the_step_ratio_is_the_larger_over_the_smaller() -> None:
    assert HIGH.step_ratio == 1.5
    assert replace(HIGH, step_up_pct=2.0).step_ratio == 2.0


@given(
    st.floats(0.1, 50.0),
    st.floats(0.1, 50.0),
    st.lists(st.tuples(st.floats(0.0, 100.0), st.floats(0.01, 100.0)), max_size=9),
)
def test_fitting_never_leaves_the_room(up_pct: float, down_pct: float, seen: list[tuple[float, float]]) -> None:
    room = Room(20.0, 15.0)
    relay = start_relay(RelayPlan(up_pct, down_pct), room, 1.0, 0.0)
    for swing_pct, wanted_pct in seen:
        relay = switched(fitted(relay, swing_pct, wanted_pct, room), 1.0)
        assert 0.0 < relay.step_up_pct <= room.up_pct * (1.0 + 1e-12)
        assert 0.0 < relay.step_down_pct <= room.down_pct * (1.0 + 1e-12)
