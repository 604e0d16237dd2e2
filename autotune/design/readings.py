"""From a process model to the settings of one published rule, or why the rule doesn't suit it."""

from dataclasses import dataclass
from math import inf, log10, pi

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq

from autotune.design import model_laws as laws
from autotune.design.model_rules import Basis, ModelRule
from autotune.design.reduction import Ipdt, ReactionCurve, Sotd, fitted, integrates, reaction_curve
from autotune.identify.closed_forms import Fotd
from autotune.identify.model import ProcessModel
from autotune.loop.conversion import check_settings
from autotune.loop.outcome import Refusal
from autotune.loop.settings import PidSettings

_POINTS_PER_DECADE = 200

_NO_DEAD_TIME_RATIO = 1e-6
"""Dead time over the shortest lag below which it is none."""

_NO_ULTIMATE_POINT = Refusal(
    "NO_ULTIMATE_POINT",
    "the model's phase doesn't cross -180 degrees, so no gain makes it swing",
    "choose a rule that reads the step response, or lambda tuning",
)


@dataclass(frozen=True, slots=True)
class PlantReadings:
    """A model as the rules read it; each a refusal where the model has no such thing.

    ``ultimate`` holds gain and period at the first -180 degrees, with the static gain (infinite where
    the plant integrates).
    """

    curve: ReactionCurve | Refusal
    first_order: Fotd | Sotd | Ipdt | Refusal
    second_order: Fotd | Sotd | Ipdt | Refusal
    ultimate: laws.UltimateReading | Refusal


def plant_readings(model: ProcessModel) -> PlantReadings:
    """All readings of one model."""
    return PlantReadings(reaction_curve(model), fitted(model, 1), fitted(model, 2), ultimate_reading(model))


def ultimate_reading(model: ProcessModel) -> laws.UltimateReading | Refusal:
    """Exact ultimate point: the first crossing of -180 degrees by the unwrapped phase.

    Refuses ``NO_ULTIMATE_POINT``.
    """
    roots = np.concatenate((np.roots(model.denominator), np.roots(model.numerator)))
    sizes = np.abs(roots[roots != 0.0])
    fastest = float(np.max(sizes, initial=0.0))
    if model.dead_time_s * fastest > _NO_DEAD_TIME_RATIO or model.dead_time_s > 0.0 == fastest:
        sizes = np.append(sizes, 1.0 / model.dead_time_s)
    low, high = 1e-3 * float(np.min(sizes, initial=inf)), 1e3 * float(np.max(sizes, initial=0.0))
    if not high > low:
        return _NO_ULTIMATE_POINT  # an integrator alone
    w = np.geomspace(low, high, int(_POINTS_PER_DECADE * log10(high / low)))
    beyond = np.flatnonzero(phase_rad(model, w) <= -pi)
    if len(beyond) == 0 or beyond[0] == 0:
        return _NO_ULTIMATE_POINT
    wu = float(brentq(lambda x: float(phase_rad(model, np.array([x]))[0]) + pi, w[beyond[0] - 1], w[beyond[0]]))
    at_wu = float(abs(model.response(np.array([wu]))[0]))
    gain = inf if integrates(model) else model.numerator[-1] / model.denominator[-1]
    return laws.UltimateReading(gain, 1.0 / at_wu, 2.0 * pi / wu)


def phase_rad(model: ProcessModel, w_rad_per_s: NDArray[np.float64]) -> NDArray[np.float64]:
    """The phase without jumps, from 0 (or -90 degrees per integrator) upwards: every root has its own angle."""
    angles = _angles(model.numerator, w_rad_per_s) - _angles(model.denominator, w_rad_per_s)
    return np.asarray(angles - model.dead_time_s * w_rad_per_s)


def _angles(coefficients: tuple[float, ...], w: NDArray[np.float64]) -> NDArray[np.float64]:
    """Sum of the angles of jw - root, those of right roots turned so that each begins at 0."""
    roots = np.roots(coefficients)[:, None]
    left = np.where(roots.real > 0.0, -np.conj(roots), roots)
    return np.asarray(np.sum(np.where(roots.real > 0.0, -1.0, 1.0) * np.angle(1j * w - left), axis=0))


def settings_by(rule: ModelRule, readings: PlantReadings) -> PidSettings | Refusal:
    """The rule's settings in its own form.

    Refuses what keeps the rule from this plant: the reading's own refusal, ``NOT_FOR_THIS_PLANT``,
    ``OUTSIDE_LIMITS`` and ``NO_DEAD_TIME``.
    """
    reading = _reading(rule.basis, readings)
    if isinstance(reading, Refusal):
        return reading
    ratio = _ratio(reading)
    if not ratio > 0.0:
        return Refusal(
            "NO_DEAD_TIME", "the model has no dead time, and the rule's gain would have no bound", "choose another rule"
        )
    if not rule.dead_time_ratio_low <= ratio <= rule.dead_time_ratio_high:
        name = "kappa = 1/(Kp Ku)" if rule.basis is Basis.FREQUENCY else "L/T"
        return Refusal(
            "OUTSIDE_LIMITS",
            f"{name} is {ratio:.2g}, and the rule holds from {rule.dead_time_ratio_low:g} to "
            f"{rule.dead_time_ratio_high:g}",
            "choose another rule",
        )
    # Each row's law takes what its basis reads; a test runs every row.
    gain, ti_s, td_s = rule.law(reading)  # type: ignore[arg-type]
    settings = PidSettings(rule.form, gain, ti_s, td_s)
    return check_settings(settings) or settings


Reading = Fotd | Sotd | Ipdt | ReactionCurve | laws.UltimateReading


def _reading(basis: Basis, readings: PlantReadings) -> Reading | Refusal:
    kind: type[Reading]
    found: Reading | Refusal
    match basis:
        case Basis.REACTION_CURVE:
            return readings.curve
        case Basis.STEP:
            return readings.curve if isinstance(readings.curve, Refusal) else readings.curve.fotd
        case Basis.FREQUENCY:
            return _ultimate_with_static_gain(readings.ultimate)
        case Basis.FIRST_ORDER:
            found, kind = readings.first_order, Fotd
        case Basis.SECOND_ORDER:
            found, kind = readings.second_order, Sotd
        case Basis.INTEGRATOR:
            found, kind = readings.first_order, Ipdt
        case _:
            found, kind = readings.second_order, Ipdt
    if isinstance(found, kind | Refusal):
        return found
    is_for_integrators = kind is Ipdt
    return Refusal(
        "NOT_FOR_THIS_PLANT",
        f"the rule is for a plant that {'integrates' if is_for_integrators else 'comes to rest'}, and this one "
        f"{'comes to rest' if is_for_integrators else 'integrates'}",
        "choose another rule",
    )


def _ultimate_with_static_gain(ultimate: laws.UltimateReading | Refusal) -> laws.UltimateReading | Refusal:
    if isinstance(ultimate, Refusal) or ultimate.process_gain < inf:
        return ultimate
    return Refusal("INTEGRATES", "the plant integrates and has no static gain", "choose a rule for integrating loops")


def _ratio(reading: Reading) -> float:
    """L/T, kappa, or for an integrator 1 where there is a dead time at all."""
    match reading:
        case laws.UltimateReading():
            return reading.gain_ratio
        case ReactionCurve():
            return reading.dead_time_s / reading.fotd.time_constant_s
        case Ipdt():
            return 1.0 if reading.dead_time_s > 0.0 else 0.0
        case _:
            return reading.dead_time_s / reading.time_constant_s
