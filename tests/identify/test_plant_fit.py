"""The bank on whole tests: plants that it holds are found, and what beside the output moved PV is taken out."""

from dataclasses import replace
from math import pi

import numpy as np
import pytest

from autotune.identify.model_bank import Structure
from autotune.identify.plant_fit import PlantFits, fit_plant, process_model, update_plant
from autotune.identify.structure_search import bank_fits
from tests.identify.exact_relay import Plant
from tests.identify.traces import EIGHT_LAGS, INTEGRATOR, INVERSE, LAG, LAG_AND_PAIR, TWO_LAGS, loaded, period_s, seen


def response(plant: Plant, w: np.ndarray) -> np.ndarray:
    """G(jw) of the plant as it is written."""
    s = 1j * w
    bottom = np.prod([1 + lag * s for lag in plant.lags_s], axis=0)
    if plant.quadratic:
        bottom = bottom * (plant.quadratic[0] * s**2 + plant.quadratic[1] * s + 1)
    if plant.is_integrating:
        bottom = bottom * s
    return np.asarray(plant.gain * (1 + (plant.zero_s or 0.0) * s) * np.exp(-plant.dead_time_s * s) / bottom)


def off(found: PlantFits, plant: Plant) -> float:
    """Largest relative error of the model's response up to twice the ultimate frequency."""
    w = 2 * pi / plant.ultimate_period_s * np.linspace(0.1, 2.0, 30)
    model = process_model(found.best, found.period_s)
    return float(np.max(np.abs(model.response(w) / response(plant, w) - 1)))


@pytest.mark.parametrize("plant", [LAG, TWO_LAGS, INTEGRATOR, LAG_AND_PAIR, INVERSE], ids=lambda plant: plant.name)
def test_without_noise_a_plant_of_the_bank_is_found_in_seconds_and_percent(plant: Plant) -> None:
    signals = seen(plant)
    found = fit_plant(signals, period_s(signals))
    assert off(found, plant) < 2e-3
    assert not found.trace.has_ramp
    assert found.trace.load_from_ratio is None


def test_the_simplest_structure_that_explains_the_test_is_best() -> None:
    signals = seen(LAG, 0.02)
    found = fit_plant(signals, period_s(signals))
    assert found.best.structure == Structure(1, 0)
    assert all(fit.structure.order < 3 for fit in found.fits)  # two lags were of no use, three not even tried
    signals = seen(EIGHT_LAGS, 0.005)
    assert fit_plant(signals, period_s(signals)).best.structure == Structure(4, 0)


def test_a_drift_is_taken_out() -> None:
    signals = seen(TWO_LAGS, 0.02, drift_ratio=0.05)
    found = fit_plant(signals, period_s(signals))
    assert found.trace.has_ramp
    assert off(found, TWO_LAGS) < 0.05


def test_a_step_of_load_is_found_and_taken_out() -> None:
    plain = seen(TWO_LAGS, 0.02)
    from_s = 0.55 * float(plain.sample_s[-1])
    found = fit_plant(loaded(plain, TWO_LAGS, from_s, 1.0), period_s(plain))
    assert found.trace.load_from_ratio is not None
    assert found.trace.load_from_ratio * found.period_s == pytest.approx(from_s, abs=0.1 * TWO_LAGS.ultimate_period_s)
    assert found.best.linear[-1] / found.best.numerator[0] == pytest.approx(1.0, rel=0.1)
    assert off(found, TWO_LAGS) < 0.05


def test_a_test_that_has_grown_is_fitted_from_where_it_stood() -> None:
    signals = seen(TWO_LAGS, 0.02)
    shorter = replace(
        signals,
        sample_s=signals.sample_s[:-30],
        pv_pct=signals.pv_pct[:-30],
        effect_s=signals.effect_s[:-1],
        op_pct=signals.op_pct[:-1],
    )
    cold, warm = fit_plant(signals, period_s(signals)), update_plant(signals, fit_plant(shorter, period_s(signals)))
    assert warm.best.structure == cold.best.structure
    assert warm.best.misfit == pytest.approx(cold.best.misfit, rel=1e-6)


def test_effects_that_come_later_are_dead_time_that_the_plant_does_not_have() -> None:
    signals = seen(TWO_LAGS)
    found = fit_plant(signals, period_s(signals))
    moved = update_plant(signals, found, later_s=0.2)
    assert moved.best.dead_time_ratio * moved.period_s == pytest.approx(0.3, abs=1e-3)


def test_earlier_fits_are_starts_too() -> None:
    signals = seen(LAG_AND_PAIR, 0.02)
    found = fit_plant(signals, period_s(signals))
    again = bank_fits(found.trace, found.fits)
    assert min(fit.bic for fit in again) <= found.best.bic + 0.1
