"""What PV does at rest: its noise, its drift and how long it may stand still.  Robust against a few outliers."""

import itertools
from collections.abc import Sequence
from dataclasses import dataclass
from math import inf, sqrt
from statistics import median

SAMPLES_AT_LEAST = 8
"""Fewer samples tell nothing about noise or drift."""

BELOW_RATIO, ABOVE_RATIO = 0.1587, 0.8413
"""The share of a normal law that lies below minus and plus one standard deviation."""

STILL_PER_LONGEST = 5.0
"""How many times longer than at rest PV may stand still in a test (common practice, no source)."""

STILL_SCANS_AT_LEAST = 10
"""PV is never called frozen before this many scans (common practice, no source)."""


@dataclass(frozen=True, slots=True)
class Rest:
    """PV at rest, in percent of span and seconds.

    ``noise_pct`` is a standard deviation, ``drift_pct_per_s`` a slope with its own standard deviation
    ``drift_sd_pct_per_s``.  ``still_s`` is the longest time without any change, ``None`` where PV never changed.
    """

    samples: int
    mean_pct: float
    noise_pct: float
    drift_pct_per_s: float
    drift_sd_pct_per_s: float
    still_s: float | None


def measure_rest(times_s: Sequence[float], pvs_pct: Sequence[float]) -> Rest:
    """Measure PV at rest from samples in order of time; raises ``ValueError`` below ``SAMPLES_AT_LEAST``.

    The slope is the median over all pairs that lie half the record apart, the noise half the range of the middle
    68 % about that line, so that up to 15 % of outliers do not count.  It is never below the rounding error of the
    finest step seen, step/sqrt(12).  The slope's standard deviation: the mean over such pairs has
    4 sd/(T sqrt n), a median sqrt(pi/2) more.
    """
    count = len(times_s)
    if count < SAMPLES_AT_LEAST:
        raise ValueError(f"{count} samples tell nothing about rest; {SAMPLES_AT_LEAST} are needed")
    half = count // 2
    pairs = [(i, i + half) for i in range(count - half) if times_s[i + half] > times_s[i]]
    drift = median((pvs_pct[j] - pvs_pct[i]) / (times_s[j] - times_s[i]) for i, j in pairs) if pairs else 0.0
    residues = sorted(pv - drift * (t - times_s[0]) for t, pv in zip(times_s, pvs_pct, strict=True))
    middle_pct = residues[round(ABOVE_RATIO * (count - 1))] - residues[round(BELOW_RATIO * (count - 1))]
    moves = [abs(after - before) for before, after in itertools.pairwise(pvs_pct) if after != before]
    noise = max(0.5 * middle_pct, min(moves) / sqrt(12.0) if moves else 0.0)
    centre = median(pvs_pct)
    duration_s = times_s[-1] - times_s[0]
    inliers = [pv for pv in pvs_pct if abs(pv - centre) <= 4.0 * noise + abs(drift) * duration_s] or [centre]
    return Rest(
        samples=count,
        mean_pct=sum(inliers) / len(inliers),
        noise_pct=noise,
        drift_pct_per_s=drift,
        drift_sd_pct_per_s=5.01 * noise / (duration_s * sqrt(count)) if duration_s > 0.0 else inf,
        still_s=_longest_still_s(times_s, pvs_pct) if moves else None,
    )


def _longest_still_s(times_s: Sequence[float], pvs_pct: Sequence[float]) -> float:
    longest_s, since_s = 0.0, times_s[0]
    for t_s, before_pct, now_pct in zip(times_s[1:], pvs_pct, pvs_pct[1:], strict=False):
        longest_s = max(longest_s, t_s - since_s)
        since_s = t_s if now_pct != before_pct else since_s
    return longest_s


def frozen_after_s(rest: Rest, scan_s: float, declared_s: float | None) -> float | None:
    """After which time without any change PV counts as frozen: as declared, or learnt from rest (seconds).

    ``None`` where nothing was declared and PV never changed at rest: then standing still is no sign of a fault.
    """
    if declared_s is not None or rest.still_s is None:
        return declared_s
    return max(STILL_PER_LONGEST * rest.still_s, STILL_SCANS_AT_LEAST * scan_s)
