"""Points of the plant's frequency response by Fourier integration over whole relay cycles.

G(jw) = int(PV e^-jwt) / int(OP e^-jwt) holds for any periodic waveform of a linear plant, not only for a
sinusoid (linear system theory; Luyben, Ind. Eng. Chem. Res. 26 (1987) 2490).  The output is constant
between the stamps of its effects, so its integral is exact.  PV is joined by straight lines between its
irregular stamps; the joined waveform is integrated exactly and what joining takes from a frequency
(sinc^2 of half the angle between stamps) is put back.  What lies above half the scan's frequency folds
back: for a waveform with corners, whose harmonics fall as 1/n^2 (a lag with dead time has the sharpest),
by 2 (n/(N - n))^2 at N samples a cycle.  That share is part of each point's scatter.
"""

import numpy as np
from numpy.typing import NDArray
from scipy.special import stdtrit

from autotune.identify.findings import Cycle, OscillationPoint
from autotune.identify.waveforms import Array, Waveforms

ComplexArray = NDArray[np.complex128]

HARMONICS = (1, 2, 3, 4, 5)
INPUT_SHARE_AT_LEAST = 0.05  # a harmonic of OP weaker than this, against the fundamental, tells nothing


def harmonic_points(signals: Waveforms, cycles: tuple[Cycle, ...]) -> tuple[OscillationPoint, ...]:
    """G at the fundamental and at those of harmonics 2 to 5 that the output holds, over all ``cycles`` at once.

    ``cycles`` adjoin each other; at least two.  PV's mean and its slope from cycle to cycle are removed
    first: a drift is no part of the oscillation.  Each harmonic's scatter is that of the mean over
    single cycles, never below what the noise at rest explains, widened by Student's t over 1.96 so that
    1.96 standard deviations hold 95 % though the cycles are few.  Raises ``ValueError`` for fewer than two cycles.
    """
    if len(cycles) < 2:
        raise ValueError(f"scatter over cycles needs at least two cycles, not {len(cycles)}")
    level = drift_removed(signals, cycles)
    from_s, to_s = cycles[0].from_s, cycles[-1].from_s + cycles[-1].period_s
    fundamental = 2 * np.pi * len(cycles) / (to_s - from_s)
    order = np.array(HARMONICS, dtype=float)
    op_all = held_integral(signals.effect_s, signals.op_pct, from_s, to_s, order * fundamental)
    held = [np.abs(op_all), *(np.abs(_op_of_cycle(signals, cycle, order)) for cycle in cycles)]
    order = order[np.all([op >= INPUT_SHARE_AT_LEAST * op[0] for op in held], axis=0)]
    op_all = held_integral(signals.effect_s, signals.op_pct, from_s, to_s, order * fundamental)
    pv_all = joined_integral(signals.sample_s, level, from_s, to_s, order * fundamental)
    seen = pv_all / op_all
    samples = int(np.sum((signals.sample_s >= from_s) & (signals.sample_s < to_s)))
    noise_share = signals.noise_pct * (to_s - from_s) / np.sqrt(2 * samples) / np.abs(pv_all)
    folded = 2 * (order / np.maximum(samples / len(cycles) - order, order)) ** 2
    edge_s = _edge_doubt_s(signals, from_s, to_s)
    sd = np.hypot(np.maximum(_spread(signals, level, cycles, order, seen), noise_share), folded)
    return tuple(
        OscillationPoint(
            method="Fourier" if harmonic == 1 else f"Fourier, harmonic {harmonic:.0f}",
            frequency_rad_per_s=float(harmonic * fundamental),
            gain=float(np.abs(point)),
            phase_rad=_unwrapped(complex(point), is_fundamental=harmonic == 1),
            gain_sd_ratio=float(sd_ratio),
            phase_sd_rad=float(np.hypot(sd_ratio, harmonic * fundamental * edge_s)),
        )
        for harmonic, point, sd_ratio in zip(order, seen, sd, strict=True)
    )


def held_integral(from_each_s: Array, held: Array, from_s: float, to_s: float, w_rad_per_s: Array) -> ComplexArray:
    """int(held e^-jwt dt) over [from, to] of a waveform that holds each level from its stamp on; exact."""
    edges = np.clip(np.append(from_each_s, to_s), from_s, to_s)
    turned = np.exp(-1j * np.outer(w_rad_per_s, edges))
    return np.asarray((turned[:, :-1] - turned[:, 1:]) @ held / (1j * w_rad_per_s))


