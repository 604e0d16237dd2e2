"""From a test to the plant, its ultimate point and what a technician should know of both."""

from collections.abc import Iterator
from dataclasses import dataclass
from math import exp, radians

from autotune.identify.findings import UltimatePoint
from autotune.identify.model import ModelWithDraws
from autotune.identify.model_interval import (
    COVERED,
    GAIN_FLOOR_RATIO,
    PERIOD_FLOOR_RATIO,
    ModelPoint,
    Weighed,
    model_point,
    model_with_draws,
)
from autotune.identify.plant_fit import PlantFits, fit_plant, update_plant
from autotune.identify.waveforms import Waveforms
from autotune.loop.outcome import Interval

METHOD = "plant fitted to the whole test"
KAPPA_WORTH_SAYING = 2.5
MISFIT_WORTH_SAYING = 1.5  # standard deviation of the residuals over the noise at rest
MISFIT_AT_MOST = 3.0  # beyond, no structure is the plant and the linear error tells nothing
HALF_WIDTH_AT_MOST = 0.5  # of ln Ku, the same


@dataclass(frozen=True, slots=True)
class ModelConclusion:
    """The ultimate point by the fitted plant, the plant with its draws, and cautions.

    ``is_trusted`` is false where the interval can't be honest by itself: then a wider one must stand beside it.
    """

    ultimate: UltimatePoint
    model: ModelWithDraws
    cautions: tuple[str, ...]
    is_trusted: bool


def conclude(signals: Waveforms, period_s: float) -> ModelConclusion | None:
    """Fit the bank to a test that swings with about ``period_s``; ``None`` where no ultimate point comes of it."""
    return conclude_from(signals, fit_plant(signals, period_s))


def conclude_from(signals: Waveforms, found: PlantFits) -> ModelConclusion | None:
    """What the fits of a test say; ``None`` where the best of them has no ultimate point.

    Where the stamps are hulls, the conclusion is drawn at both ends too: with all that they leave unknown counted
    as plant (the low end of Ku), and with none of it (the high end).
    """
    central = model_point(found)
    if central is None:
        return None
    point, weighed = central
    hull_s = signals.delay_hull_s
    at_ends = _ends(signals, found, hull_s) if hull_s else ()
    ends = [point, *(end for end in at_ends if end is not None)]
    gain = _interval(point.log_gain, [(end.log_gain, end.gain_half_ratio) for end in ends])
    period = _interval(point.log_period_s, [(end.log_period_s, end.period_half_ratio) for end in ends])
    for sure in point.disagreeing:
        gain = _holding(gain, exp(sure.point.log_gain))
        period = _holding(period, exp(sure.point.log_period_ratio) * found.period_s)
    is_open = None in at_ends
    because = tuple(_because(signals, found, point, weighed, ends))
    return ModelConclusion(
        ultimate=UltimatePoint(METHOD, gain, period, because),
        model=model_with_draws(found, weighed, hull_s, because),
        cautions=tuple(_cautions(signals, found, point, is_open=is_open)),
        is_trusted=_misfit_ratio(signals, found) <= MISFIT_AT_MOST
        and point.gain_half_ratio <= HALF_WIDTH_AT_MOST
        and not is_open,
    )


def _ends(signals: Waveforms, found: PlantFits, hull_s: float) -> tuple[ModelPoint | None, ModelPoint | None]:
    """The conclusions with ``hull_s`` more dead time than stamped, and with as much less.

    More dead time only adds to the fitted one, and so does less where there is enough of it; else the rest of the
    plant must make up for it, and is fitted again.
    """
    later = model_point(found, hull_s)
    if found.best.dead_time_ratio * found.period_s >= hull_s:
        sooner = model_point(found, -hull_s)
    else:
        sooner = model_point(update_plant(signals, found, hull_s))
    return later[0] if later else None, sooner[0] if sooner else None


def _interval(best: float, ends: list[tuple[float, float]]) -> Interval:
    low, high = min(end - half for end, half in ends), max(end + half for end, half in ends)
    return Interval(exp(best), exp(low), exp(high))


def _holding(interval: Interval, at: float) -> Interval:
    return Interval(interval.best, min(interval.low, at), max(interval.high, at))


def _misfit_ratio(signals: Waveforms, found: PlantFits) -> float:
    """Residuals over noise at rest; where there is none to speak of, over what a transmitter resolves."""
    samples = len(found.best.residual_pct)
    return float((found.best.misfit / max(samples * signals.noise_pct**2, found.trace.misfit_floor)) ** 0.5)


