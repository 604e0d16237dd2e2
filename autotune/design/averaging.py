"""A level that should average: the vessel's band takes up what comes in, so that little goes on downstream.

An inflow step that OP has to answer with ``inflow_pct`` (percent of OP) moves the level by k times that per second.
Elementary: integrate the tank.  P alone that fills the band exactly: K = q/y.  PI: second order, with the
natural frequency for which the peak of the level is the band, w = (k q/y) exp(-zeta acos(zeta)/sqrt(1 - zeta^2)).
The least possible rate of the outflow is k q^2/(2 y): ramp it just in time.
"""

from dataclasses import dataclass
from math import acos, acosh, exp, pi, sqrt

import numpy as np
from scipy.optimize import brentq

from autotune.loop.settings import PidForm, PidSettings

OVERSHOOT_RATIO = 0.3
"""How far the outflow may overshoot the inflow where nobody says otherwise: zeta 0.5 (common practice, no source)."""

_DAMPING_LOW, _DAMPING_HIGH = 0.2, 10.0


@dataclass(frozen=True, slots=True)
class AveragingDesign:
    """Ideal-form settings that use the whole band for the stated inflow step, and how fast the outflow then moves."""

    settings: PidSettings
    damping_ratio: float
    outflow_overshoot_ratio: float
    outflow_rate_pct_per_s: float
    least_outflow_rate_pct_per_s: float


def averaging_p(gain_per_s: float, band_pct: float, inflow_pct: float) -> AveragingDesign:
    """P alone: the level rests at the edge of the band while the inflow stays; ``gain_per_s`` in %PV/(%OP s)."""
    gain = inflow_pct / band_pct
    least = least_rate_pct_per_s(gain_per_s, band_pct, inflow_pct)
    return AveragingDesign(PidSettings(PidForm.IDEAL, gain, None), 1.0, 0.0, 2.0 * least, least)


def averaging_pi(
    gain_per_s: float, band_pct: float, inflow_pct: float, overshoot_ratio: float = OVERSHOOT_RATIO
) -> AveragingDesign:
    """PI whose level peaks at the band and comes back to its setpoint, the outflow overshooting as stated.

    Overshoots that no damping from 0.2 to 10 gives are brought to the nearest.
    """
    zeta = damping_ratio(overshoot_ratio)
    w = gain_per_s * inflow_pct / band_pct * _peak_factor(zeta)
    return AveragingDesign(
        settings=PidSettings(PidForm.IDEAL, 2.0 * zeta * w / gain_per_s, 2.0 * zeta / w),
        damping_ratio=zeta,
        outflow_overshoot_ratio=outflow_overshoot_ratio(zeta),
        outflow_rate_pct_per_s=inflow_pct * w * _outflow_rate_factor(zeta),
        least_outflow_rate_pct_per_s=least_rate_pct_per_s(gain_per_s, band_pct, inflow_pct),
    )


def least_rate_pct_per_s(gain_per_s: float, band_pct: float, inflow_pct: float) -> float:
    """The least possible maximum rate of the outflow, whatever controls it."""
    return gain_per_s * inflow_pct**2 / (2.0 * band_pct)


def damping_ratio(overshoot_ratio: float) -> float:
    """zeta for a stated overshoot of the outflow."""
    low, high = _DAMPING_LOW, _DAMPING_HIGH
    if overshoot_ratio >= outflow_overshoot_ratio(low):
        return low
    if overshoot_ratio <= outflow_overshoot_ratio(high):
        return high
    return float(brentq(lambda zeta: outflow_overshoot_ratio(zeta) - overshoot_ratio, low, high, xtol=1e-9))


def outflow_overshoot_ratio(damping_ratio: float) -> float:
    """Peak of the step response of (2 zeta s + 1)/(s^2 + 2 zeta s + 1), less 1.

    The outflow peaks where the level is back at its setpoint for the first time, a fall from its peak that
    lasts as long again; elementary.
    """
    zeta = damping_ratio
    if zeta < 1.0:
        return exp(-2.0 * zeta * acos(zeta) / sqrt(1.0 - zeta**2))
    return exp(-2.0 * zeta * (acosh(zeta) / sqrt(zeta**2 - 1.0) if zeta > 1.0 else 1.0))


def _peak_factor(zeta: float) -> float:
    """exp(-zeta acos(zeta)/sqrt(1 - zeta^2)), with its continuation beyond critical damping."""
    return sqrt(outflow_overshoot_ratio(zeta))


def _outflow_rate_factor(zeta: float) -> float:
    """The largest rate of the outflow for q = w = 1: the largest of its impulse response, at once from zeta 0.5 on."""
    if zeta >= 0.5:
        return 2.0 * zeta
    damped = sqrt(1.0 - zeta**2)
    t = np.linspace(0.0, pi / damped, 2001)
    rates = np.exp(-zeta * t) * (2.0 * zeta * np.cos(damped * t) + (1.0 - 2.0 * zeta**2) / damped * np.sin(damped * t))
    return float(np.max(rates))
