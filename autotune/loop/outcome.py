"""Expected outcomes are values."""

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Refusal:
    """A no with its reason: ``code`` is stable and upper case, ``remedy`` says what to do next."""

    code: str
    reason: str
    remedy: str

    def __str__(self) -> str:
        return f"{self.code}: {self.reason}; {self.remedy}"


@dataclass(frozen=True, slots=True)
class Trip:
    """An interlock that fired: a stable upper-case ``code``, the text a technician reads, and when (s)."""

    code: str
    text: str
    t_s: float

    def __str__(self) -> str:
        return f"{self.code}: {self.text}"


@dataclass(frozen=True, slots=True)
class Interval:
    """A number with what is known about it: ``low <= best <= high``, in the unit of its field's name.

    ``level`` is the claimed coverage (0.95) and is ``None`` for a hull that bounds rather than estimates.
    """

    best: float
    low: float
    high: float
    level: float | None = 0.95

    def __post_init__(self) -> None:
        if not self.low <= self.best <= self.high:
            raise ValueError(f"an interval needs low <= best <= high, not {self.low}, {self.best}, {self.high}")
