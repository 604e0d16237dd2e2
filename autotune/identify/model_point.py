"""The ultimate point of a fitted structure, and how each of its parameters moves it.

At -180 degrees of G = B e^(-Ls)/D: with d ln G/d theta = (d ln|G|) + j (d phase), a parameter moves the crossing by
dw = -phase_theta/phase_w, ln Tu by -dw/w and ln Ku by -(ln|G|_theta + ln|G|_w dw).  Time in observed periods.
"""

from dataclasses import dataclass
from math import log, pi

import numpy as np

from autotune.identify.model_bank import denominator, denominator_slopes
from autotune.identify.output_error import Fit
from autotune.identify.waveforms import Array

LOWEST, HIGHEST = 0.02, 60.0  # of the observed frequency: where a crossing is looked for
GRID = 2 * pi * np.geomspace(LOWEST, HIGHEST, 500)
NEWTON_STEPS = 8


@dataclass(frozen=True, slots=True)
class Crossing:
    """ln Ku and ln Tu (periods), their gradients (rows) over shape, dead time and numerator (ascending), and kappa.

    ``kappa_ratio`` is |d ln|G|/d ln w| over |d phase/d ln w|: by how much a phase error (rad) moves ln Ku.
    """

    log_gain: float
    log_period_ratio: float
    gradients: Array
    kappa_ratio: float


def crossing(fit: Fit, later_ratio: float = 0.0) -> Crossing | None:
    """The first crossing of -180 degrees, with ``later_ratio`` (periods, may be negative) more dead time than fitted.

    ``None`` where the fit has none: a gain of the wrong sign, a phase beyond -180 degrees at the lowest
    frequency, or never there at the highest.
    """
    bottom, top = denominator(fit.shape), fit.numerator[::-1]
    dead_time_ratio = max(fit.dead_time_ratio + later_ratio, 0.0)
    if not fit.numerator[0] > 0:
        return None
    s = 1j * GRID
    phase = np.unwrap(np.angle(np.polyval(top, s) / np.polyval(bottom, s))) - GRID * dead_time_ratio
    beyond = phase <= -pi
    at = int(np.argmax(beyond))
    if not beyond[at] or at == 0:
        return None
    w = float(GRID[at - 1] + (GRID[at] - GRID[at - 1]) * (-pi - phase[at - 1]) / (phase[at] - phase[at - 1]))
    for _ in range(NEWTON_STEPS):
        off = float(np.angle(-_response(top, bottom, dead_time_ratio, w)))
        w = min(max(w - off / _slope(top, bottom, dead_time_ratio, w).imag, float(GRID[at - 1])), float(GRID[at]))
    return _crossing_at(w, fit, dead_time_ratio)


def _crossing_at(w: float, fit: Fit, dead_time_ratio: float) -> Crossing:
    bottom, top = denominator(fit.shape), fit.numerator[::-1]
    s = 1j * w
    powers = s ** np.arange(max(len(bottom), len(top)))
    by_shape = -(denominator_slopes(fit.shape) @ powers[: len(bottom) - 1]) / np.polyval(bottom, s)
    by_numerator = powers[: len(top)] / np.polyval(top, s)
    by_parameter = np.concatenate((by_shape, [-s], by_numerator))
    by_w = _slope(top, bottom, dead_time_ratio, w)
    dw = -by_parameter.imag / by_w.imag
    return Crossing(
        log_gain=-float(np.log(np.abs(_response(top, bottom, dead_time_ratio, w)))),
        log_period_ratio=log(2 * pi / w),
        gradients=np.array([-(by_parameter.real + by_w.real * dw), -dw / w]),
        kappa_ratio=float(abs(by_w.real / by_w.imag)),
    )


def _response(top: Array, bottom: Array, dead_time_ratio: float, w: float) -> complex:
    s = 1j * w
    return complex(np.polyval(top, s) / np.polyval(bottom, s) * np.exp(-s * dead_time_ratio))


def _slope(top: Array, bottom: Array, dead_time_ratio: float, w: float) -> complex:
    """d ln G/d w."""
    s = 1j * w
    turning = np.polyval(np.polyder(top), s) / np.polyval(top, s) if len(top) > 1 else 0.0
    return complex(1j * (turning - np.polyval(np.polyder(bottom), s) / np.polyval(bottom, s) - dead_time_ratio))
