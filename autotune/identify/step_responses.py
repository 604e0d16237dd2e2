"""Exact responses of s^i/D(s) to a staircase, at irregular instants, with their derivatives.

The output of a relay test is piecewise constant, so PV = sum_j du_j S(t - t_j - L) with t_j the effects and S the
step responses in closed form: for simple poles p_k of a monic D of degree n,

    S_i = L^-1[s^(i-1)/D]: S_0 = sum_k r_k phi(p_k, t), S_i = sum_k r_k p_k^(i-1) e^(p_k t), r_k = 1/D'(p_k),
    phi = (e^(pt) - 1)/p,

and a coefficient d_l of D moves S_i by -Q_(i+l), Q_i = L^-1[s^(i-1)/D^2] (double poles: t e^(pt), and
psi = int t e^(pt) for Q_0).  Partial fractions: any textbook of the Laplace transform.

Two things keep it quick and sound.  All of these functions compose: f(a + b) follows from f(a) and f(b), so what the
steps before have left is a state at each step, and a sample needs only its age since the last step.  And where
poles nearly coincide, the fractions cancel; but the responses are entire functions of D's constant coefficient, so
they are the mean over a circle of it (the mean value property), where the poles lie apart.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from autotune.identify.fourier import ComplexArray
from autotune.identify.waveforms import Array

AMPLIFIED_AT_MOST = 100.0  # of rounding by the fractions; that of the derivatives is about its cube
CIRCLE_POINTS = 8
CIRCLE_RADIUS_RATIO = 0.2  # of the poles that nearly coincide: the mean is then exact to 1e-12
NEAR_RATIO = 0.25  # poles that near count as one group
SLOW_AGE = 0.5  # |p| t below which (e^(pt) - 1)/p is summed as a series
SHORTEST_S = 1e-6  # where nothing was answered yet
SERIES_TERMS = 12  # 0.5^12/12! = 5e-13 of the first


@dataclass(frozen=True, slots=True)
class Staircase:
    """Where PV is wanted, and the steps: ``step_pct`` (signed change of OP) at each ``effect_s``, in order of time."""

    sample_s: Array
    effect_s: Array
    step_pct: Array


@dataclass(frozen=True, slots=True)
class Responses:
    """``steps`` holds S_0 .. S_n, ``squares`` Q_0 .. Q_(2n-2) of the staircase, one row each, a column a sample."""

    steps: Array
    squares: Array


def responses(poles_per_s: ComplexArray, stairs: Staircase, dead_time_s: float) -> Responses:
    """S and Q at every sample, ``dead_time_s`` after the steps; complex poles in conjugate pairs; any number of steps.

    The derivative of S_i with respect to the dead time is -S_(i+1).
    """
    longest_s = max(float(stairs.sample_s[-1] - stairs.effect_s[0]), SHORTEST_S)
    poles = _apart(_real_if_real(poles_per_s), longest_s)
    return _combined(poles, _staircase_modes(poles, stairs, dead_time_s, longest_s))


def step_responses(poles_per_s: ComplexArray, age_s: Array) -> Array:
    """S_0 .. S_n, term by term as defined, at ages of any shape (the last axes of the answer); 0 before the step."""
    longest_s = max(float(np.max(age_s)), SHORTEST_S)
    poles = _apart(_real_if_real(poles_per_s), longest_s)
    power, phi, _ = _power_and_phi(poles, np.maximum(age_s, 0.0), longest_s)
    residue = _residue(poles)
    rows = [np.tensordot(residue, phi, axes=2)]
    rows += [np.tensordot(residue * poles**i, power, axes=2) for i in range(poles.shape[-1])]
    return np.asarray(np.array(rows).real / len(poles) * (age_s >= 0))


def _real_if_real(poles: ComplexArray) -> NDArray[np.inexact]:
    return poles if np.any(poles.imag) else poles.real


def _apart(poles: NDArray[np.inexact], longest_s: float) -> NDArray[np.inexact]:
    """The poles as one row; where they nearly coincide, a row for each point of the circle.

    A group of c poles is the roots of its own polynomial; moving the last coefficient by radius^c drives them apart.
    """
    size = np.maximum(np.abs(poles), 1 / longest_s)
    distance = np.abs(poles[:, None] - poles)
    distance[np.diag_indices(len(poles))] = 1.0
    if np.all(size ** (len(poles) - 1) <= AMPLIFIED_AT_MOST * np.prod(distance, axis=1)):
        return poles[None, :]
    np.fill_diagonal(distance, 0.0)
    circle = np.exp(2j * np.pi * (np.arange(CIRCLE_POINTS) + 0.25) / CIRCLE_POINTS)
    first_near = np.argmax(distance < NEAR_RATIO * size[None, :], axis=1)
    groups = [poles[first_near == first] for first in np.unique(first_near)]
    return np.concatenate([_driven_apart(group, circle, longest_s) for group in groups], axis=1)


def _driven_apart(group: NDArray[np.inexact], circle: ComplexArray, longest_s: float) -> ComplexArray:
    count = len(group)
    if count == 1:
        return np.full((len(circle), 1), group[0], dtype=complex)
    radius = CIRCLE_RADIUS_RATIO * max(float(np.max(np.abs(group))), 1 / longest_s)
    companion = np.zeros((len(circle), count, count), dtype=complex)
    companion[:, 1:, :-1] = np.eye(count - 1)
    companion[:, :, -1] = -np.poly(group)[:0:-1]
    companion[:, 0, -1] -= radius**count * circle
    return np.asarray(np.linalg.eigvals(companion))


def _power_and_phi(
    poles: NDArray[np.inexact], age_s: Array, longest_s: float
) -> tuple[NDArray[np.inexact], NDArray[np.inexact], NDArray[np.inexact]]:
    """e^(pt), phi, and what to divide an integral by: the pole, or 1 where a series stands in its place."""
    exponent = np.multiply.outer(poles, age_s)
    power = np.exp(exponent)
    is_slow = np.abs(poles) * longest_s < SLOW_AGE
    divisor = np.where(is_slow, 1.0, poles)[(..., *(None,) * age_s.ndim)]
    phi = (power - 1) / divisor
    if np.any(is_slow):
        phi[is_slow] = age_s * _series(exponent[is_slow], 1)
    return power, phi, divisor


def _modes(poles: NDArray[np.inexact], age_s: Array, longest_s: float) -> NDArray[np.inexact]:
    """e^(pt), its integral phi, t e^(pt) and its integral psi: first axis; then circle, poles, time."""
    power, phi, divisor = _power_and_phi(poles, age_s, longest_s)
    t_power = age_s * power
    psi = (t_power - phi) / divisor
    is_slow = np.abs(poles) * longest_s < SLOW_AGE
    if np.any(is_slow):
        psi[is_slow] = age_s**2 * _series(np.multiply.outer(poles[is_slow], age_s), 2)
    return np.array((power, phi, t_power, psi))


def _series(x: NDArray[np.inexact], first: int) -> NDArray[np.inexact]:
    """sum x^k / (k! (k + first)): int_0^1 u^(first - 1) e^(xu) du."""
    term, total = np.ones_like(x), np.zeros_like(x)
    for k in range(SERIES_TERMS):
        total = total + term / (k + first)
        term = term * x / (k + 1)
    return total


def _staircase_modes(
    poles: NDArray[np.inexact], stairs: Staircase, dead_time_s: float, longest_s: float
) -> NDArray[np.inexact]:
    """Each mode summed over the steps: the state that they left at the last step, carried on by the age since."""
    arrived_s = stairs.sample_s - dead_time_s
    last = np.searchsorted(stairs.effect_s, arrived_s, side="right") - 1
    seen = last >= 0
    last = np.maximum(last, 0)
    between_s = np.maximum(stairs.effect_s[:, None] - stairs.effect_s, 0.0)
    weights = np.tri(len(between_s)) * stairs.step_pct
    power, phi, t_power, psi = (_modes(poles, between_s, longest_s) * weights).sum(axis=-1)[..., last]
    since = _modes(poles, np.where(seen, arrived_s - stairs.effect_s[last], 0.0), longest_s)
    modes = power * since
    modes[1] += phi
    modes[2] += t_power * since[0]
    modes[3] += t_power * since[1] + psi
    return np.asarray(modes * seen)


def _combined(poles: NDArray[np.inexact], modes: NDArray[np.inexact]) -> Responses:
    """The fractions' sum over the poles, and the mean over the circle; the imaginary parts of conjugates cancel."""
    count, order = poles.shape
    residue = _residue(poles)
    double = residue**2
    simple = -2 * double * (np.sum(1 / _gaps(poles), axis=-1) - 1)  # -D''/D'^3; the diagonal of ones is taken off
    fractions = np.zeros((3 * order, 4, count, order), dtype=poles.dtype)
    fractions[0, 1], fractions[order + 1, 1], fractions[order + 1, 3] = residue, simple, double
    raised, below = np.ones_like(poles), np.zeros_like(poles)  # p^i, i p^(i-1)
    for i in range(2 * order - 2):
        fractions[order + 2 + i, 0] = simple * raised + double * below
        fractions[order + 2 + i, 2] = double * raised
        below = raised * (i + 1)
        raised = raised * poles
    for i in range(order):
        fractions[1 + i, 0] = residue * poles**i
    rows = (fractions.reshape(3 * order, -1) @ modes.reshape(4 * count * order, -1)).real / count
    return Responses(rows[: order + 1], rows[order + 1 :])


def _gaps(poles: NDArray[np.inexact]) -> NDArray[np.inexact]:
    """Each pole's distances to the others, and 1 to itself."""
    return np.asarray(poles[..., :, None] - poles[..., None, :] + np.eye(poles.shape[-1]))


def _residue(poles: NDArray[np.inexact]) -> NDArray[np.inexact]:
    """1/D' at each pole."""
    return np.asarray(1 / np.prod(_gaps(poles), axis=-1))
