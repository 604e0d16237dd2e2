"""PV at rest: noise, drift and standing still."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.experiment.steadiness import SAMPLES_AT_LEAST, Rest, frozen_after_s, measure_rest

TIMES_S = [0.1 * k for k in range(200)]


def rest_of(pvs_pct: list[float], times_s: list[float] = TIMES_S) -> Rest:
    return measure_rest(times_s, pvs_pct)


@pytest.mark.parametrize("seed", range(8))
def test_white_noise_is_measured_as_its_standard_deviation(seed: int) -> None:
    noise = np.random.default_rng(seed).normal(0.0, 0.4, len(TIMES_S))
    rest = rest_of([50.0 + float(n) for n in noise])
    assert rest.noise_pct == pytest.approx(float(np.std(noise, ddof=1)), rel=0.2)
    assert abs(rest.mean_pct - 50.0) < 4.0 * 0.4 / math.sqrt(len(TIMES_S))
    assert abs(rest.drift_pct_per_s) < 4.0 * rest.drift_sd_pct_per_s


def test_a_few_outliers_change_neither_noise_nor_drift_nor_mean_much() -> None:
    noise = np.random.default_rng(1).normal(0.0, 0.4, len(TIMES_S))
    clean = [50.0 + float(n) for n in noise]
    spiky = [pv + (30.0 if k in (3, 60, 61, 150, 199) else 0.0) for k, pv in enumerate(clean)]
    assert rest_of(spiky).noise_pct == pytest.approx(rest_of(clean).noise_pct, rel=0.15)
    assert rest_of(spiky).drift_pct_per_s == pytest.approx(rest_of(clean).drift_pct_per_s, abs=0.02)
    assert rest_of(spiky).mean_pct == pytest.approx(rest_of(clean).mean_pct, abs=0.05)


@pytest.mark.parametrize("slope_pct_per_s", [-0.3, 0.02, 1.0])
def test_a_drift_is_measured_and_is_no_noise(slope_pct_per_s: float) -> None:
    rest = rest_of([50.0 + slope_pct_per_s * t for t in TIMES_S])
    assert rest.drift_pct_per_s == pytest.approx(slope_pct_per_s, rel=1e-9)
    assert rest.noise_pct <= abs(slope_pct_per_s) * 0.1


def test_the_standard_deviation_of_the_drift_is_that_of_repeated_trials() -> None:
    random = np.random.default_rng(5)
    trials = [rest_of([float(n) for n in random.normal(50.0, 0.4, len(TIMES_S))]) for _ in range(300)]
    spread = float(np.std([trial.drift_pct_per_s for trial in trials]))
    claimed = float(np.mean([trial.drift_sd_pct_per_s for trial in trials]))
    assert claimed == pytest.approx(spread, rel=0.15)


def test_a_flicker_of_one_count_is_at_least_the_rounding_error() -> None:
    count_pct = 0.1
    pvs = [50.0 + (count_pct if k % 20 == 0 else 0.0) for k in range(len(TIMES_S))]
    assert rest_of(pvs).noise_pct == pytest.approx(count_pct / math.sqrt(12.0))


def test_a_signal_that_never_moves_has_no_noise_and_tells_nothing_about_standing_still() -> None:
    rest = rest_of([50.0] * len(TIMES_S))
    assert (rest.noise_pct, rest.drift_pct_per_s, rest.still_s) == (0.0, 0.0, None)
    assert frozen_after_s(rest, 0.1, None) is None


def test_the_longest_time_without_change_is_measured() -> None:
    pvs = [50.0 + (0.1 if 20 <= k < 55 else 0.0) for k in range(100)]
    rest = measure_rest(TIMES_S[:100], pvs)
    assert rest.still_s == pytest.approx(4.4)
    assert frozen_after_s(rest, 0.1, None) == pytest.approx(22.0)


def test_frozen_is_never_called_before_ten_scans_and_a_declared_time_is_taken_as_it_is() -> None:
    rest = rest_of([50.0 + 0.01 * (k % 2) for k in range(len(TIMES_S))])
    assert frozen_after_s(rest, 0.1, None) == pytest.approx(1.0)
    assert frozen_after_s(rest, 0.1, 3.0) == 3.0
    assert frozen_after_s(rest_of([1.0] * 200), 0.1, 3.0) == 3.0


def test_too_few_samples_are_refused() -> None:
    with pytest.raises(ValueError, match="nothing about rest"):
        measure_rest(TIMES_S[: SAMPLES_AT_LEAST - 1], [1.0] * (SAMPLES_AT_LEAST - 1))


def test_samples_without_passage_of_time_have_an_unknown_drift() -> None:
    rest = measure_rest([1.0] * 10, [1.0, 2.0] * 5)
    assert rest.drift_pct_per_s == 0.0
    assert math.isinf(rest.drift_sd_pct_per_s)


@given(st.lists(st.floats(-1e6, 1e6), min_size=SAMPLES_AT_LEAST, max_size=60), st.floats(-1e3, 1e3))
def test_a_shift_of_pv_shifts_only_the_mean(pvs: list[float], shift: float) -> None:
    times_s = [0.1 * k for k in range(len(pvs))]
    rest, shifted = measure_rest(times_s, pvs), measure_rest(times_s, [pv + shift for pv in pvs])
    assert rest.noise_pct >= 0.0
    assert min(pvs) - 1e-6 <= rest.mean_pct <= max(pvs) + 1e-6
    assert shifted.noise_pct == pytest.approx(rest.noise_pct, rel=1e-6, abs=1e-6)
