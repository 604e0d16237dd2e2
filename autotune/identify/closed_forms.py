"""Exact relay limit cycles and exact ultimate points: what an ideal test would show.

Continuous relay, no scan, no latency: PV falling below -eps switches up, rising above +eps switches down.
Sources: K. J. Astrom and T. Hagglund, Automatica 20 (1984) 645; D. P. Atherton, Nonlinear Control Engineering
(1982), for symmetric relays; Q.-G. Wang, C.-C. Hang and B. Zou, Ind. Eng. Chem. Res. 36 (1997) 3173, for unequal
steps.  Percent of span, seconds; process gains positive.
"""

from collections.abc import Callable
from dataclasses import dataclass
from math import atan, cos, exp, hypot, inf, log, pi, tan

from scipy.optimize import brentq


@dataclass(frozen=True, slots=True)
class Fotd:
    """First order with time delay: K e^(-Ls)/(1 + Ts); ``process_gain`` in %PV/%OP."""

    process_gain: float
    time_constant_s: float
    dead_time_s: float


@dataclass(frozen=True, slots=True)
class RelayCycle:
    """A steady relay oscillation: how long OP stays high and low, and PV's extremes."""

    high_s: float
    low_s: float
    pv_high_pct: float
    pv_low_pct: float

    @property
    def period_s(self) -> float:
        """Both half cycles."""
        return self.high_s + self.low_s

    @property
    def pv_amplitude_pct(self) -> float:
        """Half peak-to-peak."""
        return (self.pv_high_pct - self.pv_low_pct) / 2


def relay_cycle_fotd(plant: Fotd, step_up_pct: float, step_down_pct: float, hysteresis_pct: float = 0.0) -> RelayCycle:
    """Limit cycle of a FOTD under a relay of unequal steps (Wang, Hang and Zou 1997; Astrom and Hagglund 1984).

    After a switch PV goes on for the dead time, towards the old step's end value K u: extremes
    (K u - eps) (1 - e^(-L/T)) + eps; then it returns exponentially to the other threshold.  Raises ``ValueError``
    where a step can't carry PV past the hysteresis: there is no oscillation.
    """
    k, t, dead = plant.process_gain, plant.time_constant_s, plant.dead_time_s
    up, down = k * step_up_pct, k * step_down_pct
    if min(up, down) <= hysteresis_pct:
        raise ValueError(f"steps of {step_up_pct} and {step_down_pct} % can't carry PV past {hysteresis_pct} %")
    kept = exp(-dead / t)
    high = up - (up - hysteresis_pct) * kept
    low = -down + (down - hysteresis_pct) * kept
    return RelayCycle(
        high_s=dead + t * log((up - low) / (up - hysteresis_pct)),
        low_s=dead + t * log((down + high) / (down - hysteresis_pct)),
        pv_high_pct=high,
        pv_low_pct=low,
    )


def relay_cycle_integrator(
    gain_per_s: float, dead_time_s: float, amplitude_pct: float, hysteresis_pct: float = 0.0
) -> RelayCycle:
    """Limit cycle of k e^(-Ls)/s (k in %PV/(%OP s)) under a symmetric relay: a = k d L + eps, period 4L + 4 eps/(k d).

    Elementary: PV is a triangle that overshoots each threshold by a dead time.
    """
    rate_pct_per_s = gain_per_s * amplitude_pct
    swing = rate_pct_per_s * dead_time_s + hysteresis_pct
    half_s = 2 * swing / rate_pct_per_s
    return RelayCycle(high_s=half_s, low_s=half_s, pv_high_pct=swing, pv_low_pct=-swing)


def fotd_from_ultimate(process_gain: float, ultimate_gain: float, ultimate_period_s: float) -> Fotd:
    """The FOTD with this static gain and ultimate point (C.-C. Yu, Autotuning of PID Controllers; Luyben 1987).

    T = Tu/(2 pi) sqrt((K Ku)^2 - 1), L = Tu/(2 pi) (pi - atan(2 pi T/Tu)).  Raises ``ValueError`` for K Ku <= 1: no
    lag with dead time is weaker at -180 degrees than at rest by less than nothing.
    """
    loop_gain = process_gain * ultimate_gain
    if loop_gain <= 1:
        raise ValueError(f"K Ku = {loop_gain} must exceed 1")
    time_constant_s = ultimate_period_s / (2 * pi) * (loop_gain**2 - 1) ** 0.5
    return Fotd(
        process_gain=process_gain,
        time_constant_s=time_constant_s,
        dead_time_s=ultimate_period_s / (2 * pi) * (pi - atan(2 * pi * time_constant_s / ultimate_period_s)),
    )


