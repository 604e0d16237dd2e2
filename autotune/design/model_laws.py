"""Published rules as formulas: a reduced model in, (gain, Ti, Td) out, in %OP/%PV and seconds; ``None`` is off.

Each for the form that ``model_rules`` names; ``tc_s`` and ``lambda_s`` are the closed-loop times that the
papers leave to the reader.  r = L/T, tau = L/(L + T), kappa = 1/(Kp Ku).
"""

from dataclasses import dataclass
from math import exp

from autotune.design.reduction import Ipdt, ReactionCurve, Sotd
from autotune.identify.closed_forms import Fotd

Terms = tuple[float, float | None, float | None]
"""Gain, integral time and derivative time."""


@dataclass(frozen=True, slots=True)
class UltimateReading:
    """Static gain (%PV/%OP), ultimate gain (%OP/%PV) and period of a plant."""

    process_gain: float
    ultimate_gain: float
    ultimate_period_s: float

    @property
    def gain_ratio(self) -> float:
        """kappa = 1/(Kp Ku): 0 for an integrator, 1 for dead time alone."""
        return 1.0 / (self.process_gain * self.ultimate_gain)


def from_intercept(curve: ReactionCurve, gain: float, ti_ratio: float | None, td_ratio: float | None) -> Terms:
    """Ziegler and Nichols 1942: gain over a = slope L, times as multiples of L."""
    return gain / curve.intercept_gain, _times(ti_ratio, curve.dead_time_s), _times(td_ratio, curve.dead_time_s)


def cohen_coon_p(m: Fotd) -> Terms:
    """Cohen and Coon 1953, P."""
    r = m.dead_time_s / m.time_constant_s
    return (1.0 + r / 3.0) / (m.process_gain * r), None, None


def cohen_coon_pi(m: Fotd) -> Terms:
    """Cohen and Coon 1953, PI."""
    r = m.dead_time_s / m.time_constant_s
    return (0.9 + r / 12.0) / (m.process_gain * r), m.dead_time_s * (30.0 + 3.0 * r) / (9.0 + 20.0 * r), None


def cohen_coon_pd(m: Fotd) -> Terms:
    """Cohen and Coon 1953, PD."""
    r = m.dead_time_s / m.time_constant_s
    return (1.25 + r / 6.0) / (m.process_gain * r), None, m.dead_time_s * (6.0 - 2.0 * r) / (22.0 + 3.0 * r)


def cohen_coon_pid(m: Fotd) -> Terms:
    """Cohen and Coon 1953, PID."""
    r, dead_s = m.dead_time_s / m.time_constant_s, m.dead_time_s
    gain = (4.0 / 3.0 + r / 4.0) / (m.process_gain * r)
    return gain, dead_s * (32.0 + 6.0 * r) / (13.0 + 8.0 * r), 4.0 * dead_s / (11.0 + 2.0 * r)


def chien_hrones_reswick(m: Fotd, gain: float, ti_ratio: tuple[float, float] | None, td_ratio: float | None) -> Terms:
    """Chien, Hrones and Reswick 1952: gain over a = K L/T; Ti is (share of T, share of L): setpoint rules take T."""
    intercept = m.process_gain * m.dead_time_s / m.time_constant_s
    ti_s = None if ti_ratio is None else ti_ratio[0] * m.time_constant_s + ti_ratio[1] * m.dead_time_s
    return gain / intercept, ti_s, _times(td_ratio, m.dead_time_s)


Power = tuple[float, float]
"""A and B of A r^B, or of A + B r."""


def load_table(m: Fotd, gain: Power, ti: Power | None, td: Power | None) -> Terms:
    """Lopez, Miller, Smith and Murrill 1967: K = A r^B/Kp, Ti = T/(A r^B), Td = T A r^B."""
    ti_s = None if ti is None else m.time_constant_s / _power(ti, m)
    return _power(gain, m) / m.process_gain, ti_s, None if td is None else m.time_constant_s * _power(td, m)


