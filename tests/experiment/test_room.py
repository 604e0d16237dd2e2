"""How far the output may go (S1)."""

from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.experiment.room import allowed_op_pct, clamped_op_pct, next_op_pct, room_of
from autotune.loop.limits import AsFound, Limits
from tests.experiment.bench import LIMITS
from tests.experiment.readings import found, reading

PERCENT = st.floats(0.0, 100.0)


@given(PERCENT, st.floats(0.0, 50.0), st.floats(0.0, 50.0), PERCENT, st.floats(-1e6, 1e6))
def test_no_output_leaves_the_steps_or_the_clamps_but_as_found_is_always_inside(
    found_pct: float, up_pct: float, down_pct: float, low_pct: float, asked_pct: float
) -> None:
    limits = replace(LIMITS, step_up_pct=up_pct, step_down_pct=down_pct, op_low_pct=low_pct, op_high_pct=low_pct + 20.0)
    as_found = found(op_pct=found_pct)
    op_pct = clamped_op_pct(limits, as_found, asked_pct)
    assert found_pct - down_pct <= op_pct <= found_pct + up_pct
    assert op_pct == found_pct or min(limits.op_low_pct, found_pct) <= op_pct <= max(limits.op_high_pct, found_pct)
    assert clamped_op_pct(limits, as_found, op_pct) == op_pct
    assert clamped_op_pct(limits, as_found, found_pct) == found_pct


def test_the_room_is_what_steps_and_clamps_leave() -> None:
    limits = Limits(10.0, 10.0, op_low_pct=45.0, op_high_pct=90.0, pv_low_pct=0.0, pv_high_pct=100.0)
    as_found = AsFound(50.0, None, reading())
    assert allowed_op_pct(limits, as_found) == (45.0, 60.0)
    assert (room_of(limits, as_found).up_pct, room_of(limits, as_found).down_pct) == (10.0, 5.0)


@pytest.mark.parametrize(
    ("held_pct", "wanted_pct", "moving_s", "next_pct"),
    [
        (50.0, 60.0, 0.5, 52.5),
        (50.0, 40.0, 0.5, 47.5),
        (58.0, 60.0, 0.5, 60.0),
        (50.0, 60.0, 0.0, 50.0),
        (50.0, 60.0, -1.0, 50.0),
        (50.0, 70.0, 60.0, 60.0),
    ],
)
def test_with_a_rate_the_output_goes_in_small_moves(
    held_pct: float, wanted_pct: float, moving_s: float, next_pct: float
) -> None:
    limits = replace(LIMITS, op_rate_pct_per_s=5.0)
    assert next_op_pct(limits, found(), held_pct, wanted_pct, moving_s) == pytest.approx(next_pct)


def test_without_a_rate_the_output_moves_at_once() -> None:
    assert next_op_pct(LIMITS, found(), 50.0, 60.0, 0.0) == 60.0
