"""From the points seen to the ultimate point concluded: what every plant that fits them says at -180 degrees.

A relay test swings where plant, network latency, hold and hysteresis together turn by -180 degrees; the plant
alone has turned less there.  All shapes (``shapes``) run through the fundamental as seen; those that also
agree with the harmonics and with the balance of the means are kept, weighed by their likelihood, and each
tells its own Ku and Tu.  Best is the weighted median; the interval is the hull of all that
agree (a profile likelihood), widened by the scatter of the fundamental.
"""

from collections.abc import Iterator
from dataclasses import dataclass, replace
from math import degrees, exp, hypot, log, pi

import numpy as np

from autotune.identify.findings import Cycle, OscillationPoint, UltimatePoint
from autotune.identify.shapes import HIGHEST_RATIO, Shapes, response, shapes_through, slopes_at, ultimate_ratio
from autotune.identify.static_gain import Balance, balance, mean_op_pct
from autotune.identify.waveforms import Array, Waveforms
from autotune.loop.outcome import Interval

HARMONICS_USED = (2, 3)  # higher ones stand on too few samples of too little PV
AGREES_CHI_SQUARED = 5.0  # 3.84 is 95 % at one degree of freedom; the grid seldom holds the very best shape
WEIGHS_CHI_SQUARED = 40.0  # beyond, a weight of 2e-9
HARMONIC_SLACK_RATIO = 0.02  # the grid's step and what no simple shape has
BALANCE_SLACK_RATIO = 0.02  # of OP's amplitude: what the balance leaves out beyond the slope of PV's mean
MISFIT_SUSPICIOUS = 4.0  # of chi^2 over its degrees of freedom
GAIN_FLOOR_RATIO = 0.015  # no plant is one of the shapes
PERIOD_FLOOR_RATIO = 0.0075  # the same


@dataclass(frozen=True, slots=True)
class _Conclusion:
    """Logarithms of Ku and Tu with the half widths that each cause adds, and how well the best shape fits."""

    log_gain: float
    log_period: float
    gain_hull: tuple[float, float]  # low, high: what the shapes leave open, about log_gain
    period_hull: tuple[float, float]
    gain_scatter: float
    period_scatter: float
    shapes: int
    misfit: float
    is_open: bool

    def gain_ends(self) -> tuple[float, float]:
        """Low and high of ln Ku."""
        return _ends(self.log_gain, self.gain_hull, hypot(self.gain_scatter, GAIN_FLOOR_RATIO))

    def period_ends(self) -> tuple[float, float]:
        """Low and high of ln Tu."""
        return _ends(self.log_period, self.period_hull, hypot(self.period_scatter, PERIOD_FLOOR_RATIO))


def infer(signals: Waveforms, cycles: tuple[Cycle, ...], points: tuple[OscillationPoint, ...]) -> UltimatePoint:
    """Ku (%OP/%PV) and Tu (s) of the plant alone, with intervals of 95 %, from at least two adjoining ``cycles``.

    ``points`` begin with the fundamental, at a negative phase; the harmonics may follow.  Where the stamps are
    hulls the conclusion is drawn three times: as stamped, with all that the stamps leave unknown counted as
    plant (the low end of Ku), and with none of it (the high end); this hull bounds and isn't averaged.
    """
    means = balance(signals, cycles)
    hull_s = signals.delay_hull_s
    as_stamped = _conclude(signals, means, points)
    ends = [as_stamped, *(_conclude(signals, means, _delayed(points, by_s)) for by_s in (hull_s, -hull_s) if hull_s)]
    gain_low, gain_high = min(c.gain_ends()[0] for c in ends), max(c.gain_ends()[1] for c in ends)
    period_low, period_high = min(c.period_ends()[0] for c in ends), max(c.period_ends()[1] for c in ends)
    return UltimatePoint(
        method="plant shapes through the Fourier points",
        ultimate_gain=Interval(exp(as_stamped.log_gain), exp(gain_low), exp(gain_high)),
        ultimate_period_s=Interval(exp(as_stamped.log_period), exp(period_low), exp(period_high)),
        because=tuple(_because(as_stamped, points, cycles, hull_s, ends)),
    )


