"""One robust optimum for a purpose: what the loop is for decides what is least, the draws how far it backs off."""

from collections.abc import Callable
from dataclasses import dataclass, replace
from math import exp, inf, log

import numpy as np
from numpy.typing import NDArray

from autotune.design.choices import Caution, Purpose
from autotune.design.draws import DrawsOnGrid, quantile_ratio
from autotune.design.gain_intervals import LoopLimits
from autotune.design.optimum import (
    LONGEST_INTEGRAL_RATIO,
    Found,
    LoopBench,
    admissible_gain,
    best_pi,
    best_pid,
    iae_pct_s,
    keeps,
    least_by_simplex,
)
from autotune.design.responses import load_figures, setpoint_figures
from autotune.loop.outcome import Refusal
from autotune.loop.settings import PidSettings

Array = NDArray[np.float64]

PEAK_SENSITIVITY = 1.4
GUARDED_SENSITIVITY = 1.42
"""Ms of the best estimate, and Ms that the guarded share of the draws may reach: calm, in the usual 1.2 to 2
(Astrom and Hagglund, Advanced PID Control, 2006)."""

OP_NOISE_AT_MOST_PCT = 0.5
"""Standard deviation that noise of PV may give OP (common practice, no source)."""

GUARDED_SHARE_RATIO = {Caution.BRISK: 0.0, Caution.MIDDLE: 0.9, Caution.CAREFUL: 1.0}

DERIVATIVE_WORTH_RATIO = 0.8
"""Share of the PI's error that a PID must come down to, to be worth its noise (common practice, no source)."""

OVERSHOOT_AT_MOST_PCT = 1.0
"""What counts as no overshoot of a setpoint step."""

GENTLE_IAE_RATIO = 2.0
"""How much more error after an upset a gentle loop may have than the quickest."""

_KEPT_RATIO = 1.002
_BACK_OFFS = 6
_LEAST_LIMIT = 1.05
_FOLLOW_TURNS = 140
_GENTLE_TIMES = np.geomspace(0.3, 3.0, 15)
_GENTLE_TURNS = 8


@dataclass(frozen=True, slots=True)
class RobustOptimum:
    """Settings in the block's form, with what they stand on.

    ``iae_pct_s`` after a load step of 1 %; ``limit_sensitivity`` is the Ms limit that the draws left, and
    ``guarded_sensitivity`` the Ms that the guarded share of draws keeps (``None`` where none is guarded).
    ``because`` says in one sentence what derivative buys.
    """

    settings: PidSettings
    iae_pct_s: float
    limit_sensitivity: float
    guarded_sensitivity: float | None
    because: str


def robust_optimum(
    bench: LoopBench, draws: DrawsOnGrid, purpose: Purpose, caution: Caution, noise_pct: float | None = None
) -> RobustOptimum | Refusal:
    """The best settings for ``regulate``, ``follow`` or ``gentle``; ``averaging`` is regulated like ``gentle`` here.

    ``noise_pct`` is the standard deviation of PV at rest and limits what OP may do with it.  Refuses
    ``NO_ADMISSIBLE_GAIN`` where no PI keeps the limits.
    """
    noise_gain = None if not noise_pct else OP_NOISE_AT_MOST_PCT / noise_pct
    limits = LoopLimits(PEAK_SENSITIVITY, PEAK_SENSITIVITY, noise_gain)

    def pi_within(within: LoopLimits, earlier: Found | None) -> Found | None:
        start = earlier if purpose is Purpose.FOLLOW and earlier is not None else best_pi(bench, within)
        return None if start is None else _suited(bench, purpose, within, start)

    pi = _guarded(bench, draws, caution, limits, pi_within)
    if pi is None:
        return Refusal(
            "NO_ADMISSIBLE_GAIN",
            f"no PI keeps Ms and Mt within {PEAK_SENSITIVITY:g} on this plant under this block",
            "look at scan and dead time, or choose a published rule with its forecast",
        )
    if purpose in (Purpose.GENTLE, Purpose.AVERAGING):
        return replace(pi, because="Derivative moves the valve more, so a loop that spares it is a PI.")
    if not bench.block.has_derivative:
        return replace(pi, because="The block has no derivative.")
    best = Found(pi.settings, pi.iae_pct_s)

    def pid_within(within: LoopLimits, earlier: Found | None) -> Found:
        if purpose is Purpose.FOLLOW and earlier is not None:
            return _following(bench, within, earlier)
        found = best_pid(bench, within, best, None if earlier is None else earlier.settings)
        return _suited(bench, purpose, within, found)

    pid = _guarded(bench, draws, caution, limits, pid_within)
    return _chosen(bench, purpose, pi, pid or pi)


def _suited(bench: LoopBench, purpose: Purpose, limits: LoopLimits, found: Found) -> Found:
    """From the optimum for upsets to the one for the purpose."""
    if purpose is Purpose.REGULATE:
        return found
    return _following(bench, limits, found) if purpose is Purpose.FOLLOW else _gentle(bench, limits, found)


def _chosen(bench: LoopBench, purpose: Purpose, pi: RobustOptimum, pid: RobustOptimum) -> RobustOptimum:
    """PI or PID by what derivative really buys."""
    what = "the error after a setpoint step" if purpose is Purpose.FOLLOW else "the error after an upset"
    before, after = _error_pct_s(bench, purpose, pi.settings), _error_pct_s(bench, purpose, pid.settings)
    if after > DERIVATIVE_WORTH_RATIO * before:
        bought = max(0.0, 100.0 * (1.0 - after / before))
        return replace(pi, because=f"Derivative would lessen {what} by only {bought:.0f} %, so this is a PI.")
    return replace(pid, because=f"Derivative lessens {what} by {100.0 * (1.0 - after / before):.0f} %.")


