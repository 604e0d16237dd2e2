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


@dataclass(frozen=True, slots=True)
class LoopAfter:
    """Readings after the last write.

    ``band_pct`` is how far PV may lie from its setpoint and still be called steady: four standard deviations of
    the noise at rest, at least 0.2 % of span, plus the distance it already had when it was found.
    """

    samples: tuple[Sample, ...]
    band_pct: float
    is_mode_as_found: bool

    @property
    def last(self) -> Sample:
        """The last reading."""
        return self.samples[-1]

    @property
    def is_steady(self) -> bool:
        """Whether the loop is in the mode as found and PV stayed in the band in the second half of the watch."""
        later = self.samples[len(self.samples) // 2 :]
        return self.is_mode_as_found and all(
            one.pv_pct is not None and one.sp_pct is not None and abs(one.pv_pct - one.sp_pct) <= self.band_pct
            for one in later
        )

    @property
    def in_words(self) -> str:
        """One sentence for a person."""
        steady = "steady" if self.is_steady else "NOT steady: keep watching it"
        return f"The loop is in {self.last.mode.value} and {steady} (PV within {self.band_pct:.2f} % of its setpoint)."


async def watch_afterwards(workplace: Workplace, loop: LoopConfig, ended: TestEnd, seconds: float) -> LoopAfter:
    """Read the loop for a while after a write.  Raises ``LinkError``."""
    link = workplace.open_link(loop)
    try:
        samples = await look_around(loop, LoopReader(loop, link), seconds)
    finally:
        await link.close()
    experiment = ended.experiment
    found = experiment.as_found
    offset_pct = 0.0
    if found is not None and found.sample.pv_pct is not None and found.sp_pct is not None:
        offset_pct = abs(found.sample.pv_pct - found.sp_pct)
    band_pct = max(_NOISE_BAND * (experiment.noise_pct or 0.0), _AT_LEAST_PCT) + offset_pct
    return LoopAfter(samples, band_pct, found is not None and samples[-1].mode is found.mode)
