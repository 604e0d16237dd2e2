"""A process model brought down to the few numbers that published rules ask for.

Half rule and the cancelling of zeros: S. Skogestad, J. Process Control 13 (2003) 291, sections 2 and 3.
Reaction curve: the tangent of steepest slope (Ziegler and Nichols 1942) and the time to 63 % (Astrom and
Hagglund, Advanced PID Control, 2006).  Where poles swing, the half rule doesn't apply and least squares
on the frequency response take its place.
"""

from cmath import exp
from dataclasses import dataclass
from math import inf, isfinite
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import least_squares

from autotune.design.held import exponential, output_row
from autotune.identify.closed_forms import Fotd
from autotune.identify.model import ProcessModel
from autotune.loop.outcome import Refusal

_REAL_ENOUGH_RATIO = 0.03
"""Imaginary over absolute part up to which a pair of roots counts as one repeated lag, which root search splits."""

_CLOSE_RATIO = 1.6 - 1e-3
_SLOW_RATIO = 5.0
"""Skogestad 2003, section 3: when a smaller lag is close to a zero, and how far a zero counts as slow;
less the error of root search."""

_COMPARED_RATIOS = (0.3, 1.0)
"""Frequencies times dead time at which two answers are compared: around where a loop with that dead time crosses."""

_TURNS = 20
_STEPS = 2048
_HORIZON_LAGS = 10.0


@dataclass(frozen=True, slots=True)
class Sotd:
    """Second order with time delay: K e^(-Ls)/((1 + T1 s)(1 + T2 s)), T1 >= T2; ``process_gain`` in %PV/%OP."""

    process_gain: float
    time_constant_s: float
    second_time_constant_s: float
    dead_time_s: float


@dataclass(frozen=True, slots=True)
class Ipdt:
    """Integrator with dead time: k e^(-Ls)/(s (1 + T2 s)); ``process_gain_per_s`` in %PV/(%OP s), T2 may be 0."""

    process_gain_per_s: float
    second_time_constant_s: float
    dead_time_s: float


@dataclass(frozen=True, slots=True)
class ReactionCurve:
    """What a step of 1 % in OP shows: static gain, steepest slope, its tangent's dead time, and the 63 % time.

    ``slope_gain_per_s`` is in %PV/(%OP s); ``dead_time_s`` is where the tangent meets the start;
    ``time_63_s`` counts from the step.
    """

    process_gain: float
    slope_gain_per_s: float
    dead_time_s: float
    time_63_s: float

    @property
    def intercept_gain(self) -> float:
        """a = slope x L: how far below the start the tangent began."""
        return self.slope_gain_per_s * self.dead_time_s

    @property
    def fotd(self) -> Fotd:
        """The FOTD that the rules of Astrom and Hagglund read off the curve: T = t63 - L."""
        return Fotd(self.process_gain, self.time_63_s - self.dead_time_s, self.dead_time_s)


@dataclass(frozen=True, slots=True)
class _Factors:
    """gain prod(1 + zero s) e^(-L s) / prod(1 + lag s), an integrator being an infinite lag (gain per s)."""

    gain: float
    lags_s: tuple[float, ...]
    zeros_s: tuple[float, ...]
    dead_time_s: float


def integrates(model: ProcessModel) -> bool:
    """Whether the plant has a pole at 0."""
    return model.denominator[-1] == 0.0


def half_rule(model: ProcessModel, order: int) -> Fotd | Sotd | Ipdt | Refusal:
    """First (``order`` 1) or second order with dead time by the half rule; an integrator counts as the first lag.

    Refuses ``HALF_RULE_NOT_FOR_THIS``: a plant that swings, that runs away, or that has no lag left.
    """
    factors = _factors(model)
    return factors if isinstance(factors, Refusal) else _halved(factors, order)


def half_rule_of_factors(
    gain: float, lags_s: tuple[float, ...], zeros_s: tuple[float, ...], dead_time_s: float, order: int
) -> Fotd | Sotd | Ipdt | Refusal:
    """``half_rule`` of gain prod(1 + zero s) e^(-L s) / prod(1 + lag s); ``inf`` among the lags is an integrator."""
    return _halved(_Factors(gain, tuple(sorted(lags_s, reverse=True)), tuple(zeros_s), dead_time_s), order)