def _because(
    signals: Waveforms, found: PlantFits, point: ModelPoint, weighed: Weighed, ends: list[ModelPoint]
) -> Iterator[str]:
    """Each cause of the width with its size, in the words of the trade."""
    yield (
        f"the plant fitted: {found.best.structure}, dead time {found.best.dead_time_ratio * found.period_s:.3g} s; "
        f"what it leaves of PV is {_misfit_ratio(signals, found):.2f} times the noise at rest"
    )
    yield (
        f"noise in the test: +-{100 * point.gain_noise_ratio:.1f} % in gain, "
        f"+-{100 * point.period_noise_ratio:.1f} % in period"
    )
    if len(weighed) > 1:
        yield (
            f"{len(weighed)} structures explain the test about as well and differ by "
            f"+-{100 * point.gain_spread_ratio:.1f} % in gain, +-{100 * point.period_spread_ratio:.1f} % in period"
        )
    yield (
        f"no plant is exactly one of the structures: +-{100 * COVERED * GAIN_FLOOR_RATIO:.1f} % in gain, "
        f"+-{100 * COVERED * PERIOD_FLOOR_RATIO:.1f} % in period at least"
    )
    if signals.delay_hull_s:
        gains = [100 * (exp(end.log_gain - point.log_gain) - 1) for end in ends]
        periods = [100 * (exp(end.log_period_s - point.log_period_s) - 1) for end in ends]
        yield (
            f"without the PLC's clock {1000 * signals.delay_hull_s:.0f} ms either way between output and PV are "
            f"unknown: {min(gains):+.1f} .. {max(gains):+.1f} % in gain (low end: all of it is plant), "
            f"{min(periods):+.1f} .. {max(periods):+.1f} % in period"
        )
    if found.trace.has_ramp:
        yield "PV drifted by itself: a ramp was fitted beside the plant"


def _cautions(signals: Waveforms, found: PlantFits, point: ModelPoint, *, is_open: bool) -> Iterator[str]:
    best = found.best
    if is_open:
        yield (
            "What the stamps leave unknown exceeds the plant's dead time: without it the fitted plant has no ultimate "
            "gain at all. Offer the PLC's clock tags, or read and write over a faster link."
        )
    if found.trace.load_from_ratio is not None:
        size_pct = float(best.linear[-1] / best.numerator[0])
        yield (
            f"The load changed during the test, by as much as {size_pct:+.2g} % of output would do, about "
            f"{found.trace.load_from_ratio * found.period_s:.3g} s on the record's clock; this was taken out."
        )
    misfit_ratio = _misfit_ratio(signals, found)
    if misfit_ratio > MISFIT_WORTH_SAYING:
        yield (
            f"No simple plant explains this test: what is left of PV is {misfit_ratio:.1f} times its noise at rest. "
            "Look for a sticking valve, a disturbance, or a plant that answers differently up and down."
        )
    if point.kappa_ratio > KAPPA_WORTH_SAYING:
        yield (
            "This loop's ultimate gain is hard to see because its phase hardly turns where its gain falls: each "
            f"degree of phase moves it by {100 * point.kappa_ratio * radians(1):.0f} %."
        )
    for sure in point.disagreeing:
        yield (
            f"Two plants explain the test about as well and disagree: {best.structure} says a gain of "
            f"{exp(point.log_gain):.3g}, {sure.fit.structure} {exp(sure.point.log_gain):.3g}. A longer test would tell."
        )


def cross_checked(by_model: ModelConclusion, by_shapes: UltimatePoint) -> tuple[UltimatePoint, tuple[str, ...]]:
    """The model's conclusion, widened to hold the other's interval where the two contradict or it can't stand alone."""
    one, other = by_model.ultimate, by_shapes
    gains, periods = (one.ultimate_gain, other.ultimate_gain), (one.ultimate_period_s, other.ultimate_period_s)
    said: tuple[str, ...] = ()
    if _are_apart(*gains) or _are_apart(*periods):
        said = (
            "The fitted plant and the points of the oscillation contradict each other beyond their intervals "
            f"(gain {gains[0].best:.3g} and {gains[1].best:.3g}, period {periods[0].best:.3g} and "
            f"{periods[1].best:.3g} s): the interval holds both. Test again before relying on it.",
        )
    elif not by_model.is_trusted:
        said = (
            "The fitted plant's own interval can't be relied on here; the wider one of all plants through the points "
            "of the oscillation stands in its place.",
        )
    else:
        return one, ()
    because = (*one.because, *said, *other.because)
    return UltimatePoint(one.method, _hull(*gains), _hull(*periods), because), said


def _are_apart(one: Interval, other: Interval) -> bool:
    return one.high < other.low or other.high < one.low


def _hull(one: Interval, other: Interval) -> Interval:
    return Interval(one.best, min(one.low, other.low), max(one.high, other.high), level=None)
