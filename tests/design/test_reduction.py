"""Models brought down to what rules ask for, against closed forms and Skogestad's printed examples."""

from math import inf, log

import numpy as np
import pytest

from autotune.design.held import exponential, held_plant, output_row
from autotune.design.reduction import (
    Ipdt,
    ReactionCurve,
    Sotd,
    fitted,
    half_rule,
    half_rule_of_factors,
    reaction_curve,
)
from autotune.identify.closed_forms import Fotd
from autotune.identify.model import ProcessModel
from autotune.loop.outcome import Refusal
from tests.design.plants import THREE_LAGS, checks, plant

E2 = plant(2.0, 1.0, 0.4, 0.2, 0.05, 0.05, 0.05, zeros_s=(-0.3, 0.08))


def _fotd(reduced: object) -> Fotd:
    assert isinstance(reduced, Fotd)
    return reduced


def _sotd(reduced: object) -> Sotd:
    assert isinstance(reduced, Sotd)
    return reduced


def _ipdt(reduced: object) -> Ipdt:
    assert isinstance(reduced, Ipdt)
    return reduced


def _curve(model: ProcessModel) -> ReactionCurve:
    curve = reaction_curve(model)
    assert isinstance(curve, ReactionCurve)
    return curve


def test_the_half_rule_gives_the_printed_example_of_skogestad() -> None:
    """WX-HALF, with both zeros; the roots of a triple lag are split by root search and must not matter."""
    expected = checks()["WX-HALF"]["expected"]
    first, second = _fotd(half_rule(E2, 1)), _sotd(half_rule(E2, 2))
    assert (first.time_constant_s, first.dead_time_s) == pytest.approx(
        (expected["first"]["T"], expected["first"]["th"])
    )
    assert (second.time_constant_s, second.second_time_constant_s, second.dead_time_s) == pytest.approx(
        tuple(expected["second"].values())
    )


@pytest.mark.parametrize(
    ("model", "order", "expected"),
    [
        (plant(1.0, 0.2), 1, Fotd(1.0, 1.1, 0.1)),  # E1
        (plant(20.0, 1.0, 0.1, 0.1, gain=2.0, zeros_s=(15.0,)), 1, Fotd(1.5, 1.05, 0.15)),  # E3, rule T2
        (plant(1.0, 1.0, 1.0, zeros_s=(-2.0,)), 1, Fotd(1.0, 1.5, 3.5)),  # E7
        (plant(10.0, 8.0, 1.0, dead_time_s=0.3, zeros_s=(6.0, 3.0)), 1, Fotd(0.225, 1.0, 0.3)),  # E12
        (plant(10.0, 0.5, dead_time_s=1.0, zeros_s=(2.0,)), 1, Fotd(0.625, 4.5, 1.25)),  # E13 PI, rule T3
    ],
)
def test_zeros_are_cancelled_as_in_the_printed_batch(model: ProcessModel, order: int, expected: Fotd) -> None:
    """WX-SIMC-E: gain, lag and dead time from which the printed settings follow."""
    reduced = _fotd(half_rule(model, order))
    assert (reduced.process_gain, reduced.time_constant_s, reduced.dead_time_s) == pytest.approx(
        (expected.process_gain, expected.time_constant_s, expected.dead_time_s), rel=1e-4
    )


def test_an_integrator_counts_as_the_first_lag() -> None:
    """WX-SIMC-E, E6 and E8; error 17: the plain half rule gives 1.188 for E6 PI, not the printed 1.688."""
    e6 = plant(1.0, 1.0, 0.028, zeros_s=(0.17, 0.17), integrators=1)
    assert _ipdt(half_rule(e6, 1)).dead_time_s == pytest.approx(1.188)
    second = _ipdt(half_rule(e6, 2))
    assert (second.second_time_constant_s, second.dead_time_s) == pytest.approx((1.33, 0.358))
    assert _ipdt(half_rule(plant(1.0, 1.0, integrators=1), 1)) == Ipdt(1.0, 0.0, 1.5)


