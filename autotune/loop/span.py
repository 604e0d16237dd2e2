"""The range of a signal as the controller sees it."""

from dataclasses import dataclass
from math import isfinite


@dataclass(frozen=True, slots=True)
class Span:
    """A range in engineering units; ``low_eu`` is 0 % and ``high_eu`` is 100 %.

    Raises ``ValueError`` when a bound is not finite or ``high_eu <= low_eu``.
    """

    low_eu: float
    high_eu: float
    unit: str = ""

    def __post_init__(self) -> None:
        if not (isfinite(self.low_eu) and isfinite(self.high_eu) and self.high_eu > self.low_eu):
            raise ValueError(f"a span needs finite low < high, not {self.low_eu} .. {self.high_eu}")

    @property
    def width_eu(self) -> float:
        """High minus low, in engineering units."""
        return self.high_eu - self.low_eu

    def to_pct(self, reading_eu: float) -> float:
        """Engineering units to percent of span."""
        return 100.0 * (reading_eu - self.low_eu) / self.width_eu

    def to_eu(self, reading_pct: float) -> float:
        """Percent of span to engineering units."""
        return self.low_eu + self.width_eu * reading_pct / 100.0

    def delta_to_pct(self, delta_eu: float) -> float:
        """A difference (a rate, a band, a noise) in engineering units to percent of span."""
        return 100.0 * delta_eu / self.width_eu

    def delta_to_eu(self, delta_pct: float) -> float:
        """A difference in percent of span to engineering units."""
        return self.width_eu * delta_pct / 100.0
