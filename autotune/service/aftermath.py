"""How a loop behaves once it has been left alone again."""

from dataclasses import dataclass

from autotune.config.types import LoopConfig
from autotune.loop.sample import Sample
from autotune.service.check import look_around
from autotune.service.reading import LoopReader
from autotune.service.testing import TestEnd
from autotune.service.workplace import Workplace

_NOISE_BAND = 4.0
_AT_LEAST_PCT = 0.2
_LOOK_S = 0.5


@dataclass(frozen=True, slots=True)
class LoopAfter:
    """Readings after the last write.

    ``band_pct`` is how far PV may lie from its setpoint and still be called steady: four standard deviations of
    the noise at rest, at least 0.2 % of span, plus the distance it already had when it was found.
    ``steady_s`` is how long it must have stayed there, up to the last reading.
    """

    samples: tuple[Sample, ...]
    band_pct: float
    steady_s: float
    is_mode_as_found: bool

    @property
    def last(self) -> Sample:
        """The last reading."""
        return self.samples[-1]

    @property
    def is_steady(self) -> bool:
        """Whether the loop is in the mode as found and PV has stayed in the band for ``steady_s``."""
        from_s = self.last.t_s - self.steady_s
        return (
            self.is_mode_as_found
            and self.samples[0].t_s <= from_s
            and all(self._is_in_band(one) for one in self.samples if one.t_s >= from_s)
        )

    @property
    def in_words(self) -> str:
        """One sentence for a person."""
        watched_s = self.last.t_s - self.samples[0].t_s
        if self.is_steady:
            return f"The loop is in {self.last.mode.value} and steady: PV within {self.band_pct:.2f} % of its setpoint."
        return (
            f"The loop is in {self.last.mode.value} and NOT steady after {watched_s:.0f} s: keep watching it "
            f"(PV should stay within {self.band_pct:.2f} % of its setpoint)."
        )

    def _is_in_band(self, sample: Sample) -> bool:
        pv_pct, sp_pct = sample.pv_pct, sample.sp_pct
        return pv_pct is not None and sp_pct is not None and abs(pv_pct - sp_pct) <= self.band_pct


async def watch_afterwards(
    workplace: Workplace, loop: LoopConfig, ended: TestEnd, steady_s: float, at_most_s: float
) -> LoopAfter:
    """Read the loop until it has been steady for ``steady_s``, but at most ``at_most_s``.  Raises ``LinkError``."""
    experiment = ended.experiment
    found = experiment.as_found
    offset_pct = 0.0
    if found is not None and found.sample.pv_pct is not None and found.sp_pct is not None:
        offset_pct = abs(found.sample.pv_pct - found.sp_pct)
    band_pct = max(_NOISE_BAND * (experiment.noise_pct or 0.0), _AT_LEAST_PCT) + offset_pct
    link = workplace.open_link(loop)
    reader = LoopReader(loop, link)
    samples: tuple[Sample, ...] = ()
    try:
        while True:
            samples = (*samples, *await look_around(loop, reader, _LOOK_S))
            is_as_found = found is not None and samples[-1].mode is found.mode
            after = LoopAfter(samples, band_pct, steady_s, is_as_found)
            if after.is_steady or samples[-1].t_s - samples[0].t_s >= at_most_s:
                return after
    finally:
        await link.close()