def fitted(model: ProcessModel, order: int) -> Fotd | Sotd | Ipdt | Refusal:
    """The half rule where it applies, least squares on the frequency response otherwise.

    Refuses ``RUNS_AWAY`` for a plant with an unstable pole.
    """
    reduced = half_rule(model, order)
    if not isinstance(reduced, Refusal):
        return reduced
    poles = np.roots(model.denominator)
    if bool(np.any(poles.real > 0.0)) or np.count_nonzero(poles == 0.0) > 1:
        return Refusal(
            "RUNS_AWAY",
            "the model has an unstable pole or two integrators",
            "have a specialist tune this loop",
        )
    return _least_squares(model, order)


def reaction_curve(model: ProcessModel) -> ReactionCurve | Refusal:
    """What a step test would show, by exact response; refuses ``INTEGRATES`` and ``RUNS_AWAY``.

    ``GAIN_NOT_POSITIVE`` where the step leads nowhere or the wrong way.
    """
    poles = np.roots(model.denominator)
    if integrates(model):
        return Refusal("INTEGRATES", "PV doesn't rest after a step of OP", "choose a rule for integrating loops")
    if bool(np.any(poles.real >= 0.0)):
        return Refusal("RUNS_AWAY", "the model has an unstable pole", "have a specialist tune this loop")
    gain = float(model.numerator[-1] / model.denominator[-1])
    if not gain > 0.0:
        return Refusal("GAIN_NOT_POSITIVE", f"the model's static gain is {gain:.3g}", "check the control action")
    horizon_s = _HORIZON_LAGS * float(np.sum(1.0 / np.abs(poles)))
    start = np.zeros(len(poles))
    times_s, pv, slope, states = _stepped(model, start, 0.0, horizon_s)
    steepest = int(np.argmax(slope))
    zoomed = _zoomed(model, times_s, states, steepest)
    at = int(np.argmax(zoomed[2]))
    level = (1.0 - np.exp(-1.0)) * gain
    reached = int(np.argmax(pv >= level))
    near_s, near_pv, _, _ = _zoomed(model, times_s, states, reached)
    steepest_gain_per_s = float(zoomed[2][at])
    return ReactionCurve(
        process_gain=gain,
        slope_gain_per_s=steepest_gain_per_s,
        dead_time_s=model.dead_time_s + float(zoomed[0][at] - zoomed[1][at] / steepest_gain_per_s),
        time_63_s=model.dead_time_s + float(np.interp(level, near_pv, near_s)),
    )


