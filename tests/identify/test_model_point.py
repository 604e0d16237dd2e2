"""The crossing of -180 degrees of a fitted structure, against the exact root search, and its gradients."""

from dataclasses import replace
from math import exp, log

import numpy as np
import pytest

from autotune.identify.model_bank import Structure
from autotune.identify.model_point import crossing
from autotune.identify.output_error import Fit, fitted
from autotune.identify.plant_fit import trace_of
from tests.identify.exact_relay import Plant
from tests.identify.traces import INVERSE, LAG, TWO_LAGS, period_s, seen, with_truth


def fit_of(structure: Structure, parameters: list[float], numerator: list[float]) -> Fit:
    """A fit with these parameters, whatever it explains."""
    signals = seen(TWO_LAGS)
    fit = fitted(trace_of(signals, period_s(signals)), structure, np.array(parameters))
    return replace(fit, linear=np.array([*numerator, 0.0]))


def test_the_point_is_that_of_the_exact_root_search() -> None:
    for plant, fit in (
        (LAG, fit_of(Structure(1, 0), [-log(3.0), 1.0], [2.0 / 3.0])),
        (TWO_LAGS, fit_of(Structure(2, 0), [-log(2.1), log(3.7 / 2.1), 0.5], [1 / 2.1])),
        (INVERSE, fit_of(Structure(3, 1), [0.0, 0.0, log(2.0), 0.0], [1.0, -0.6])),
    ):
        point = crossing(fit)
        assert point is not None
        assert exp(point.log_gain) == pytest.approx(plant.ultimate_gain, rel=1e-9)
        assert exp(point.log_period_ratio) == pytest.approx(plant.ultimate_period_s, rel=1e-9)


def test_more_dead_time_is_that_of_the_plant_with_more() -> None:
    fit = fit_of(Structure(1, 0), [-log(3.0), 1.0], [2.0 / 3.0])
    longer = with_truth(Plant("longer", gain=2.0, lags_s=(3.0,), dead_time_s=1.2))
    point = crossing(fit, later_ratio=0.2)
    assert point is not None
    assert exp(point.log_gain) == pytest.approx(longer.ultimate_gain, rel=1e-9)


@pytest.mark.parametrize(
    ("structure", "parameters", "numerator"),
    [
        (Structure(1, 0), [-1.0, 0.2], [1.0]),
        (Structure(2, 1), [1.0, 1.5, 0.1], [3.0, 0.2]),
        (Structure(3, 1), [0.2, 3.0, 2.0, 0.05], [40.0, -2.0]),
        (Structure(4, 0), [1.0, 2.0, 3.0, 2.5, 0.05], [50.0]),
    ],
    ids=str,
)
def test_gradients_and_kappa_are_central_differences(
    structure: Structure, parameters: list[float], numerator: list[float]
) -> None:
    h, here = 1e-6, np.array([*parameters, *numerator])

    def point(at: np.ndarray) -> np.ndarray:
        found = crossing(fit_of(structure, list(at[: len(parameters)]), list(at[len(parameters) :])))
        assert found is not None
        return np.array([found.log_gain, found.log_period_ratio])

    found = crossing(fit_of(structure, parameters, numerator))
    assert found is not None
    slopes = [(point(here + h * to) - point(here - h * to)) / (2 * h) for to in np.eye(len(here))]
    assert pytest.approx(np.array(slopes), rel=1e-4, abs=1e-6) == found.gradients.T
    # more dead time by dL turns the phase by w dL and moves ln Ku by kappa times as much
    dead_time_ratio = found.gradients[:, len(parameters) - 1]
    assert -dead_time_ratio[0] / (2 * np.pi / np.exp(found.log_period_ratio)) == pytest.approx(
        found.kappa_ratio, rel=1e-9
    )


def test_where_there_is_no_crossing_there_is_no_point() -> None:
    assert crossing(fit_of(Structure(1, 0), [0.0, 0.2], [-1.0])) is None  # wrong sign
    assert crossing(fit_of(Structure(1, 0), [0.0, 0.0], [1.0])) is None  # a lag turns by 90 degrees at most
    assert crossing(fit_of(Structure(2, 0), [-14.0, -14.0, 3.0], [1.0])) is None  # beyond at the lowest frequency
