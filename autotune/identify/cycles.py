"""Whole relay cycles of a record, from up-switch to up-switch of the output."""

from itertools import pairwise

import numpy as np
from scipy.special import ndtri

from autotune.identify.findings import Cycle
from autotune.identify.waveforms import Array, Waveforms

SAME_LEVEL_PCT = 0.02  # two levels of the output closer than this are one


def whole_cycles(signals: Waveforms) -> tuple[Cycle, ...]:
    """Every whole cycle of the relay, the first included.

    A cycle begins where the output goes from below its centre to above it; the output at rest at its
    centre belongs to none.  Cycles during which no sample was taken are left out.
    """
    ups = [
        i
        for i, (before, after) in enumerate(pairwise(signals.op_pct), start=1)
        if after > SAME_LEVEL_PCT and (before < -SAME_LEVEL_PCT or i == _first_move(signals.op_pct))
    ]
    cycles = []
    for first, last in pairwise(ups):
        from_s, to_s = float(signals.effect_s[first]), float(signals.effect_s[last])
        inside = (signals.sample_s >= from_s) & (signals.sample_s < to_s)
        moves = signals.op_pct[first:last]
        if np.any(inside) and np.all(np.abs(moves) > SAME_LEVEL_PCT):
            cycles.append(
                Cycle(
                    from_s=from_s,
                    period_s=to_s - from_s,
                    pv_amplitude_pct=swing_pct(signals.pv_pct[inside], signals.noise_pct),
                    amplitude_pct=float(np.ptp(moves)) / 2,
                )
            )
    return tuple(cycles)


def usable_cycles(cycles: tuple[Cycle, ...], discard: int = 1) -> tuple[Cycle, ...]:
    """The last run of adjoining cycles with the same steps of the output, without its first ``discard``.

    The first cycle still holds the way from rest; a change of the steps starts a new run.
    """
    run: list[Cycle] = []
    for cycle in cycles:
        if run and not _adjoins(run[-1], cycle):
            run = []
        run.append(cycle)
    return tuple(run[discard:])


def swing_pct(pv_pct: Array, noise_pct: float) -> float:
    """Half peak-to-peak of PV (percent of span) over the samples of one cycle, with the noise's share removed.

    The highest of k noisy readings of one level lies above it by sigma times the expected largest of k
    normal deviates, about the quantile at (k - 3/8)/(k + 1/4) (Blom, Statistical Estimates and
    Transformed Beta-Variables, 1958).  k counts the readings within 2 sigma of the extreme: a sharp peak
    has one and keeps its full height, a flat one has many.
    """
    high, low = float(np.max(pv_pct)), float(np.min(pv_pct))
    top = int(np.sum(pv_pct >= high - 2 * noise_pct))
    bottom = int(np.sum(pv_pct <= low + 2 * noise_pct))
    excess = noise_pct * (_largest_of(top) + _largest_of(bottom))
    return max(0.0, high - low - excess) / 2


def _largest_of(k: int) -> float:
    return float(ndtri((k - 0.375) / (k + 0.25)))


def _first_move(op_pct: Array) -> int:
    return int(np.argmax(np.abs(op_pct) > SAME_LEVEL_PCT))


def _adjoins(before: Cycle, after: Cycle) -> bool:
    touches = abs(before.from_s + before.period_s - after.from_s) < 1e-6 * after.period_s
    return touches and abs(before.amplitude_pct - after.amplitude_pct) < SAME_LEVEL_PCT