def setpoint_table(m: Fotd, gain: Power, ti: Power, td: Power | None) -> Terms:
    """Rovira, Murrill and Smith 1969: as the load tables, but Ti = T/(A + B r)."""
    r = m.dead_time_s / m.time_constant_s
    ti_s = m.time_constant_s / (ti[0] + ti[1] * r)
    return _power(gain, m) / m.process_gain, ti_s, None if td is None else m.time_constant_s * _power(td, m)


def imc_pid(m: Fotd, lambda_s: float) -> Terms:
    """Rivera, Morari and Skogestad 1986, PID (lambda > 0.8 L)."""
    k, t_s, dead_s = m.process_gain, m.time_constant_s, m.dead_time_s
    return (
        (2.0 * t_s + dead_s) / (k * (2.0 * lambda_s + dead_s)),
        t_s + dead_s / 2.0,
        t_s * dead_s / (2.0 * t_s + dead_s),
    )


def imc_improved_pi(m: Fotd, lambda_s: float) -> Terms:
    """Rivera, Morari and Skogestad 1986, improved PI (lambda > 1.7 L)."""
    return (
        (2.0 * m.time_constant_s + m.dead_time_s) / (2.0 * m.process_gain * lambda_s),
        (m.time_constant_s + m.dead_time_s / 2.0),
        None,
    )


def lambda_pi(m: Fotd, lambda_s: float) -> Terms:
    """Chien and Fruehauf 1990: K = T/(Kp (lambda + L)), Ti = T."""
    return m.time_constant_s / (m.process_gain * (lambda_s + m.dead_time_s)), m.time_constant_s, None


def imc_integrator_pi(m: Ipdt, tc_s: float) -> Terms:
    """Chien and Fruehauf 1990, case M."""
    ti_s = 2.0 * tc_s + m.dead_time_s
    return ti_s / (m.process_gain_per_s * (tc_s + m.dead_time_s) ** 2), ti_s, None


def imc_integrator_pid(m: Ipdt, tc_s: float) -> Terms:
    """Chien and Fruehauf 1990, case N."""
    dead_s = m.dead_time_s
    ti_s = 2.0 * tc_s + dead_s
    return ti_s / (m.process_gain_per_s * (tc_s + dead_s / 2.0) ** 2), ti_s, (tc_s * dead_s + dead_s**2 / 4.0) / ti_s


def simc_pi(m: Fotd, tc_s: float) -> Terms:
    """Skogestad 2003: K = T1/(k (tc + L)), Ti = min(T1, 4 (tc + L))."""
    loop_s = tc_s + m.dead_time_s
    return m.time_constant_s / (m.process_gain * loop_s), min(m.time_constant_s, 4.0 * loop_s), None


def simc_pid(m: Sotd, tc_s: float) -> Terms:
    """Skogestad 2003, series: as the PI, with Td = T2."""
    loop_s = tc_s + m.dead_time_s
    gain = m.time_constant_s / (m.process_gain * loop_s)
    return gain, min(m.time_constant_s, 4.0 * loop_s), m.second_time_constant_s or None


def simc_integrator_pi(m: Ipdt, tc_s: float) -> Terms:
    """Skogestad 2003: K = 1/(k' (tc + L)), Ti = 4 (tc + L)."""
    loop_s = tc_s + m.dead_time_s
    return 1.0 / (m.process_gain_per_s * loop_s), 4.0 * loop_s, None


def simc_integrator_pid(m: Ipdt, tc_s: float) -> Terms:
    """Skogestad 2003, series: as the PI, with Td = T2; a lag beyond 4 (tc + L) counts as a second integrator."""
    loop_s = tc_s + m.dead_time_s
    lag_s = m.second_time_constant_s
    share_ratio = max(1.0, lag_s / (4.0 * loop_s))
    return share_ratio / (m.process_gain_per_s * loop_s), 4.0 * loop_s, lag_s / share_ratio or None


def improved_simc_pi(m: Fotd, tc_s: float) -> Terms:
    """Grimholt and Skogestad 2012: T is replaced by T + L/3."""
    longer = Fotd(m.process_gain, m.time_constant_s + m.dead_time_s / 3.0, m.dead_time_s)
    return simc_pi(longer, tc_s)


