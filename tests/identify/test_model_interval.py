"""How sure a fit is: against a Monte Carlo of the noise, and by what makes an interval wide."""

from dataclasses import replace

import numpy as np
import pytest

from autotune.identify.model_bank import Structure
from autotune.identify.model_interval import COVERED, Sureness, model_point, model_with_draws, sureness
from autotune.identify.output_error import Fit, best_of, fitted
from autotune.identify.plant_fit import PlantFits, trace_of
from tests.identify.exact_relay import Plant
from tests.identify.traces import EIGHT_LAGS, LAG, TWO_LAGS, period_s, seen

SAMPLES_PER_PERIOD = 40


def fits_of(plant: Plant, structures: list[Structure], noise_ratio: float = 0.02, seed: int = 1) -> PlantFits:
    """Only these structures, each from near the truth of two lags."""
    signals = seen(plant, noise_ratio, seed)
    unit_s = period_s(signals)
    trace = trace_of(signals, unit_s)
    starts = {1: [0.0], 2: [2.5, 2.0], 3: [3.0, 2.5, 2.0], 4: [2.0, 2.0, 4.0, 3.0]}
    fits = [best_of(trace, each, [np.array([*starts[each.order], 0.1])]) for each in structures]
    return PlantFits(trace, unit_s, tuple(sorted(fits, key=lambda fit: fit.bic)))


def sure(fit: Fit) -> Sureness:
    found = sureness(fit, SAMPLES_PER_PERIOD)
    assert found is not None
    return found


def test_the_standard_deviations_are_those_of_a_monte_carlo() -> None:
    """The noise is drawn anew on the same switches, so that only it differs."""
    found = fits_of(TWO_LAGS, [Structure(2, 0)])
    quiet = found.best.linear @ found.best.columns
    noise_pct = float(np.std(found.best.residual_pct))
    rng = np.random.default_rng(5)
    points, told = [], []
    for _ in range(120):
        trace = replace(found.trace, pv_pct=quiet + rng.normal(0.0, noise_pct, len(quiet)))
        one = sure(best_of(trace, Structure(2, 0), [found.best.parameters]))
        points.append((one.point.log_gain, one.point.log_period_ratio))
        told.append((one.gain_sd_ratio, one.period_sd_ratio))
    # the standard error of a standard deviation of 120 draws is 6 %; the larger of two estimates reads a little high
    assert np.mean(told, axis=0) == pytest.approx(np.std(points, axis=0), rel=0.25)


def test_residuals_that_hang_together_widen_the_interval() -> None:
    fit = fits_of(TWO_LAGS, [Structure(2, 0)]).best
    slow = np.sin(np.arange(len(fit.residual_pct)) / 8.0)
    together = replace(fit, residual_pct=slow * np.std(fit.residual_pct) / np.std(slow))
    assert sure(together).gain_sd_ratio > 1.3 * sure(fit).gain_sd_ratio


def test_a_dead_time_held_at_nothing_counts_as_known() -> None:
    found = fits_of(TWO_LAGS, [Structure(3, 0)])
    held = fitted(found.trace, Structure(3, 0), np.append(found.best.shape, 0.0))
    assert sure(held).covariance[3, 3] < 1e-11 < 0.1 * sure(found.best).covariance[3, 3]


def test_a_structure_without_an_ultimate_point_has_no_sureness_and_as_the_best_no_conclusion() -> None:
    found = fits_of(TWO_LAGS, [Structure(2, 0)])
    upside_down = replace(found.best, linear=-found.best.linear)
    assert sureness(upside_down, SAMPLES_PER_PERIOD) is None
    assert model_point(replace(found, fits=(upside_down,))) is None
    assert model_point(replace(found, fits=(upside_down, found.best))) is None


def test_structures_nearly_as_likely_spread_the_interval_and_are_named_where_they_disagree() -> None:
    found = fits_of(EIGHT_LAGS, [Structure(2, 0), Structure(3, 0)], noise_ratio=0.005)
    alone = model_point(replace(found, fits=found.fits[:1]))
    other = found.fits[1]
    nearly = replace(other, residual_pct=found.best.residual_pct * 1.001)
    beside = model_point(replace(found, fits=(found.best, nearly)))
    assert alone is not None
    assert beside is not None
    assert alone[0].disagreeing == ()
    assert alone[0].gain_spread_ratio == 0.0
    assert [each.fit.structure for each in beside[0].disagreeing] == [other.structure]
    assert beside[0].gain_half_ratio > alone[0].gain_half_ratio
    assert sum(weight for _, weight in beside[1]) == pytest.approx(1.0)


def test_the_half_width_is_never_below_the_floor() -> None:
    point = model_point(fits_of(LAG, [Structure(1, 0)], noise_ratio=0.0))
    assert point is not None
    assert point[0].gain_half_ratio == pytest.approx(COVERED * 0.003, rel=1e-2)
    assert point[0].period_half_ratio == pytest.approx(COVERED * 0.0012, rel=1e-2)


def test_draws_spread_as_the_covariance_says_and_weigh_as_their_structures() -> None:
    found = fits_of(TWO_LAGS, [Structure(2, 0), Structure(3, 0)])
    point = model_point(found)
    assert point is not None
    drawn = model_with_draws(found, point[1], 0.0, ("a reason",))
    assert drawn.because == ("a reason",)
    assert sum(drawn.weights) == pytest.approx(1.0)
    assert len(drawn.weights) == len(drawn.draws)
    w = np.array([2 * np.pi / np.exp(point[0].log_period_s)])
    best = drawn.best.response(w)[0]
    shares = np.array([draw.response(w)[0] / best for draw, _ in zip(drawn.draws, drawn.weights, strict=True)])
    mean = np.average(shares, weights=drawn.weights)
    assert abs(mean - 1) < 0.01
    # a draw moves ln|G| and the phase at wu; ln Ku moves by -(d ln|G|) + kappa (d phase)
    moved = -np.log(np.abs(shares)) - point[0].kappa_ratio * np.angle(shares)
    assert np.sqrt(np.average(moved**2, weights=drawn.weights)) == pytest.approx(
        point[0].gain_noise_ratio / COVERED, rel=0.35
    )


def test_what_the_stamps_leave_unknown_spreads_the_draws_dead_times() -> None:
    found = fits_of(TWO_LAGS, [Structure(2, 0)])
    point = model_point(found)
    assert point is not None
    plain, hulls = (model_with_draws(found, point[1], hull_s, ()) for hull_s in (0.0, 0.2))

    spread, wider = (float(np.ptp([draw.dead_time_s for draw in drawn.draws])) for drawn in (plain, hulls))
    assert wider > spread + 0.2
    assert min(draw.dead_time_s for draw in hulls.draws) >= 0.0


def test_draws_of_a_plant_without_dead_time_have_none_below_nothing() -> None:
    signals = seen(TWO_LAGS, 0.1)
    later_s = float(signals.sample_s[5] - signals.sample_s[0])
    trace = trace_of(signals, period_s(signals), later_s)
    fit = best_of(trace, Structure(2, 0), [np.array([2.5, 2.0, 0.02])])
    found = PlantFits(trace, period_s(signals), (fit,))
    point = model_point(found)
    assert point is not None
    drawn = model_with_draws(found, point[1], 0.2, ())
    assert all(draw.dead_time_s >= 0 and draw.numerator[-1] > 0 for draw in drawn.draws)