def describing_function_ratio(dead_time_ratio: float) -> float:
    """Textbook Ku over true Ku for an ideal relay on a FOTD with L/T = ``dead_time_ratio``.

    From 8/pi^2 = 0.811 (lag) to 4/pi = 1.273 (dead time); Li, Eskinat and Luyben, Ind. Eng. Chem. Res. 30 (1991)
    1530 print about -18 to +27 %.
    """
    plant = Fotd(1.0, 1.0, dead_time_ratio)
    read = 4 / (pi * relay_cycle_fotd(plant, 1.0, 1.0).pv_amplitude_pct)
    return read / ultimate_of(Rational(lags_s=(1.0,), dead_time_s=dead_time_ratio))[0]


def ultimate_of_equal_lags(lags: int, time_constant_s: float = 1.0) -> tuple[float, float]:
    """(Ku, Tu) of (1 + Ts)^-n, n >= 3: Ku = cos(pi/n)^-n, wu T = tan(pi/n); each lag turns by pi/n."""
    if lags < 3:
        raise ValueError("fewer than three lags never reach -180 degrees")
    return cos(pi / lags) ** -lags, 2 * pi * time_constant_s / tan(pi / lags)


@dataclass(frozen=True, slots=True)
class Rational:
    """gain (1 + zero s) e^(-L s) / (prod(1 + lag s) (q0 s^2 + q1 s + 1) s^integrators); q0, q1 >= 0.

    Every factor has its own angle, so gain and unwrapped phase are sums and nothing jumps.
    """

    gain: float = 1.0
    lags_s: tuple[float, ...] = ()
    dead_time_s: float = 0.0
    zero_s: float = 0.0
    quadratic: tuple[float, float] = (0.0, 0.0)
    integrators: int = 0

    def gain_at(self, w_rad_per_s: float) -> float:
        """|G(jw)|, %PV/%OP."""
        q0, q1 = self.quadratic
        bottom = hypot(1 - q0 * w_rad_per_s**2, q1 * w_rad_per_s) * w_rad_per_s**self.integrators
        for lag_s in self.lags_s:
            bottom *= hypot(1.0, lag_s * w_rad_per_s)
        return self.gain * hypot(1.0, self.zero_s * w_rad_per_s) / bottom

    def phase_at(self, w_rad_per_s: float) -> float:
        """Unwrapped arg G(jw), rad."""
        q0, q1 = self.quadratic
        pair = pi / 2 - atan((1 - q0 * w_rad_per_s**2) / (q1 * w_rad_per_s)) if q1 else 0.0
        lags = sum(atan(lag_s * w_rad_per_s) for lag_s in self.lags_s)
        dead = self.dead_time_s * w_rad_per_s
        return atan(self.zero_s * w_rad_per_s) - lags - pair - dead - self.integrators * pi / 2


def ultimate_of(plant: Rational) -> tuple[float, float]:
    """Exact (Ku, Tu) of a plant: the first crossing of -180 degrees by its unwrapped phase, by root search.

    Raises ``ValueError`` where the phase doesn't cross within 1e-6 .. 1e12 rad/s.
    """
    w = first_crossing(lambda w_rad_per_s: plant.phase_at(w_rad_per_s) + pi)
    if w == inf:
        raise ValueError("the phase of this plant never reaches -180 degrees")
    return 1 / plant.gain_at(w), 2 * pi / w


def first_crossing(falling: Callable[[float], float]) -> float:
    """The lowest w in 1e-6 .. 1e12 rad/s where the function falls through 0 (grid of 2.3 %, then brentq); else inf."""
    low = 1e-6
    for i in range(1, 1801):
        high = 1e-6 * 10 ** (i / 100)
        if falling(high) <= 0:
            return float(brentq(falling, low, high, xtol=1e-300, rtol=1e-14))
        low = high
    return inf