def improved_simc_pid(m: Fotd, tc_s: float) -> Terms:
    """Grimholt and Skogestad 2018, series: the SIMC PI with Td = L/3."""
    gain, ti_s, _ = simc_pi(m, tc_s)
    return gain, ti_s, m.dead_time_s / 3.0


def amigo_pi(m: Fotd) -> Terms:
    """Astrom and Hagglund 2004/2006, PI from the step response."""
    k, t_s, dead_s = m.process_gain, m.time_constant_s, m.dead_time_s
    gain = 0.15 / k + (0.35 - dead_s * t_s / (dead_s + t_s) ** 2) * t_s / (k * dead_s)
    ti_s = 0.35 * dead_s + 13.0 * dead_s * t_s**2 / (t_s**2 + 12.0 * dead_s * t_s + 7.0 * dead_s**2)
    return gain, ti_s, None


def amigo_pid(m: Fotd) -> Terms:
    """Astrom and Hagglund 2004/2006, PID from the step response."""
    k, t_s, dead_s = m.process_gain, m.time_constant_s, m.dead_time_s
    return (
        (0.2 + 0.45 * t_s / dead_s) / k,
        dead_s * (0.4 * dead_s + 0.8 * t_s) / (dead_s + 0.1 * t_s),
        0.5 * dead_s * t_s / (0.3 * dead_s + t_s),
    )


def from_integrator(m: Ipdt, gain: float, ti_ratio: float | None, td_ratio: float | None) -> Terms:
    """Rules of the shape gain/(k L), Ti and Td as multiples of L."""
    return (
        gain / (m.process_gain_per_s * m.dead_time_s),
        _times(ti_ratio, m.dead_time_s),
        _times(td_ratio, m.dead_time_s),
    )


def amigo_frequency_pi(u: UltimateReading) -> Terms:
    """Astrom and Hagglund 2006, PI from ultimate point and static gain."""
    return 0.16 * u.ultimate_gain, u.ultimate_period_s / (1.0 + 4.5 * u.gain_ratio), None


def amigo_frequency_pid(u: UltimateReading) -> Terms:
    """Astrom and Hagglund 2006, PID from ultimate point and static gain."""
    kappa, tu_s = u.gain_ratio, u.ultimate_period_s
    td_s = 0.15 * (1.0 - kappa) * tu_s / (1.0 - 0.95 * kappa)
    return (0.3 - 0.1 * kappa**4) * u.ultimate_gain, 0.6 * tu_s / (1.0 + 2.0 * kappa), td_s


Bend = tuple[float, float, float]
"""a0, a1, a2 of a0 exp(a1 x + a2 x^2)."""


def kappa_tau_step(m: Fotd, gain: Bend, ti: Bend, td: Bend | None) -> Terms:
    """Astrom and Hagglund 1995: a K and Ti/L, Td/L as functions of tau, with a = Kp L/T (not slope L)."""
    tau = m.dead_time_s / (m.dead_time_s + m.time_constant_s)
    intercept = m.process_gain * m.dead_time_s / m.time_constant_s
    td_s = None if td is None else _bent(td, tau) * m.dead_time_s
    return _bent(gain, tau) / intercept, _bent(ti, tau) * m.dead_time_s, td_s


def kappa_tau_frequency(u: UltimateReading, gain: Bend, ti: Bend, td: Bend | None) -> Terms:
    """Astrom and Hagglund 1995: K/Ku, Ti/Tu and Td/Tu as functions of kappa."""
    kappa, tu_s = u.gain_ratio, u.ultimate_period_s
    return (
        _bent(gain, kappa) * u.ultimate_gain,
        _bent(ti, kappa) * tu_s,
        None if td is None else _bent(td, kappa) * tu_s,
    )


def _bent(bend: Bend, x: float) -> float:
    return bend[0] * exp(bend[1] * x + bend[2] * x**2)


def _power(power: Power, m: Fotd) -> float:
    return power[0] * float((m.dead_time_s / m.time_constant_s) ** power[1])


def _times(multiple: float | None, time_s: float) -> float | None:
    return None if multiple is None else multiple * time_s
