"""What the means of an asymmetric test tell of the plant at rest.

Over whole cycles of a settled oscillation int(PV) = K int(OP), both counted from rest (Wang, Hang and Zou,
Ind. Eng. Chem. Res. 36 (1997) 3173).  A slow plant hasn't settled when the test ends: PV's mean still moves by
some slope s.  Then, for a plant of residence time M (sum of its lags less its zero) and dead time L,

    mean PV + M s = K mean OP(t - L),

exact for a single lag and, as K/M stays finite, for an integrator.
"""

from dataclasses import dataclass
from math import hypot

import numpy as np

from autotune.identify.findings import Cycle, OscillationPoint
from autotune.identify.fourier import cycle_means, slope_pct_per_s
from autotune.identify.waveforms import Array, Waveforms
from autotune.loop.outcome import Interval

MEAN_OP_AT_LEAST_RATIO = 0.02  # of the amplitude: below, the test is symmetric or the plant all but integrates
HALF_WIDTH_AT_MOST_RATIO = 0.5  # of the gain: wider tells nothing that a technician could use
MEAN_OP_SD_RATIO = 0.005  # of the amplitude: what the dead time still holds back of a window that isn't quite periodic
END_MISMATCH_RATIO = 0.05  # of the swing: where in a scan the last switch fell moves the end of PV by about so much


@dataclass(frozen=True, slots=True)
class Balance:
    """Means over whole cycles: ``mean_pv_pct`` from rest, ``slope_pct_per_s`` of it, both with standard deviations.

    ``window_s`` is the length of the cycles together, ``mean_op_pct`` OP's mean over them from the centre.
    """

    from_s: float
    window_s: float
    mean_pv_pct: float
    mean_pv_sd_pct: float
    slope_pct_per_s: float
    slope_sd_pct_per_s: float
    mean_op_pct: float
    amplitude_pct: float


def balance(signals: Waveforms, cycles: tuple[Cycle, ...]) -> Balance:
    """The means of at least two adjoining cycles."""
    count = len(cycles)
    from_s = cycles[0].from_s
    window_s = cycles[-1].from_s + cycles[-1].period_s - from_s
    means = cycle_means(signals, cycles)
    slope = slope_pct_per_s(cycles, means)
    middles = np.array([cycle.from_s + cycle.period_s / 2 for cycle in cycles])
    off_line = means - np.mean(means) - slope * (middles - np.mean(middles))
    samples = np.sum((signals.sample_s >= from_s) & (signals.sample_s < from_s + window_s))
    one_mean_sd = max(
        float(np.sqrt(np.sum(off_line**2) / max(count - 2, 1))), signals.noise_pct / float(np.sqrt(samples / count))
    )
    swing = float(np.mean([cycle.pv_amplitude_pct for cycle in cycles]))
    spread_s = float(np.sqrt(np.sum((middles - np.mean(middles)) ** 2)))
    drift = signals.drift_doubt_pct_per_s  # a drift seen at rest may go on or stop: it is doubt, no correction
    drifted_pct = drift * (from_s + window_s / 2 - float(signals.sample_s[0]))
    return Balance(
        from_s=from_s,
        window_s=window_s,
        mean_pv_pct=float(np.mean(means)),
        mean_pv_sd_pct=hypot(signals.rest_sd_pct, one_mean_sd / count**0.5, drifted_pct),
        slope_pct_per_s=slope,
        slope_sd_pct_per_s=hypot(max(END_MISMATCH_RATIO * swing / window_s, one_mean_sd / spread_s), drift),
        mean_op_pct=float(mean_op_pct(signals, from_s, window_s, np.zeros(1))[0]),
        amplitude_pct=float(np.mean([cycle.amplitude_pct for cycle in cycles])),
    )


def mean_op_pct(signals: Waveforms, from_s: float, window_s: float, dead_time_s: Array) -> Array:
    """OP's mean from the centre (percent) over the window moved back by each dead time; exact for a held output."""
    edges = np.append(signals.effect_s, max(from_s + window_s, signals.effect_s[-1]) + window_s)
    moved = np.concatenate(([0.0], np.cumsum(signals.op_pct * np.diff(edges))))
    begin = from_s - dead_time_s
    return np.asarray((np.interp(begin + window_s, edges, moved) - np.interp(begin, edges, moved)) / window_s)


def static_gain(means: Balance, point: OscillationPoint, process_sign: int) -> Interval | None:
    """K in %PV/%OP, signed by ``process_sign``; ``None`` where the test can't tell.

    A single dominating lag has M = K/(|G| w) at the oscillation ``point``, and no plant of lags has more: so
    K = mean PV / (mean OP - f slope/(|G| w)) with f = 1 for the slowest plant and 0 for a settled one.  Best
    is f = 1; the interval holds both, and the scatter of the means.
    """
    still_moving_pct = means.slope_pct_per_s / (point.gain * point.frequency_rad_per_s)
    moving_sd_pct = means.slope_sd_pct_per_s / (point.gain * point.frequency_rad_per_s)
    settled_op_pct = means.mean_op_pct - still_moving_pct
    if min(abs(means.mean_op_pct), abs(settled_op_pct)) < MEAN_OP_AT_LEAST_RATIO * means.amplitude_pct:
        return None
    best, settled = means.mean_pv_pct / settled_op_pct, means.mean_pv_pct / means.mean_op_pct
    op_sd_ratio = hypot(moving_sd_pct, MEAN_OP_SD_RATIO * means.amplitude_pct) / abs(settled_op_pct)
    half = 1.96 * hypot(means.mean_pv_sd_pct / abs(settled_op_pct), best * op_sd_ratio)
    low, high = min(best, settled) - half, max(best, settled) + half
    if low <= 0 or high - low > 2 * HALF_WIDTH_AT_MOST_RATIO * best:
        return None
    return Interval(best, low, high) if process_sign > 0 else Interval(-best, -high, -low)
