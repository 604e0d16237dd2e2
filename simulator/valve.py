"""From the block's output to the position that the process feels."""

from dataclasses import dataclass
from enum import Enum


@dataclass(frozen=True, slots=True)
class ValveSpec:
    """``rate_pct_per_s`` is ``None`` for a fast valve; ``dead_band_pct`` is the full width of the lost motion."""

    low_pct: float = 0.0
    high_pct: float = 100.0
    rate_pct_per_s: float | None = None
    dead_band_pct: float = 0.0

    def __post_init__(self) -> None:
        if not self.low_pct < self.high_pct:
            raise ValueError("a valve needs low_pct < high_pct")
        if self.dead_band_pct < 0.0 or (self.rate_pct_per_s is not None and not self.rate_pct_per_s > 0.0):
            raise ValueError("a valve's rate must be positive and its dead band must not be negative")


class ValveFault(Enum):
    """What a valve can suffer from."""

    NONE = "none"
    STUCK = "stuck"


class Valve:
    """A positioner with lost motion, a rate limit and end stops; a rate-limited move is a staircase of the calls."""

    def __init__(self, spec: ValveSpec, *, t_s: float = 0.0, position_pct: float = 0.0) -> None:
        self.spec = spec
        self.fault = ValveFault.NONE
        self.position_pct = position_pct
        self._t_s = t_s

    def move(self, t_s: float, command_pct: float) -> float:
        """Follow ``command_pct`` up to ``t_s`` and return the position (percent)."""
        elapsed_s, self._t_s = t_s - self._t_s, t_s
        if self.fault is ValveFault.STUCK:
            return self.position_pct
        half_band_pct = 0.5 * self.spec.dead_band_pct
        wanted_pct = min(max(self.position_pct, command_pct - half_band_pct), command_pct + half_band_pct)
        wanted_pct = min(max(wanted_pct, self.spec.low_pct), self.spec.high_pct)
        if self.spec.rate_pct_per_s is not None:
            reach_pct = self.spec.rate_pct_per_s * elapsed_s
            wanted_pct = min(max(wanted_pct, self.position_pct - reach_pct), self.position_pct + reach_pct)
        self.position_pct = wanted_pct
        return wanted_pct
