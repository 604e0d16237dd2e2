"""Describing functions, and the textbook reading of a relay test.

A describing function is the fundamental's gain of a non-linear element whose input is a pure sinusoid of
amplitude a (half peak-to-peak): D. P. Atherton, Nonlinear Control Engineering (1975); A. Gelb and W. E. Vander
Velde, Multiple-Input Describing Functions and Nonlinear System Design (1968), tables.  d is half of the relay's
high-to-low.  A real waveform is no sinusoid: on a lag with dead time the reading errs by -18.9 to +27.3 % in Ku
(``closed_forms.describing_function_ratio``), before any latency.
"""

from cmath import exp
from math import asin, pi, sqrt

import numpy as np

from autotune.identify.findings import Cycle, OscillationPoint


def relay_gain(amplitude_pct: float, pv_amplitude_pct: float) -> float:
    """Ideal relay: N = 4d/(pi a), %OP/%PV."""
    return 4 * amplitude_pct / (pi * pv_amplitude_pct)


def relay_with_hysteresis(amplitude_pct: float, hysteresis_pct: float, pv_amplitude_pct: float) -> complex:
    """N = 4d/(pi a) (sqrt(1 - (eps/a)^2) - j eps/a), eps the half-width; |N| stays 4d/(pi a).

    Raises ``ValueError`` for a swing inside the hysteresis: the relay never switches.
    """
    _require_beyond(pv_amplitude_pct, hysteresis_pct, "hysteresis")
    return relay_gain(amplitude_pct, pv_amplitude_pct) * exp(-1j * asin(hysteresis_pct / pv_amplitude_pct))


def relay_with_bias(amplitude_pct: float, bias_pct: float, pv_amplitude_pct: float) -> tuple[float, float]:
    """Relay fed with b + a sin: its output's mean 2d/pi asin(b/a), its gain 4d/(pi a) sqrt(1 - (b/a)^2).

    Raises ``ValueError`` for |b| >= a.
    """
    _require_beyond(pv_amplitude_pct, abs(bias_pct), "bias")
    share = bias_pct / pv_amplitude_pct
    return 2 * amplitude_pct / pi * asin(share), relay_gain(amplitude_pct, pv_amplitude_pct) * sqrt(1 - share**2)


def relay_with_dead_zone(amplitude_pct: float, dead_zone_pct: float, pv_amplitude_pct: float) -> float:
    """Three-position relay, 0 within +-dead zone: 4d/(pi a) sqrt(1 - (D/a)^2).  Raises ``ValueError`` for a <= D."""
    _require_beyond(pv_amplitude_pct, dead_zone_pct, "dead zone")
    return relay_gain(amplitude_pct, pv_amplitude_pct) * sqrt(1 - (dead_zone_pct / pv_amplitude_pct) ** 2)


def relay_with_preload(gain: float, amplitude_pct: float, pv_amplitude_pct: float) -> float:
    """Relay parallel to a gain: N = gain + 4d/(pi a), by superposition."""
    return gain + relay_gain(amplitude_pct, pv_amplitude_pct)


def saturation(slope_gain: float, knee_pct: float, amplitude_pct: float) -> float:
    """Slope k up to +-knee, then constant: 2k/pi (asin r + r sqrt(1 - r^2)), r = knee/a; k below the knee."""
    ratio = min(1.0, knee_pct / amplitude_pct)
    return 2 * slope_gain / pi * (asin(ratio) + ratio * sqrt(1 - ratio**2))


def backlash(width_pct: float, amplitude_pct: float) -> complex:
    """Backlash of total width b and unit slope: with q = 1 - b/a, (pi/2 + asin q + q sqrt(1 - q^2))/pi - j(1 - q^2)/pi.

    0 for a swing that the backlash swallows (2a <= b).
    """
    if 2 * amplitude_pct <= width_pct:
        return 0j
    q = 1 - width_pct / amplitude_pct
    return complex((pi / 2 + asin(q) + q * sqrt(1 - q**2)) / pi, -(1 - q**2) / pi)


def describing_function_point(cycles: tuple[Cycle, ...], hysteresis_pct: float) -> OscillationPoint:
    """The textbook reading over ``cycles``: |G| = pi a/(4d) at the observed period, phase -pi + asin(eps/a).

    Nothing is removed: latency, hold and the harmonics are read as plant.  The scatter is that of single cycles.
    A swing inside the hysteresis reads as -90 degrees, the most a relay can turn.
    """
    swings = np.array([cycle.pv_amplitude_pct for cycle in cycles])
    steps = np.array([cycle.amplitude_pct for cycle in cycles])
    periods = np.array([cycle.period_s for cycle in cycles])
    gains = pi * swings / (4 * steps)
    share = min(1.0, hysteresis_pct / float(np.mean(swings)))
    root = len(cycles) ** 0.5
    return OscillationPoint(
        method="describing function",
        frequency_rad_per_s=2 * pi / float(np.mean(periods)),
        gain=float(np.mean(gains)),
        phase_rad=-pi + asin(share),
        gain_sd_ratio=float(np.std(gains, ddof=1) / np.mean(gains)) / root,
        phase_sd_rad=2 * pi * float(np.std(periods, ddof=1) / np.mean(periods)) / root,
    )


def _require_beyond(pv_amplitude_pct: float, threshold_pct: float, name: str) -> None:
    if not pv_amplitude_pct > threshold_pct:
        raise ValueError(f"a swing of {pv_amplitude_pct} % lies inside the {name} of {threshold_pct} %")
