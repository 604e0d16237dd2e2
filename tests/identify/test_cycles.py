"""Whole cycles and their swing."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.identify.cycles import swing_pct, usable_cycles, whole_cycles
from autotune.identify.findings import Cycle
from autotune.identify.waveforms import Waveforms


def signals(moves: list[tuple[float, float]], until_s: float, step_s: float = 0.1) -> Waveforms:
    """OP as (from, level) pairs about its centre; PV a sine of period 4 s and amplitude 2 %."""
    at = np.arange(0.0, until_s, step_s)
    return Waveforms(
        sample_s=at,
        pv_pct=2 * np.sin(np.pi / 2 * at),
        effect_s=np.array([t for t, _ in moves]),
        op_pct=np.array([op for _, op in moves]),
        noise_pct=0.0,
        drift_doubt_pct_per_s=0.0,
        rest_sd_pct=0.0,
        delay_hull_s=0.0,
    )


FOUR_CYCLES = [(-1.0, 0.0), *[(2.0 * i, 6.0 if i % 2 == 0 else -4.0) for i in range(9)]]


def test_cycles_run_from_up_switch_to_up_switch_and_the_first_begins_at_the_first_move() -> None:
    cycles = whole_cycles(signals(FOUR_CYCLES, 17.0))
    assert [(c.from_s, c.period_s, c.amplitude_pct) for c in cycles] == [(4.0 * i, 4.0, 5.0) for i in range(4)]
    assert [c.pv_amplitude_pct for c in cycles] == pytest.approx([2.0] * 4)


def test_the_first_cycle_is_not_usable() -> None:
    assert len(usable_cycles(whole_cycles(signals(FOUR_CYCLES, 17.0)))) == 3


def test_a_first_move_down_leaves_the_first_half_cycle_out() -> None:
    moves = [(-1.0, 0.0), (0.0, -4.0), *[(2.0 * i, 6.0 if i % 2 else -4.0) for i in range(1, 6)]]
    assert [c.from_s for c in whole_cycles(signals(moves, 12.0))] == [2.0, 6.0]


def test_an_output_back_at_its_centre_belongs_to_no_cycle() -> None:
    moves = [(-1.0, 0.0), (0.0, 5.0), (2.0, -5.0), (4.0, 5.0), (6.0, -5.0), (7.0, 0.0), (8.0, -5.0), (10.0, 5.0)]
    assert [c.from_s for c in whole_cycles(signals(moves, 12.0))] == [0.0]


def test_a_cycle_without_samples_is_left_out() -> None:
    assert [c.from_s for c in whole_cycles(signals(FOUR_CYCLES, 8.0))] == [0.0, 4.0]


def test_other_steps_begin_a_new_run_of_cycles() -> None:
    cycles = (
        Cycle(0.0, 4.0, 3.0, 8.0),
        Cycle(4.0, 4.0, 2.0, 5.0),
        Cycle(8.0, 4.0, 2.0, 5.0),
        Cycle(12.0, 4.0, 2.0, 5.0),
    )
    assert [c.from_s for c in usable_cycles(cycles)] == [8.0, 12.0]


def test_a_gap_begins_a_new_run_of_cycles() -> None:
    cycles = (Cycle(0.0, 4.0, 2.0, 5.0), Cycle(4.0, 4.0, 2.0, 5.0), Cycle(12.0, 4.0, 2.0, 5.0))
    assert usable_cycles(cycles) == ()


def test_nothing_recorded_has_no_cycles() -> None:
    assert whole_cycles(signals([], 0.0)) == ()


def test_a_sharp_peak_keeps_its_height_whatever_the_noise() -> None:
    assert swing_pct(np.array([0.0, 5.0, 10.0, 5.0, 0.0, -5.0, -10.0, -5.0]), noise_pct=0.1) == pytest.approx(10.0)


def test_noise_on_a_flat_peak_is_no_swing() -> None:
    rng = np.random.default_rng(1)
    square = np.where(np.arange(40) < 20, 5.0, -5.0)
    swings = [swing_pct(square + 0.2 * rng.normal(size=40), 0.2) for _ in range(200)]
    raw = [np.ptp(square + 0.2 * rng.normal(size=40)) / 2 for _ in range(200)]
    assert abs(np.mean(swings) - 5.0) < 0.1 < 0.3 < abs(np.mean(raw) - 5.0)


@given(st.lists(st.floats(-50, 50), min_size=1, max_size=50), st.floats(0, 100))
def test_a_swing_is_never_negative_nor_more_than_what_was_seen(readings: list[float], noise_pct: float) -> None:
    pv = np.array(readings)
    assert 0 <= swing_pct(pv, noise_pct) <= np.ptp(pv) / 2