def _conclude(signals: Waveforms, means: Balance, points: tuple[OscillationPoint, ...]) -> _Conclusion:
    fundamental = points[0]
    shapes = shapes_through(fundamental.phase_rad)
    chi_squared, freedom = _harmonics_misfit(shapes, points)
    chi_squared = chi_squared + _balance_misfit(shapes, signals, means, fundamental)
    misfit = max(1.0, float(np.min(chi_squared)) / freedom)
    chi_squared = (chi_squared - np.min(chi_squared)) / misfit
    near = chi_squared <= WEIGHS_CHI_SQUARED
    shapes, chi_squared = shapes.kept(near), chi_squared[near]

    ratio = ultimate_ratio(shapes)
    log_gain = -np.log(fundamental.gain * np.abs(response(shapes, ratio)))
    log_period = log(2 * pi / fundamental.frequency_rad_per_s) - np.log(ratio)
    weight = shapes.prior * np.exp(-chi_squared / 2)
    weight /= np.sum(weight)
    agrees = chi_squared <= AGREES_CHI_SQUARED
    best_gain, best_period = _median(log_gain, weight), _median(log_period, weight)
    gain_slope, phase_slope = slopes_at(shapes, ratio)
    per_phase = float(weight @ np.abs(gain_slope / phase_slope))
    return _Conclusion(
        log_gain=best_gain,
        log_period=best_period,
        gain_hull=_about(best_gain, log_gain[agrees]),
        period_hull=_about(best_period, log_period[agrees]),
        gain_scatter=1.96 * hypot(fundamental.gain_sd_ratio, per_phase * fundamental.phase_sd_rad),
        period_scatter=1.96 * fundamental.phase_sd_rad * float(weight @ (1 / np.abs(phase_slope))),
        shapes=int(np.sum(agrees)),
        misfit=misfit,
        is_open=bool(np.any(ratio[agrees] > 0.99 * HIGHEST_RATIO)),
    )


def _harmonics_misfit(shapes: Shapes, points: tuple[OscillationPoint, ...]) -> tuple[Array, int]:
    """chi^2 of the harmonics, one a shape, and the degrees of freedom (at least 1) that it is to be held against."""
    fundamental = points[0]
    total, freedom = np.zeros(len(shapes.prior)), 1
    for point in points[1:]:
        harmonic = round(point.frequency_rad_per_s / fundamental.frequency_rad_per_s)
        if harmonic in HARMONICS_USED:
            seen = point.gain / fundamental.gain * np.exp(1j * point.phase_rad)
            # the fundamental's own error carries over: in gain once, in phase as often as the harmonic counts
            carried = fundamental.gain_sd_ratio**2 + (harmonic * fundamental.phase_sd_rad) ** 2
            variance = point.gain_sd_ratio**2 + carried / 2 + HARMONIC_SLACK_RATIO**2
            total += np.abs(response(shapes, harmonic) / seen - 1) ** 2 / variance
            freedom += 2
    return total, max(1, freedom - 1)


