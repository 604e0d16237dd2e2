"""Scales of a plot: round ticks, and lines thinned to what a printer can show."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from math import ceil, floor, log10

_STEPS = (1.0, 2.0, 5.0, 10.0)
_CLOCK_STEPS_S = (
    0.1, 0.2, 0.5, 1.0, 2.0, 5.0, 10.0, 15.0, 30.0, 60.0, 120.0, 300.0, 600.0, 900.0, 1800.0,
    3600.0, 7200.0, 10800.0, 21600.0, 43200.0, 86400.0,
)  # fmt: skip

Point = tuple[float, float]


@dataclass(frozen=True, slots=True)
class Scale:
    """A straight scale from what is shown (``low`` to ``high``) to points on the paper."""

    low: float
    high: float
    at_low: float
    at_high: float

    def at(self, shown: float) -> float:
        """The place on the paper."""
        return self.at_low + (shown - self.low) * (self.at_high - self.at_low) / (self.high - self.low)

    def holds(self, shown: float) -> bool:
        """Whether it lies within the scale."""
        return self.low <= shown <= self.high


def scale_for(readings: Sequence[float], at_low: float, at_high: float, least: float) -> Scale:
    """A scale that shows all readings with some air, at least ``least`` wide."""
    low, high = min(readings), max(readings)
    half = 0.5 * max((high - low) * 1.16, least)
    middle = 0.5 * (low + high)
    return Scale(middle - half, middle + half, at_low, at_high)


def ticks(scale: Scale, at_most: int) -> tuple[tuple[float, ...], int]:
    """Round numbers within the scale, and the decimals that they need."""
    rough = (scale.high - scale.low) / at_most
    decade = 10.0 ** floor(log10(rough))
    step = next(factor * decade for factor in _STEPS if factor * decade >= rough * (1.0 - 1e-9))
    return _multiples(scale, step), max(0, -floor(log10(step) + 1e-9))


def clock_ticks(scale: Scale, at_most: int) -> tuple[tuple[float, ...], float]:
    """Round seconds since midnight within the scale, and their step in s."""
    rough = (scale.high - scale.low) / at_most
    step = next((s for s in _CLOCK_STEPS_S if s >= rough), 86400.0 * ceil(rough / 86400.0))
    return _multiples(scale, step), step


def _multiples(scale: Scale, step: float) -> tuple[float, ...]:
    return tuple(n * step for n in range(ceil(scale.low / step - 1e-9), floor(scale.high / step + 1e-9) + 1))


def runs(times: Sequence[float], readings: Sequence[float | None]) -> Iterator[list[Point]]:
    """The stretches between readings that are not known."""
    run: list[Point] = []
    for at, reading in zip(times, readings, strict=True):
        if reading is not None:
            run.append((at, reading))
        elif run:
            yield run
            run = []
    if run:
        yield run


def thinned(points: Sequence[Point], width: float) -> list[Point]:
    """Where many points share ``width`` of the paper only first, lowest, highest and last are kept, in order."""
    kept: list[Point] = []
    bucket: list[Point] = []
    for point in points:
        if bucket and point[0] - bucket[0][0] >= width:
            kept += _corners(bucket)
            bucket = []
        bucket.append(point)
    return kept + _corners(bucket)


def _corners(bucket: list[Point]) -> list[Point]:
    if len(bucket) <= 4:
        return bucket
    places = range(len(bucket))
    corners = {0, len(bucket) - 1}
    corners |= {min(places, key=lambda n: bucket[n][1]), max(places, key=lambda n: bucket[n][1])}
    return [bucket[n] for n in sorted(corners)]
