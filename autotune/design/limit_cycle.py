"""Whether a valve with a measured dead band makes the loop swing for ever: -1/N of backlash against the loop.

N is the describing function of backlash (D. P. Atherton, Nonlinear Control Engineering, 1975); a crossing is a
limit cycle that lasts where a larger swing dies away and a smaller one grows (J. M. Loeb's criterion).
"""

from dataclasses import dataclass
from math import pi

import numpy as np
from numpy.typing import NDArray

from autotune.design.optimum import LoopBench
from autotune.identify.describing_function import backlash
from autotune.loop.settings import PidSettings

Complex = NDArray[np.complex128]

_AMPLITUDES = 400
_LARGEST_RATIO = 200.0
"""Largest swing of OP over the dead band that is looked at: beyond, backlash is no more than a little lag."""


@dataclass(frozen=True, slots=True)
class LimitCycle:
    """A lasting oscillation: its period, and half of the peak-to-peak of OP and PV."""

    period_s: float
    op_amplitude_pct: float
    pv_amplitude_pct: float


def limit_cycle(bench: LoopBench, settings: PidSettings, dead_band_pct: float) -> LimitCycle | None:
    """The largest lasting limit cycle with a dead band of total width ``dead_band_pct`` of OP; ``None`` without one."""
    controller = settings.controller_gain * bench.terms.response(settings.integral_time_s, settings.derivative_time_s)
    loop, w = bench.plant.gain * controller, bench.plant.w_rad_per_s
    swings = np.geomspace(0.5 * (1.0 + 1e-3), _LARGEST_RATIO, _AMPLITUDES)
    gains = np.array([backlash(1.0, float(swing)) for swing in swings])
    # The phase of N grows from -90 degrees to 0 with the swing: each frequency asks for one swing.
    wanted = np.angle(-1.0 / loop)
    swing = np.interp(wanted, np.angle(gains), swings)
    excess = np.log(np.interp(swing, swings, np.abs(gains)) * np.abs(loop))
    inside = (wanted > np.angle(gains[0])) & (wanted < np.angle(gains[-1]))
    starts = np.flatnonzero(inside[:-1] & inside[1:] & (np.sign(excess[:-1]) != np.sign(excess[1:])))
    found = []
    for i in starts:
        share = excess[i] / (excess[i] - excess[i + 1])
        at = float(swing[i] + share * (swing[i + 1] - swing[i]))
        if _lasts(at, loop[i], (loop[i + 1] - loop[i]) / (w[i + 1] - w[i])):
            found.append((at, float(w[i] + share * (w[i + 1] - w[i])), float(abs(controller[i]))))
    if not found:
        return None
    at, frequency, gain = max(found)
    op_amplitude_pct = at * dead_band_pct
    return LimitCycle(2.0 * pi / frequency, op_amplitude_pct, op_amplitude_pct / gain)


def _lasts(swing: float, loop: complex, slope: complex) -> bool:
    """Whether a slightly larger swing dies away: 1 + N(a) L(w) = 0 moves to a w with a positive imaginary part."""
    gain, more = backlash(1.0, swing), backlash(1.0, 1.01 * swing)
    shift = -(more - gain) * loop / (gain * slope)
    return shift.imag > 0.0