def test_zeros_alone_turn_into_dead_time() -> None:
    """WX-SIMC-E, E14 (1 - s)/s and E15 (1 - s)/(1 + s), which are not strictly proper."""
    assert half_rule_of_factors(1.0, (inf,), (-1.0,), 0.0, 1) == Ipdt(1.0, 0.0, 1.0)
    assert half_rule_of_factors(1.0, (1.0,), (-1.0,), 0.0, 1) == Fotd(1.0, 1.0, 1.0)


@pytest.mark.parametrize(
    ("lags_s", "zero_s", "dead_time_s", "gain", "left_s"),
    [
        ((2.0, 0.5), 4.0, 1.0, 2.0, 0.5),  # T1: 4/2
        ((0.5, 0.1), 4.0, 1.0, 4.0, 0.1),  # T1a: 4/1
        ((0.5, 0.1), 0.6, 1.0, 1.0, 0.1),  # T1b: the lead is lost in the dead time
        ((10.0, 0.9), 1.0, 0.2, 10.0 / 9.0, 10.0),  # a smaller lag that is close: 1/0.9
    ],
)
def test_a_leading_zero_is_cancelled_by_the_rule_for_its_neighbours(
    lags_s: tuple[float, ...], zero_s: float, dead_time_s: float, gain: float, left_s: float
) -> None:
    """Skogestad 2003, section 3, rules T1, T1a, T1b; second order, so that nothing is halved."""
    reduced = half_rule_of_factors(1.0, lags_s, (zero_s,), dead_time_s, 2)
    assert (_sotd(reduced).process_gain, _sotd(reduced).time_constant_s) == pytest.approx((gain, left_s))


def test_a_zero_beside_an_integrator_is_tamed_against_it() -> None:
    """(1 + 20 s)/s with a dead time of 1 acts as a gain of 20; with (1 + 2 s)/s a lag of 3 is left of 5 dead times."""
    assert isinstance(half_rule_of_factors(1.0, (inf,), (20.0,), 1.0, 1), Refusal)
    assert _fotd(half_rule_of_factors(1.0, (inf,), (2.0,), 1.0, 1)) == Fotd(5.0, 3.0, 1.0)
    slow = _fotd(half_rule_of_factors(1.0, (inf, 0.5), (20.0,), 1.0, 1))
    assert (slow.process_gain, slow.time_constant_s) == (20.0, 0.5)


@pytest.mark.parametrize("key", ["(s+1)^-3", "(s+1)^-4"])
def test_the_reaction_curve_of_equal_lags_is_the_closed_form(key: str) -> None:
    """WX-STEP."""
    expected = checks()["WX-STEP"]["expected"][key]
    curve = _curve(plant(*[1.0] * int(key[-1])))
    assert (
        curve.slope_gain_per_s,
        curve.dead_time_s,
        curve.intercept_gain,
        curve.time_63_s,
        curve.fotd.time_constant_s,
    ) == pytest.approx(tuple(expected[name] for name in ("slope", "L", "a", "t63", "T63")), rel=1e-6)
    assert curve.process_gain / curve.slope_gain_per_s == pytest.approx(expected["Ttan"], rel=1e-6)


def test_the_reaction_curve_of_a_lag_with_dead_time_is_itself() -> None:
    curve = _curve(plant(10.0, gain=2.0, dead_time_s=3.0))
    fotd = curve.fotd
    assert (fotd.process_gain, fotd.time_constant_s, fotd.dead_time_s) == pytest.approx((2.0, 10.0, 3.0), rel=1e-6)
    assert curve.intercept_gain == pytest.approx(2.0 * 3.0 / 10.0)


def test_two_point_readings_of_the_exact_response_are_those_of_the_literature() -> None:
    """WX-SK and error 19: Sundaresan and Krishnaswamy's rounded constants miss their own model by one percent."""
    expected = checks()["WX-SK"]["expected"]
    at = expected["SK"]
    assert 1.3 * at["t1"] - 0.29 * at["t2"] == pytest.approx(at["L"], rel=1e-5)
    smith = expected["Smith"]
    assert 1.5 * (smith["t2"] - smith["t1"]) == pytest.approx(smith["T"], rel=1e-5)
    for share, moment_s in ((0.353, at["t1"]), (0.853, at["t2"]), (0.283, smith["t1"]), (0.632, smith["t2"])):
        _, gamma = exponential(THREE_LAGS, moment_s, 1.0)
        assert float(output_row(THREE_LAGS, 1.0) @ gamma) == pytest.approx(share, abs=2e-6)
    own = [-log(1.0 - share) for share in (0.353, 0.853)]
    assert 0.67 * (own[1] - own[0]) == pytest.approx(0.9929, abs=1e-4)


