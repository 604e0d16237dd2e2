"""The fit of one structure: slopes by central differences, and an optimum that a general optimiser can't better."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.optimize import least_squares

from autotune.identify.model_bank import Structure
from autotune.identify.output_error import DEAD_TIME_HIGH, Trace, best_of, fitted, refined
from autotune.identify.plant_fit import trace_of
from tests.identify.traces import INVERSE, LAG, TWO_LAGS, period_s, seen


def trace(noise_ratio: float = 0.02) -> Trace:
    signals = seen(TWO_LAGS, noise_ratio)
    return trace_of(signals, period_s(signals))


@pytest.mark.parametrize(
    ("structure", "parameters"),
    [
        (Structure(1, 0), [0.5, 0.2]),
        (Structure(2, 1), [2.0, 2.0, 0.1]),
        (Structure(3, 1), [0.5, 3.0, 2.0, 0.1]),
        (Structure(4, 0), [0.5, 2.0, 3.0, 2.0, 0.1]),
    ],
    ids=str,
)
@pytest.mark.parametrize("beside", ["nothing", "a ramp", "a load step"])
def test_slopes_are_central_differences_of_what_pv_would_be(
    structure: Structure, parameters: list[float], beside: str
) -> None:
    at = replace(trace(), has_ramp=beside == "a ramp", load_from_ratio=2.05 if beside == "a load step" else None)
    fit, h = fitted(at, structure, np.array(parameters)), 1e-6
    for slope, direction in zip(fit.slopes, np.eye(len(parameters)), strict=True):
        up, down = (fitted(at, structure, np.array(parameters) + sign * h * direction) for sign in (1, -1))
        expected = (fit.linear @ up.columns - fit.linear @ down.columns) / (2 * h)
        assert slope == pytest.approx(expected, abs=2e-4 * np.max(np.abs(expected)))


def test_the_linear_part_is_numpys_least_squares() -> None:
    at = replace(trace(), has_ramp=True, load_from_ratio=2.0)
    fit = fitted(at, Structure(2, 1), np.array([2.0, 2.0, 0.1]))
    expected, *_ = np.linalg.lstsq(fit.columns.T, at.pv_pct)
    assert fit.linear == pytest.approx(expected, rel=1e-6)
    assert len(fit.linear) == 5
    assert at.nuisances == 4  # level, ramp, size and onset of the load
    assert fit.bic == pytest.approx(len(at.pv_pct) * np.log(fit.misfit / len(at.pv_pct)) + 9 * np.log(len(at.pv_pct)))


def test_the_optimum_is_that_of_a_general_optimiser() -> None:
    at = trace()
    fit = refined(at, fitted(at, Structure(2, 0), np.array([2.0, 2.0, 0.1])), tolerance_ratio=1e-12)

    def residuals(parameters: np.ndarray) -> np.ndarray:
        return fitted(at, Structure(2, 0), parameters).residual_pct

    other = least_squares(residuals, np.array([2.0, 2.0, 0.1]), xtol=1e-12, ftol=1e-12)
    assert fit.misfit <= 2 * other.cost * (1 + 1e-9)
    assert fit.parameters == pytest.approx(other.x, abs=1e-4)


def test_a_noiseless_lag_is_found_exactly() -> None:
    signals = seen(LAG)
    unit_s = period_s(signals)
    starts = [np.array([lag, 0.1]) for lag in (-1.0, 1.0)]
    fit = best_of(trace_of(signals, unit_s), Structure(1, 0), starts)
    fit = refined(trace_of(signals, unit_s), fit, tolerance_ratio=1e-12)
    assert np.exp(fit.shape[0]) / unit_s == pytest.approx(1 / 3.0, rel=1e-6)
    assert fit.dead_time_ratio * unit_s == pytest.approx(1.0, rel=1e-6)
    assert fit.numerator[0] / unit_s == pytest.approx(2.0 / 3.0, rel=1e-6)


def test_a_dead_time_below_nothing_is_held_at_nothing() -> None:
    signals = seen(INVERSE)
    at = trace_of(signals, period_s(signals), later_s=signals.sample_s[6] - signals.sample_s[0])
    fit = refined(at, fitted(at, Structure(1, 0), np.array([0.0, 0.0])))
    assert 0.0 <= fit.dead_time_ratio <= DEAD_TIME_HIGH


def test_a_dead_time_beyond_the_test_leaves_nothing_to_fit_and_does_no_harm() -> None:
    at = trace()
    short = replace(at, stairs=replace(at.stairs, sample_s=at.stairs.sample_s[:40]), pv_pct=at.pv_pct[:40])
    fit = refined(short, fitted(short, Structure(1, 0), np.array([0.0, DEAD_TIME_HIGH])))
    assert np.isfinite(fit.misfit)
