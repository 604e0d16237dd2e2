"""Step responses in closed form, against scipy's simulation, matrix exponentials and the exact-hold recursion."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.linalg import expm
from scipy.signal import lsim

from autotune.identify.step_responses import Staircase, responses, step_responses
from tests.identify.exact_relay import Bench, Plant, sampled_relay

POLES: dict[str, list[complex]] = {
    "one lag": [-2.0],
    "an integrator": [0.0],
    "almost an integrator": [-1e-9],
    "two lags": [-1.0, -2.0],
    "two equal lags": [-1.0, -1.0],
    "two nearly equal lags": [-1.0, -1.0 - 1e-8],
    "two lags as near as the fractions allow": [-1.0, -1.004],
    "a pair": [-1.0 + 2.0j, -1.0 - 2.0j],
    "a nearly critical pair": [-1.0 + 1e-6j, -1.0 - 1e-6j],
    "a double integrator": [0.0, 0.0],
    "almost an integrator, and a lag": [-1e-7, -3.0],
    "three lags": [-0.3, -1.0, -20.0],
    "three equal lags": [-1.0, -1.0, -1.0],
    "three nearly equal lags": [-1.0, -1.02, -1.05],
    "three fast equal lags": [-30.0, -30.0, -30.0],
    "two equal lags and a fast one": [-1.0, -1.0, -300.0],
    "an integrator and two fast equal lags": [0.0, -50.0, -50.0],
    "almost an integrator and a pair": [-1e-7, -1.0 + 3.0j, -1.0 - 3.0j],
    "four equal lags": [-1.0, -1.0, -1.0, -1.0],
    "two pairs of equal lags": [-2.0, -2.0, -5.0, -5.0],
}
RNG = np.random.default_rng(7)
EFFECTS_S = np.sort(RNG.uniform(0.0, 7.0, 6))
STAIRS = Staircase(np.sort(RNG.uniform(-0.5, 8.0, 20)), EFFECTS_S, RNG.choice([-10.0, 10.0], 6))


def companion(poles: list[complex]) -> np.ndarray:
    """x' = A x with x the derivatives 0 .. n of a solution of s D(s)."""
    coefficients = np.real(np.poly([*poles, 0.0]))
    a = np.diag(np.ones(len(poles)), 1)
    a[-1] = -coefficients[:0:-1]
    return a


def by_matrix_exponential(poles: list[complex], age_s: np.ndarray) -> np.ndarray:
    """S_0 .. S_n = the state of s D(s) from (0 .. 0, 1)."""
    a = companion(poles)
    return np.array([expm(a * t)[:, -1] if t >= 0 else np.zeros(len(a)) for t in age_s]).T


def off(seen: np.ndarray, expected: np.ndarray) -> float:
    """Largest error of any row against that row's largest."""
    return float(np.max(np.max(np.abs(seen - expected), axis=-1) / np.max(np.abs(expected), axis=-1)))


@pytest.mark.parametrize("poles", POLES.values(), ids=POLES.keys())
def test_step_responses_are_those_of_the_matrix_exponential(poles: list[complex]) -> None:
    age_s = np.array([-0.3, 0.0, 0.01, 0.1, 0.5, 1.0, 3.0, 8.0])
    assert off(step_responses(np.array(poles, complex), age_s), by_matrix_exponential(poles, age_s)) < 1e-9


@pytest.mark.parametrize("poles", POLES.values(), ids=POLES.keys())
def test_a_staircase_is_the_sum_of_its_steps_at_irregular_instants(poles: list[complex]) -> None:
    seen = responses(np.array(poles, complex), STAIRS, 0.33)
    ages = STAIRS.sample_s[:, None] - STAIRS.effect_s - 0.33
    assert off(seen.steps, step_responses(np.array(poles, complex), ages) @ STAIRS.step_pct) < 1e-9
    # 1/D^2 is itself such a plant, with every pole twice
    twice = np.array([by_matrix_exponential([*poles, *poles], row) for row in ages])
    expected = np.einsum("spj,j->ps", twice, STAIRS.step_pct)[: len(seen.squares)]
    assert off(seen.squares, expected) < 1e-8


@pytest.mark.parametrize("name", ["a pair", "three lags", "three equal lags", "almost an integrator and a pair"])
def test_a_staircase_is_what_scipy_simulates(name: str) -> None:
    poles = POLES[name]
    t = np.arange(0.0, 8.0, 0.01)
    moves = {0.5: 4.0, 2.0: -7.0, 2.75: 5.0}
    op = np.sum([step * (t >= at - 1e-9) for at, step in moves.items()], axis=0)
    stairs = Staircase(t, np.array(list(moves)), np.array(list(moves.values())))
    seen = responses(np.array(poles, complex), stairs, 0.0).steps[0]
    _, expected, _ = lsim((np.array([1.0]), np.real(np.poly(poles))), op, t, interp=False)
    assert off(seen[None], expected[None]) < 1e-9


@pytest.mark.parametrize("dead_time_s", [0.0, 0.31])
def test_a_relay_test_is_what_the_exact_hold_recursion_gives(dead_time_s: float) -> None:
    plant = Plant("lags", gain=2.0, lags_s=(1.0, 0.5, 0.2), dead_time_s=dead_time_s, ultimate_period_s=4.0)
    record = sampled_relay(plant, replace(Bench(), noise_ratio=0.0))
    stairs = Staircase(
        np.array([sample.taken.middle_s for sample in record.samples]),
        np.array([effect.effect.middle_s for effect in record.effects[1:]]),
        np.diff([effect.op_pct for effect in record.effects]),
    )
    seen = responses(np.array([-1.0, -2.0, -5.0], complex), stairs, dead_time_s).steps[0] * 2.0 * 10.0
    expected = np.array([sample.pv_pct for sample in record.samples]) - 50.0
    assert off(seen[None], expected[None]) < 1e-9


@pytest.mark.parametrize("name", ["one lag", "a pair", "three lags", "three equal lags"])
def test_squares_and_the_next_step_are_the_derivatives(name: str) -> None:
    """By central differences in each coefficient of D and in the dead time."""
    poles = np.array(POLES[name], complex)
    seen, h = responses(poles, STAIRS, 0.33), 1e-5
    coefficients = np.real(np.poly(poles))
    for power in range(len(poles)):
        moved = [coefficients + sign * h * np.eye(len(coefficients))[-1 - power] for sign in (1, -1)]
        up, down = (responses(np.roots(c).astype(complex), STAIRS, 0.33).steps for c in moved)
        for i in range(len(poles)):
            slope = (up[i] - down[i]) / (2 * h)
            assert -seen.squares[i + power] == pytest.approx(slope, abs=1e-5 * np.max(np.abs(slope)))
    later, sooner = (responses(poles, STAIRS, 0.33 + sign * h).steps for sign in (1, -1))
    slope = (later[0] - sooner[0]) / (2 * h)
    assert -seen.steps[1] == pytest.approx(slope, abs=1e-4 * np.max(np.abs(slope)))


def test_a_step_at_the_very_end_has_no_answer_yet() -> None:
    at_s = np.linspace(0.0, 8.0, 20)
    for poles in ([-1.0], [-1.0, -1.0], [-1.0 + 2.0j, -1.0 - 2.0j, -400.0, -400.0]):
        seen = responses(np.array(poles, complex), Staircase(at_s, at_s[-1:], np.ones(1)), 0.0)
        assert seen.steps[0] == pytest.approx(np.zeros(20), abs=1e-12)
        assert step_responses(np.array(poles, complex), at_s - 8.0)[0] == pytest.approx(np.zeros(20), abs=1e-12)