def _error_pct_s(bench: LoopBench, purpose: Purpose, settings: PidSettings) -> float:
    if purpose is Purpose.FOLLOW:
        return setpoint_figures(bench.loop(settings), bench.scans).iae_pct_s
    return iae_pct_s(bench, settings)


def guarded_sensitivity(bench: LoopBench, draws: DrawsOnGrid, caution: Caution, settings: PidSettings) -> float | None:
    """The Ms that the share of draws which ``caution`` guards doesn't exceed; ``None`` where it guards none."""
    share_ratio = GUARDED_SHARE_RATIO[caution]
    if share_ratio == 0.0:
        return None
    shape = bench.terms.response(settings.integral_time_s, settings.derivative_time_s)
    peaks = draws.peak_sensitivities(settings.controller_gain * shape, int(settings.integral_time_s is not None))
    return quantile_ratio(peaks, draws.shares, share_ratio)


def keeps_guard(
    bench: LoopBench, draws: DrawsOnGrid, caution: Caution, found: RobustOptimum, settings: PidSettings
) -> bool:
    """Whether other settings, as rounded to a block's fields, keep what ``found`` keeps."""
    limits = LoopLimits(PEAK_SENSITIVITY * _KEPT_RATIO, PEAK_SENSITIVITY * _KEPT_RATIO)
    reached = guarded_sensitivity(bench, draws, caution, settings)
    allowed = max(GUARDED_SENSITIVITY, found.guarded_sensitivity or 0.0) * _KEPT_RATIO
    return keeps(bench, limits, settings) and (reached is None or reached <= allowed)


def _guarded(
    bench: LoopBench,
    draws: DrawsOnGrid,
    caution: Caution,
    limits: LoopLimits,
    search: Callable[[LoopLimits, Found | None], Found | None],
) -> RobustOptimum | None:
    """Search, look at the draws, and lower the limit on Ms until enough of them keep theirs."""
    limit, outcome, found = limits.peak_sensitivity, None, None
    for _ in range(_BACK_OFFS):
        found = search(replace(limits, peak_sensitivity=limit), found)
        if found is None:
            return outcome
        reached = guarded_sensitivity(bench, draws, caution, found.settings)
        outcome = RobustOptimum(found.settings, found.iae_pct_s, limit, reached, "")
        if reached is None or reached <= GUARDED_SENSITIVITY:
            return outcome
        share = 0.5 if reached == inf else (GUARDED_SENSITIVITY - 1.0) / (reached - 1.0)
        limit = max(_LEAST_LIMIT, 1.0 + (limit - 1.0) * min(0.97, share))
    return outcome


def _following(bench: LoopBench, limits: LoopLimits, start: Found) -> Found:
    """Least setpoint-step IAE without overshoot, sought from the optimum for upsets."""

    def settings_of(x: Array) -> PidSettings | None:
        td_s = exp(x[2]) if len(x) > 2 else None
        is_too_long = exp(x[1]) > LONGEST_INTEGRAL_RATIO * bench.period_s
        if is_too_long or (top := admissible_gain(bench, limits, exp(x[1]), td_s)) is None:
            return None
        return PidSettings(bench.block.form, min(exp(x[0]), top), exp(x[1]), td_s)

    def cost(x: Array) -> float:
        settings = settings_of(x)
        if settings is None:
            return inf
        figures = setpoint_figures(bench.loop(settings), bench.scans)
        return figures.iae_pct_s * (1.0 + max(0.0, figures.overshoot_pct - 0.9 * OVERSHOOT_AT_MOST_PCT))

    first = start.settings
    times = [first.integral_time_s or bench.period_s, *([first.derivative_time_s] if first.derivative_time_s else [])]
    x = np.log([first.controller_gain, *times])
    x = least_by_simplex(cost, x, turns=_FOLLOW_TURNS)
    settings = settings_of(x) or first
    return Found(settings, iae_pct_s(bench, settings))


def _gentle(bench: LoopBench, limits: LoopLimits, start: Found) -> Found:
    """Least travel of OP, among PIs that leave no more than twice the error of the quickest after an upset."""
    allowed = GENTLE_IAE_RATIO * start.iae_pct_s
    best = (inf, start)
    for ratio in _GENTLE_TIMES:
        ti_s = float(ratio) * (start.settings.integral_time_s or bench.period_s)
        top = admissible_gain(bench, limits, ti_s, None)
        if top is None:
            continue
        low, high = log(ti_s / allowed), log(top)
        settings = PidSettings(bench.block.form, top, ti_s, None)
        for _ in range(_GENTLE_TURNS if low < high else 0):
            middle = PidSettings(bench.block.form, exp((low + high) / 2.0), ti_s, None)
            if keeps(bench, limits, middle) and iae_pct_s(bench, middle) <= allowed:
                settings, high = middle, log(middle.controller_gain)
            else:
                low = log(middle.controller_gain)
        error = iae_pct_s(bench, settings)
        loop = bench.loop(settings)
        travel = load_figures(loop, bench.scans, None).travel_pct + setpoint_figures(loop, bench.scans).travel_pct
        if error <= allowed and travel < best[0]:
            best = (travel, Found(settings, error))
    return best[1]
