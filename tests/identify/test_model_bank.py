"""The structures: what their parameters mean, against numpy's polynomials and central differences."""

import numpy as np
import pytest

from autotune.identify.model_bank import BANK, Structure, denominator, denominator_slopes, poles, shape_of

SHAPES = {
    "a lag": [0.3],
    "two lags": [1.0, 2.0],
    "a pair": [2.0, 0.5],
    "three lags": [0.2, 1.0, 2.0],
    "a lag and a pair": [0.2, 2.0, 0.5],
    "almost an integrator and a pair": [-13.0, 2.0, 0.5],
    "a pair and two lags": [2.0, 0.5, 1.0, 2.5],
    "lags far apart": [8.0, 8.9],
}


@pytest.mark.parametrize("shape", SHAPES.values(), ids=SHAPES.keys())
def test_the_poles_are_the_roots_of_the_denominator_and_lie_in_the_left_half_plane(shape: list[float]) -> None:
    found = poles(np.array(shape))
    assert np.all(found.real < 0)
    assert np.real(np.poly(found)) == pytest.approx(denominator(np.array(shape)), rel=1e-10)
    assert denominator(np.array(shape))[0] == 1.0


@pytest.mark.parametrize("shape", SHAPES.values(), ids=SHAPES.keys())
def test_slopes_of_the_denominator_are_its_central_differences(shape: list[float]) -> None:
    h = 1e-6
    for row, direction in zip(denominator_slopes(np.array(shape)), np.eye(len(shape)), strict=True):
        up, down = denominator(np.array(shape) + h * direction), denominator(np.array(shape) - h * direction)
        assert row == pytest.approx(((up - down) / (2 * h))[:0:-1], rel=1e-6, abs=1e-9 * np.max(up))


@pytest.mark.parametrize("shape", SHAPES.values(), ids=SHAPES.keys())
def test_the_shape_of_the_poles_gives_the_same_denominator(shape: list[float]) -> None:
    again = shape_of(poles(np.array(shape)))
    assert denominator(again) == pytest.approx(denominator(np.array(shape)), rel=1e-9)


@pytest.mark.parametrize(("lags", "pair"), [([-1.0, -9.0, -10.0], [-9.0, -10.0]), ([-1.0, -1.1, -10.0], [-1.0, -1.1])])
def test_of_three_lags_the_nearest_two_share_a_factor(lags: list[float], pair: list[float]) -> None:
    shape = shape_of(np.array(lags, dtype=complex))
    assert np.exp(shape[1]) == pytest.approx(pair[0] * pair[1])
    assert np.exp(shape[2]) == pytest.approx(-pair[0] - pair[1])


def test_an_integrator_is_a_lag_at_its_bound() -> None:
    assert shape_of(np.array([-1e-30 + 0j]))[0] == -14.0


def test_the_bank_names_its_structures() -> None:
    assert str(Structure(1, 0)) == "first order with no zero"
    assert str(Structure(3, 1)) == "third order with a zero"
    assert [structure.outputs for structure in BANK] == [1, 1, 2, 1, 2, 1]
