"""What the soft plant's process really is: its response by python-control, its ultimate point by a root search."""

import tomllib
from cmath import exp
from dataclasses import dataclass
from math import pi, tau

import control
import numpy as np
from scipy.optimize import brentq

from simulator.rig import find_rig


@dataclass(frozen=True, slots=True)
class TruePlant:
    """Gain, lags and dead time as the rig's file tells them."""

    gain: float
    lags_s: tuple[float, ...]
    dead_time_s: float

    def response(self, w_rad_per_s: float) -> complex:
        """G(jw)."""
        rational = control.tf([self.gain], [1.0])
        for lag_s in self.lags_s:
            rational = control.series(rational, control.tf([1.0], [lag_s, 1.0]))
        return complex(rational(1j * w_rad_per_s)) * exp(-1j * w_rad_per_s * self.dead_time_s)

    @property
    def ultimate(self) -> tuple[float, float]:
        """Ultimate gain and period (s): where the phase, taken without jumps, is -180 degrees."""

        def above_180_rad(w_rad_per_s: float) -> float:
            lags_rad = sum(np.arctan(lag_s * w_rad_per_s) for lag_s in self.lags_s)
            return float(pi - lags_rad - self.dead_time_s * w_rad_per_s)

        w_rad_per_s = float(brentq(above_180_rad, 1e-3, pi / self.dead_time_s))
        return 1.0 / abs(self.response(w_rad_per_s)), tau / w_rad_per_s


def true_plant(rig: str, loop: str) -> TruePlant:
    """The process of one loop of a bundled rig."""
    told = tomllib.loads(find_rig(rig).read_text("utf-8"))
    process = next(one["process"] for one in told["loop"] if one["name"] == loop)
    return TruePlant(process["gain"], tuple(process["lags_s"]), process["dead_time_s"])


def is_near(low: float, high: float, true: float) -> bool:
    """Whether the truth lies in an interval, or no farther outside than its half-width.

    One run in twenty may miss a 95 % interval, and every run over a socket is another one; how often intervals
    cover is counted by the benchmarks.
    """
    half_width = 0.5 * (high - low)
    return low - half_width <= true <= high + half_width