def _zoomed(
    model: ProcessModel, times_s: NDArray[np.float64], states: NDArray[np.float64], around: int
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    first, last = max(0, around - 1), min(len(times_s) - 1, around + 1)
    return _stepped(model, states[first], float(times_s[first]), float(times_s[last]))


def _stepped(
    model: ProcessModel, start: NDArray[np.float64], from_s: float, to_s: float
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Times, PV, slope and states of the step response without its dead time, ``_STEPS`` + 1 exact points."""
    unit_s = float(np.sum(1.0 / np.abs(np.roots(model.denominator))))
    phi, gamma = exponential(model, (to_s - from_s) / _STEPS, unit_s)
    states = np.empty((_STEPS + 1, len(start)))
    states[0] = start
    known = 1
    while known <= _STEPS:
        # x(k + known) = Phi^known x(k) + Gam(known): what is known doubles each time.
        more = min(known, _STEPS + 1 - known)
        states[known : known + more] = states[:more] @ phi.T + gamma
        gamma = phi @ gamma + gamma
        phi = phi @ phi
        known += more
    order = len(start)
    generator = np.zeros((order, order))
    generator[0] = -np.array(model.denominator[1:]) * unit_s ** np.arange(1, order + 1)
    generator[1:, : order - 1] = np.eye(order - 1)
    row = output_row(model, unit_s)
    slope = (states @ generator.T @ row + row[0]) / unit_s
    return np.linspace(from_s, to_s, _STEPS + 1), states @ row, slope, states


def _factors(model: ProcessModel) -> _Factors | Refusal:
    """Real lags and zeros of the model, longest first."""
    poles = _real_parts(np.roots(model.denominator))
    zeros = _real_parts(np.roots(model.numerator))
    if poles is None or zeros is None or any(pole > 0.0 for pole in poles) or any(zero == 0.0 for zero in zeros):
        return _no_half_rule("the model swings, runs away or has no static gain")
    gain = model.numerator[len(model.numerator) - 1 - len(zeros)]
    for zero in zeros:
        gain *= -zero
    for pole in poles:
        gain /= -pole if pole else 1.0
    gain = float(gain)
    lags_s = sorted((inf if pole == 0.0 else -1.0 / pole for pole in poles), reverse=True)
    return _Factors(gain, tuple(lags_s), tuple(-1.0 / zero for zero in zeros), model.dead_time_s)


def _real_parts(roots: NDArray[np.inexact[Any]]) -> list[float] | None:
    """The roots as real numbers, or ``None`` where a pair really swings."""
    if bool(np.any(np.abs(roots.imag) > _REAL_ENOUGH_RATIO * np.abs(roots))):
        return None
    return [float(root) for root in roots.real]


def _halved(factors: _Factors, order: int) -> Fotd | Sotd | Ipdt | Refusal:
    """The half rule; positive zeros are cancelled for the dead time that comes out, so that one is sought by turns.

    Sought from the bare dead time and from all lags: of two answers that agree with themselves, the nearer is taken.
    """
    if factors.gain <= 0.0 or sum(lag == inf for lag in factors.lags_s) > 1:
        return _no_half_rule("the model has no positive gain, or two integrators")
    bare_s = _bare_dead_time_s(factors)
    low = _settled(factors, order, bare_s)
    high = _settled(factors, order, bare_s + sum(lag for lag in factors.lags_s[1:] if isfinite(lag)))
    if isinstance(low, Refusal) or isinstance(high, Refusal):
        return _named(high if isinstance(low, Refusal) else low, order)
    points = [ratio * 1j / (max(low.dead_time_s, high.dead_time_s) or 1.0) for ratio in _COMPARED_RATIOS]

    def misfit(reduced: _Factors) -> float:
        return sum(abs(_response(reduced, s) / _response(factors, s) - 1.0) for s in points)

    return _named(min(low, high, key=misfit), order)


def _named(reduced: _Factors | Refusal, order: int) -> Fotd | Sotd | Ipdt | Refusal:
    if isinstance(reduced, Refusal):
        return reduced
    gain, dead_time_s = reduced.gain, reduced.dead_time_s
    first_s, second_s = (*reduced.lags_s, 0.0)[:2]
    if first_s == inf:
        return Ipdt(gain, second_s, dead_time_s)
    return Fotd(gain, first_s, dead_time_s) if order == 1 else Sotd(gain, first_s, second_s, dead_time_s)


def _bare_dead_time_s(factors: _Factors) -> float:
    return factors.dead_time_s + sum(-zero for zero in factors.zeros_s if zero < 0.0)


def _settled(factors: _Factors, order: int, dead_time_s: float, turns: int = _TURNS) -> _Factors | Refusal:
    reduced = _reduced(*_without_zeros(factors, dead_time_s), _bare_dead_time_s(factors), order)
    if isinstance(reduced, Refusal) or reduced.dead_time_s == dead_time_s or turns == 0:
        return reduced
    return _settled(factors, order, reduced.dead_time_s, turns - 1)


def _response(factors: _Factors, s: complex) -> complex:
    response = factors.gain * exp(-factors.dead_time_s * s)
    for zero_s in factors.zeros_s:
        response *= 1.0 + zero_s * s
    for lag_s in factors.lags_s:
        response /= s if lag_s == inf else 1.0 + lag_s * s
    return response


def _reduced(gain: float, lags_s: list[float], bare_s: float, order: int) -> _Factors | Refusal:
    if not lags_s:
        return _no_half_rule("no lag is left beside the dead time")
    kept, rest = lags_s[:order], lags_s[order:]
    half_s = rest[0] / 2.0 if rest else 0.0
    kept[-1] += half_s
    kept.sort(reverse=True)
    return _Factors(gain, tuple(kept), (), bare_s + half_s + sum(rest[1:]))


def _without_zeros(factors: _Factors, dead_time_s: float) -> tuple[float, list[float]]:
    """Gain and lags after each positive zero is cancelled against its neighbour (rules T1 to T3 of the paper)."""
    gain, lags_s = factors.gain, list(factors.lags_s)
    for zero_s in sorted((zero for zero in factors.zeros_s if zero > 0.0), reverse=True):
        lag_s = _neighbour_s(lags_s, zero_s)
        lags_s.remove(lag_s)
        if lag_s <= zero_s:
            # T1, T1a, T1b: lead, tamed by the dead time that the loop will be tuned for
            gain *= zero_s / max(lag_s, dead_time_s) if zero_s >= dead_time_s else 1.0
        elif zero_s >= _SLOW_RATIO * dead_time_s and lag_s < inf:
            gain *= zero_s / lag_s  # T2
        else:
            tamed_s = min(lag_s, _SLOW_RATIO * dead_time_s) if zero_s < _SLOW_RATIO * dead_time_s else zero_s
            # T3; an integrator is the limit of a long lag, and its gain is already per second
            gain *= tamed_s / (lag_s if lag_s < inf else 1.0)
            if tamed_s > zero_s:
                lags_s.append(tamed_s - zero_s)
        lags_s.sort(reverse=True)
    return gain, lags_s


def _neighbour_s(lags_s: list[float], zero_s: float) -> float:
    """The lag to cancel: the closest larger one, unless a smaller one is really close."""
    larger = [lag for lag in lags_s if lag > zero_s]
    smaller = [lag for lag in lags_s if lag <= zero_s]
    if not larger:
        return max(smaller)
    above_s = min(larger)
    if smaller and zero_s / max(smaller) < min(_CLOSE_RATIO, above_s / zero_s):
        return max(smaller)
    return above_s


def _no_half_rule(reason: str) -> Refusal:
    return Refusal("HALF_RULE_NOT_FOR_THIS", reason, "choose another way to reduce the model")


def _least_squares(model: ProcessModel, order: int) -> Fotd | Sotd | Ipdt | Refusal:
    """Lags and dead time for which the frequency response is nearest, relative, up to a phase of -180 degrees."""
    poles = np.roots(model.denominator)
    slow = float(np.min(np.abs(poles[poles != 0.0])))
    w = slow * np.logspace(-2.0, 3.0, 1500)
    response = model.response(w)
    phase = np.unwrap(np.angle(response))
    phase += 2.0 * np.pi * np.round((-np.pi / 2.0 * integrates(model) - phase[0]) / (2.0 * np.pi))
    beyond = np.flatnonzero(phase <= -np.pi)
    top = float(w[beyond[0]]) if len(beyond) else 10.0 * slow
    w = top * np.logspace(-1.7, 0.08, 40)
    response = model.response(w)
    is_integrating = integrates(model)
    gain = float(model.numerator[-1]) / model.denominator[-2 if is_integrating else -1]
    lags = order - is_integrating

    def misfit(logs: NDArray[np.float64]) -> NDArray[np.float64]:
        s = 1j * w
        shape = gain * np.exp(-np.exp(logs[-1]) * s) / np.prod(1.0 + np.exp(logs[:-1])[:, None] * s, axis=0)
        relative = (shape / s if is_integrating else shape) / response - 1.0
        return np.concatenate((relative.real, relative.imag))

    start = np.concatenate((np.log([1.0 / slow, 0.3 / slow][:lags]), [np.log(0.3 / top)]))
    logs = least_squares(misfit, start, method="lm", max_nfev=200).x
    lags_s = sorted((float(lag) for lag in np.exp(logs[:-1])), reverse=True)
    dead_time_s = float(np.exp(logs[-1]))
    if is_integrating:
        return Ipdt(gain, lags_s[0] if lags_s else 0.0, dead_time_s)
    return Fotd(gain, lags_s[0], dead_time_s) if order == 1 else Sotd(gain, lags_s[0], lags_s[1], dead_time_s)