def test_a_plant_that_swings_is_fitted_by_least_squares() -> None:
    """A pair with a damping of 0.98 is almost two equal lags, and no half rule holds for it."""
    swinging = plant(quadratic=(1.0, 1.96), dead_time_s=0.5)
    assert isinstance(half_rule(swinging, 1), Refusal)
    second = _sotd(fitted(swinging, 2))
    assert second.time_constant_s + second.second_time_constant_s == pytest.approx(1.96, rel=0.03)
    assert second.dead_time_s == pytest.approx(0.5, rel=0.05)
    first = _fotd(fitted(swinging, 1))
    assert first.dead_time_s > 0.5
    w = np.geomspace(0.01, 0.1, 5)
    near = np.exp(-first.dead_time_s * 1j * w) / (1.0 + first.time_constant_s * 1j * w)
    assert np.max(np.abs(near / swinging.response(w) - 1.0)) < 0.1


@pytest.mark.parametrize("order", [1, 2])
def test_a_swinging_integrator_is_fitted_as_an_integrator(order: int) -> None:
    swinging = plant(quadratic=(1.0, 1.0), gain=0.3, dead_time_s=0.5, integrators=1)
    reduced = _ipdt(fitted(swinging, order))
    assert reduced.process_gain_per_s == pytest.approx(0.3)
    assert reduced.dead_time_s > 0.5
    assert (reduced.second_time_constant_s > 0.0) is (order == 2)


def test_a_plant_whose_phase_never_reaches_180_degrees_is_fitted_up_to_well_beyond_its_poles() -> None:
    assert isinstance(fitted(ProcessModel((1.0,), (1.0, 1.0, 1.0), 0.0), 1), Fotd)


@pytest.mark.parametrize(
    ("model", "code"),
    [
        (ProcessModel((1.0,), (1.0, -1.0), 0.1), "RUNS_AWAY"),
        (ProcessModel((1.0,), (1.0, 0.0, 0.0), 0.1), "RUNS_AWAY"),
    ],
)
def test_a_plant_that_runs_away_is_not_reduced(model: ProcessModel, code: str) -> None:
    refusal = fitted(model, 1)
    assert isinstance(refusal, Refusal)
    assert refusal.code == code


@pytest.mark.parametrize(
    ("model", "code"),
    [
        (plant(1.0, integrators=1), "INTEGRATES"),
        (ProcessModel((1.0,), (1.0, -1.0), 0.1), "RUNS_AWAY"),
        (plant(1.0, gain=-1.0), "GAIN_NOT_POSITIVE"),
    ],
)
def test_no_reaction_curve_where_a_step_leads_nowhere(model: ProcessModel, code: str) -> None:
    refusal = reaction_curve(model)
    assert isinstance(refusal, Refusal)
    assert refusal.code == code


def test_a_held_plant_answers_a_step_as_the_closed_form() -> None:
    """(1 + s)^-3 with 0.33 s of dead time and 0.02 s of delay, a scan of 0.05 s: three fifths of a scan are left."""
    held = held_plant(plant(1.0, 1.0, 1.0, dead_time_s=0.33), 0.05, 0.02)
    t_s = np.maximum(np.arange(200) * 0.05 - 0.35, 0.0)
    pv = np.zeros(200)
    driven = np.concatenate((np.zeros(held.delay_scans), held.numerator))
    for k in range(200):
        pv[k] = np.sum(driven[: k + 1]) - sum(
            held.denominator[i] * pv[k - i] for i in range(1, min(k, len(held.denominator) - 1) + 1)
        )
    assert pv == pytest.approx(1.0 - np.exp(-t_s) * (1.0 + t_s + t_s**2 / 2.0), abs=1e-9)
