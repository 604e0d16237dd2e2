"""What the interlocks need to know of the past, at constant cost per sample."""

from dataclasses import dataclass, replace
from math import copysign, isfinite, sqrt

from autotune.loop.sample import Sample

RATE_SAMPLES = 8
"""Samples behind the smoothed rate of PV."""


@dataclass(frozen=True, slots=True)
class Trace:
    """The last samples, and since when things have stood still.

    ``rate_pct_per_s`` is PV's from the last two readings, over at least one scan; ``sure_rate_pct_per_s`` is the
    slope over the last ``RATE_SAMPLES`` lowered by two of its standard deviations, 0 where noise explains it.
    """

    recent: tuple[tuple[float, float], ...] = ()
    rate_pct_per_s: float = 0.0
    pv_since_s: float | None = None
    pv_stood_s: float = 0.0
    echo: int | None = None
    echo_since_s: float | None = None
    echo_stood_s: float = 0.0
    clock_ms: int | None = None
    clock_since_s: float | None = None
    clock_stood_s: float = 0.0

    @property
    def sure_rate_pct_per_s(self) -> float:
        """The slope of PV that noise can't explain."""
        slope, slope_sd = _slope(self.recent)
        return copysign(max(0.0, abs(slope) - 2.0 * slope_sd), slope)


def with_sample(trace: Trace, sample: Sample, t_s: float, scan_s: float) -> Trace:
    """Take in one reading at ``t_s``."""
    trace = _with_pv(trace, sample, t_s, scan_s)
    echo = None if sample.guard is None else sample.guard.heartbeat_echo
    if echo is not None and echo != trace.echo:
        trace = replace(trace, echo=echo, echo_since_s=t_s)
    if sample.plc_clock_ms != trace.clock_ms or sample.plc_clock_ms is None:
        trace = replace(trace, clock_ms=sample.plc_clock_ms, clock_since_s=t_s)
    return replace(
        trace,
        pv_stood_s=_stood_s(trace.pv_since_s, t_s),
        echo_stood_s=_stood_s(trace.echo_since_s, t_s),
        clock_stood_s=_stood_s(trace.clock_since_s, t_s),
    )


def with_claim(trace: Trace, t_s: float) -> Trace:
    """The guard has just come to us: from now on its echo must go on."""
    return replace(trace, echo_since_s=t_s, echo_stood_s=0.0)


def _with_pv(trace: Trace, sample: Sample, t_s: float, scan_s: float) -> Trace:
    if sample.pv_pct is None or not isfinite(sample.pv_pct):
        return trace
    before = trace.recent[-1] if trace.recent else None
    since_s = t_s if before is None or before[1] != sample.pv_pct else trace.pv_since_s
    rate = 0.0 if before is None else (sample.pv_pct - before[1]) / max(t_s - before[0], scan_s)
    recent = (*trace.recent, (t_s, sample.pv_pct))[-RATE_SAMPLES:]
    return replace(trace, recent=recent, rate_pct_per_s=rate, pv_since_s=since_s)


def _stood_s(since_s: float | None, t_s: float) -> float:
    return 0.0 if since_s is None else t_s - since_s


def _slope(recent: tuple[tuple[float, float], ...]) -> tuple[float, float]:
    """Least-squares slope and its standard deviation; 0 and 0 where there is too little to tell."""
    count = len(recent)
    t_mean = sum(t for t, _ in recent) / max(count, 1)
    pv_mean = sum(pv for _, pv in recent) / max(count, 1)
    spread = sum((t - t_mean) ** 2 for t, _ in recent)
    if count < 3 or not spread > 0.0:
        return 0.0, 0.0
    slope = sum((t - t_mean) * (pv - pv_mean) for t, pv in recent) / spread
    misfit = sum((pv - pv_mean - slope * (t - t_mean)) ** 2 for t, pv in recent)
    return slope, sqrt(misfit / (count - 2) / spread)