def _balance_misfit(shapes: Shapes, signals: Waveforms, means: Balance, fundamental: OscillationPoint) -> Array:
    """chi^2 of mean OP(t - L) = (mean PV + M slope)/K, one a shape; see ``static_gain``."""
    w1 = fundamental.frequency_rad_per_s
    slow = 1e-4
    # 1/G without its dead time at low frequency is (1 + j x w1 M)/K: finite for an integrator too
    inverse = 1 / response(replace(shapes, dead_time_rad=np.zeros(len(shapes.prior))), slow) / fundamental.gain
    per_gain, residence_per_gain_s = inverse.real, inverse.imag / (slow * w1)
    op_pct = mean_op_pct(signals, means.from_s, means.window_s, shapes.dead_time_rad / w1)
    off_pct = op_pct - means.mean_pv_pct * per_gain - means.slope_pct_per_s * residence_per_gain_s
    variance = (
        (means.mean_pv_sd_pct * per_gain) ** 2
        + (means.slope_sd_pct_per_s * residence_per_gain_s) ** 2
        + (fundamental.gain_sd_ratio * op_pct) ** 2
        + (BALANCE_SLACK_RATIO * means.amplitude_pct) ** 2
    )
    return np.asarray(off_pct**2 / variance)


def _delayed(points: tuple[OscillationPoint, ...], by_s: float) -> tuple[OscillationPoint, ...]:
    """The points if PV followed OP ``by_s`` later than stamped: more of what was seen is plant."""
    return tuple(replace(point, phase_rad=point.phase_rad - point.frequency_rad_per_s * by_s) for point in points)


def _median(level: Array, weight: Array) -> float:
    """Weighted median: half of the weight lies below."""
    order = np.argsort(level)
    return float(np.interp(0.5, np.cumsum(weight[order]) - weight[order] / 2, level[order]))


def _about(best: float, logarithms: Array) -> tuple[float, float]:
    return min(best, float(np.min(logarithms))), max(best, float(np.max(logarithms)))


def _ends(best: float, hull: tuple[float, float], scatter: float) -> tuple[float, float]:
    """Independent causes add as squares: the hull of the shapes and the scatter of the point they run through."""
    return best - hypot(best - hull[0], scatter), best + hypot(hull[1] - best, scatter)


def _because(
    seen: _Conclusion,
    points: tuple[OscillationPoint, ...],
    cycles: tuple[Cycle, ...],
    hull_s: float,
    ends: list[_Conclusion],
) -> Iterator[str]:
    """Each cause of the width with its size, in the words of the trade."""
    yield (
        f"the test swung at {degrees(points[0].phase_rad):.0f} degrees, the ultimate point lies at -180: "
        f"{seen.shapes} plant shapes agree with what was seen and differ there by "
        f"{_signed(seen.gain_hull, seen.log_gain)} in gain, {_signed(seen.period_hull, seen.log_period)} in period"
    )
    yield (
        f"scatter over {len(cycles)} cycles: +-{100 * seen.gain_scatter:.1f} % in gain, "
        f"+-{100 * seen.period_scatter:.1f} % in period"
    )
    yield (
        f"no plant is exactly one of the shapes: +-{100 * GAIN_FLOOR_RATIO:.1f} % in gain, "
        f"+-{100 * PERIOD_FLOOR_RATIO:.1f} % in period at least"
    )
    if hull_s:
        gains, periods = [c.log_gain for c in ends], [c.log_period for c in ends]
        yield (
            f"without the PLC's clock {1000 * hull_s:.0f} ms either way between output and PV are unknown: "
            f"{_signed((min(gains), max(gains)), seen.log_gain)} in gain (low end: all of it is plant), "
            f"{_signed((min(periods), max(periods)), seen.log_period)} in period"
        )
    if seen.misfit > 1.0:
        yield (
            f"the best shape misses the harmonics and means by {seen.misfit**0.5:.1f} times their scatter: "
            "the range of shapes that count as agreeing was widened by as much"
        )
    if seen.misfit > MISFIT_SUSPICIOUS:
        yield "so large a miss suggests a sticking valve, a disturbance during the test or a plant that isn't linear"
    if seen.is_open:
        yield "plants almost without dead time agree too: the high end of the gain is where the search ended"


def _signed(hull: tuple[float, float], best: float) -> str:
    return f"{100 * (exp(hull[0] - best) - 1):+.1f} .. {100 * (exp(hull[1] - best) - 1):+.1f} %"