def joined_integral(at_s: Array, level: Array, from_s: float, to_s: float, w_rad_per_s: Array) -> ComplexArray:
    """int(level e^-jwt dt) over [from, to] of samples joined by straight lines, with the loss of joining put back.

    Exact for the joined waveform (by parts); the loss is the mean of sinc^2(w step/2) over the steps.
    """
    t, joined = _cut(at_s, level, from_s, to_s)
    step = np.diff(t)
    turned = np.exp(-1j * np.outer(w_rad_per_s, t))
    ends = (turned[:, 0] * joined[0] - turned[:, -1] * joined[-1]) / (1j * w_rad_per_s)
    slopes = (turned[:, :-1] - turned[:, 1:]) @ (np.diff(joined) / step) / (1j * w_rad_per_s) ** 2
    kept = np.sinc(np.outer(w_rad_per_s, step) / (2 * np.pi)) ** 2 @ step / (to_s - from_s)
    return np.asarray((ends + slopes) / kept)


def joined_mean(at_s: Array, level: Array, from_s: float, to_s: float) -> float:
    """Mean over [from, to] of samples joined by straight lines."""
    t, joined = _cut(at_s, level, from_s, to_s)
    return float(np.trapezoid(joined, t)) / (to_s - from_s)


def cycle_means(signals: Waveforms, cycles: tuple[Cycle, ...]) -> Array:
    """PV's mean over each cycle, percent."""
    return np.array([joined_mean(signals.sample_s, signals.pv_pct, c.from_s, c.from_s + c.period_s) for c in cycles])


def slope_pct_per_s(cycles: tuple[Cycle, ...], means_pct: Array) -> float:
    """Slope of PV's mean from cycle to cycle (least squares), percent a second; at least two cycles."""
    middles = np.array([cycle.from_s + cycle.period_s / 2 for cycle in cycles])
    middles -= np.mean(middles)
    return float(middles @ means_pct / (middles @ middles))


def drift_removed(signals: Waveforms, cycles: tuple[Cycle, ...]) -> Array:
    """PV at its samples without its mean and its slope over ``cycles``: the periodic part."""
    means = cycle_means(signals, cycles)
    middle_s = cycles[0].from_s + (cycles[-1].from_s + cycles[-1].period_s - cycles[0].from_s) / 2
    slope = slope_pct_per_s(cycles, means)
    return np.asarray(signals.pv_pct - np.mean(means) - slope * (signals.sample_s - middle_s))


def _spread(signals: Waveforms, level: Array, cycles: tuple[Cycle, ...], order: Array, seen: ComplexArray) -> Array:
    """Relative standard error of the mean over cycles of each harmonic, one real component, t-widened."""
    ratios = []
    for cycle in cycles:
        to_s = cycle.from_s + cycle.period_s
        w = order * 2 * np.pi / cycle.period_s
        pv = joined_integral(signals.sample_s, level, cycle.from_s, to_s, w)
        ratios.append(pv / _op_of_cycle(signals, cycle, order) / seen)
    several = np.array(ratios)
    # two real components a cycle: the pooled variance has 2 (n - 1) degrees of freedom
    freedom = 2 * (len(cycles) - 1)
    variance = np.sum(np.abs(several - np.mean(several, axis=0)) ** 2, axis=0) / freedom
    return np.asarray(np.sqrt(variance / len(cycles)) * float(stdtrit(freedom, 0.975)) / 1.959964)


def _op_of_cycle(signals: Waveforms, cycle: Cycle, order: Array) -> ComplexArray:
    w = order * 2 * np.pi / cycle.period_s
    return held_integral(signals.effect_s, signals.op_pct, cycle.from_s, cycle.from_s + cycle.period_s, w)


def _edge_doubt_s(signals: Waveforms, from_s: float, to_s: float) -> float:
    """What an edge of PV that falls between two samples leaves unknown of its instant (standard deviation, s).

    A jump of share q of the swing within one step is known to the step only (uniform: step/sqrt(12)), and it is
    about the share q of the waveform whose instant is in doubt.
    """
    inside = (signals.sample_s >= from_s) & (signals.sample_s <= to_s)
    jumps = np.abs(np.diff(signals.pv_pct[inside]))
    longest = int(np.argmax(jumps))
    step_s = float(np.diff(signals.sample_s[inside])[longest])
    return float(jumps[longest] / np.ptp(signals.pv_pct[inside])) * step_s / 12**0.5


def _cut(at_s: Array, level: Array, from_s: float, to_s: float) -> tuple[Array, Array]:
    inside = (at_s > from_s) & (at_s < to_s)
    t = np.concatenate(([from_s], at_s[inside], [to_s]))
    keep = np.concatenate(([True], np.diff(t) > 1e-9 * (to_s - from_s)))
    joined = np.interp(t, at_s, level)
    return t[keep], joined[keep]


def _unwrapped(response: complex, *, is_fundamental: bool) -> float:
    """A relay swings between 0 and -360 degrees; a harmonic's phase is known only to whole turns."""
    phase = float(np.angle(response))
    return phase - 2 * np.pi if is_fundamental and phase > 0 else phase
