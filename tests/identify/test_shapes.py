"""Shapes run through the point that they are made for; python-control says what they are."""

import control
import numpy as np
import pytest

from autotune.identify.closed_forms import Rational, ultimate_of
from autotune.identify.shapes import (
    HIGHEST_RATIO,
    Shapes,
    catalogue,
    phase_rad,
    response,
    shapes_through,
    slopes_at,
    ultimate_ratio,
)


def one_shape(**angles: float) -> Shapes:
    plain = {
        "first": 0.0,
        "second": 0.0,
        "equal": 0.0,
        "count": 1.0,
        "zero": 0.0,
        "ratio": 0.0,
        "damping": 1.0,
        "dead": 0.0,
    }
    a = {name: np.array([number]) for name, number in (plain | angles).items()}
    first = np.column_stack((a["first"], a["second"]))
    return Shapes(first, a["equal"], a["count"], a["zero"], a["ratio"], a["damping"], a["dead"], np.ones(1))


@pytest.mark.parametrize("degrees", [-100.0, -145.0, -178.0, -200.0])
def test_every_shape_holds_the_point_that_was_seen(degrees: float) -> None:
    shapes = shapes_through(np.radians(degrees))
    at_point = response(shapes, 1.0)
    assert len(at_point) > 1000
    assert np.abs(at_point) == pytest.approx(1.0)
    assert np.angle(at_point * np.exp(-1j * np.radians(degrees))) == pytest.approx(0.0, abs=1e-9)
    assert phase_rad(shapes, np.ones_like(shapes.prior)) == pytest.approx(np.radians(degrees))


def test_priors_sum_to_one() -> None:
    assert np.sum(catalogue().prior) == pytest.approx(1.0)


def test_a_shape_is_the_plant_that_python_control_makes_of_its_angles() -> None:
    lag, equal, zero, ratio, damping = 1.2, 0.6, -0.4, 0.5, 0.7
    shape = one_shape(first=lag, equal=equal, count=3.0, zero=zero, ratio=ratio, damping=damping, dead=0.3)
    s = control.tf("s")
    plant = (1 + np.tan(zero) * s) / ((1 + np.tan(lag) * s) * (1 + np.tan(equal) * s) ** 3)
    plant = plant / ((ratio * s) ** 2 + 2 * damping * ratio * s + 1)

    def library(x: float) -> complex:
        return complex(plant(1j * x)) * complex(np.exp(-0.3j * x))

    for x in (0.1, 0.7, 2.0, 5.0):
        assert complex(response(shape, x)[0]) == pytest.approx(library(x) / abs(library(1.0)), rel=1e-9)


def test_the_ultimate_point_of_a_shape_is_that_of_the_root_search() -> None:
    shape = one_shape(first=np.arctan(3.0), equal=np.arctan(0.4), count=2.0, dead=0.2)
    plant = Rational(lags_s=(3.0, 0.4, 0.4), dead_time_s=0.2)
    gain, period_s = ultimate_of(plant)
    ratio = ultimate_ratio(shape)
    assert 2 * np.pi / ratio[0] == pytest.approx(period_s, rel=1e-6)
    assert 1 / abs(response(shape, ratio)[0]) == pytest.approx(gain * plant.gain_at(1.0), rel=1e-6)


def test_slopes_are_those_of_an_integrator_with_dead_time() -> None:
    """1/s e^(-Ls): ln|G| falls by 1 per ln w, the phase by L w."""
    gain, phase = slopes_at(one_shape(first=np.pi / 2, dead=0.5), np.array([2.0]))
    assert gain[0] == pytest.approx(-1.0, abs=1e-6)
    assert phase[0] == pytest.approx(-1.0, abs=1e-6)


def test_a_plant_that_never_turns_so_far_ends_the_search_at_its_end() -> None:
    assert ultimate_ratio(one_shape(first=0.5))[0] == pytest.approx(HIGHEST_RATIO, rel=1e-5)
