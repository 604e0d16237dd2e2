"""The oscillation, cycle by cycle, as it is seen while the test runs."""

from dataclasses import dataclass, replace
from math import pi

from autotune.experiment.plan import ConvergencePlan

USABLE_CYCLES_AT_LEAST = 2
"""Whole cycles without which there is nothing to find."""


@dataclass(frozen=True, slots=True)
class RelayCycle:
    """One whole cycle, from one move up to the next, on our clock.

    ``pv_amplitude_pct`` is half of PV's peak to peak, ``amplitude_pct`` half of OP's; ``pv_mean_pct`` is the mean
    over time.  A cycle is usable when neither the start nor a change of the steps shows in it.
    """

    from_s: float
    period_s: float
    pv_amplitude_pct: float
    pv_mean_pct: float
    amplitude_pct: float
    is_usable: bool

    @property
    def rough_ultimate_gain(self) -> float | None:
        """4d/(pi a) in %OP/%PV, the describing function of a relay; what was seen, not what is concluded."""
        return 4.0 * self.amplitude_pct / (pi * self.pv_amplitude_pct) if self.pv_amplitude_pct > 0.0 else None


@dataclass(frozen=True, slots=True)
class Cycles:
    """What is known of the cycles so far.

    ``whole`` are finished.  ``up_s`` is the last move up.  Extremes and the integral of PV belong to the cycle
    that runs; ``turn_pct`` and ``turn_s`` are how far, and until when, PV ran on after the last switch, in terms
    of rise against the push.  ``lag_s`` is the last observed time from switch to turn, ``half_s`` the longest
    half cycle; ``since_change`` counts the cycles begun since the start or the last change of the steps.
    """

    whole: tuple[RelayCycle, ...] = ()
    up_s: float | None = None
    low_pct: float = 0.0
    high_pct: float = 0.0
    integral_pct_s: float = 0.0
    seen_s: float = 0.0
    seen_pct: float = 0.0
    turn_pct: float = 0.0
    turn_s: float = 0.0
    lag_s: float | None = None
    half_s: float | None = None
    since_change: int = 0

    @property
    def usable(self) -> tuple[RelayCycle, ...]:
        """The whole cycles that count."""
        return tuple(cycle for cycle in self.whole if cycle.is_usable)

    @property
    def has_enough_for_findings(self) -> bool:
        """Whether there are enough whole cycles to find anything."""
        return len(self.usable) >= USABLE_CYCLES_AT_LEAST

    @property
    def drift_pct_per_s(self) -> float | None:
        """How PV's mean moved between the last two usable cycles; ``None`` before there are two."""
        if not self.has_enough_for_findings:
            return None
        before, last = self.usable[-2:]
        return (last.pv_mean_pct - before.pv_mean_pct) / last.period_s


def start_cycles(t_s: float, pv_pct: float, is_up: bool) -> Cycles:
    """The state at the relay's first move."""
    return Cycles(
        up_s=t_s if is_up else None,
        low_pct=pv_pct,
        high_pct=pv_pct,
        seen_s=t_s,
        seen_pct=pv_pct,
        turn_s=t_s,
        since_change=1 if is_up else 0,
    )


def with_sample(cycles: Cycles, t_s: float, pv_pct: float, against_pct: float) -> Cycles:
    """Take in one PV; ``against_pct`` is its rise against the present push of the output."""
    has_run_on = against_pct > cycles.turn_pct
    return replace(
        cycles,
        low_pct=min(cycles.low_pct, pv_pct),
        high_pct=max(cycles.high_pct, pv_pct),
        integral_pct_s=cycles.integral_pct_s + 0.5 * (pv_pct + cycles.seen_pct) * (t_s - cycles.seen_s),
        seen_s=t_s,
        seen_pct=pv_pct,
        turn_pct=against_pct if has_run_on else cycles.turn_pct,
        turn_s=t_s if has_run_on else cycles.turn_s,
    )


def with_switch(cycles: Cycles, t_s: float, switched_s: float, against_pct: float) -> Cycles:
    """Close the half cycle that began at ``switched_s``; ``against_pct`` is PV's rise against the new push."""
    is_first_half = cycles.half_s is None
    return replace(
        cycles,
        lag_s=cycles.lag_s if is_first_half else cycles.turn_s - switched_s,
        half_s=max(cycles.half_s or 0.0, t_s - switched_s),
        turn_pct=against_pct,
        turn_s=t_s,
    )


def with_move_up(cycles: Cycles, plan: ConvergencePlan, t_s: float, pv_pct: float, amplitude_pct: float) -> Cycles:
    """Close the cycle that began with the last move up, and begin the next one."""
    whole = cycles.whole
    if cycles.up_s is not None and t_s > cycles.up_s:
        period_s = t_s - cycles.up_s
        cycle = RelayCycle(
            from_s=cycles.up_s,
            period_s=period_s,
            pv_amplitude_pct=0.5 * (cycles.high_pct - cycles.low_pct),
            pv_mean_pct=cycles.integral_pct_s / period_s,
            amplitude_pct=amplitude_pct,
            is_usable=cycles.since_change > plan.cycles_to_discard,
        )
        whole = (*whole, cycle)
    return replace(
        cycles,
        whole=whole,
        up_s=t_s,
        low_pct=pv_pct,
        high_pct=pv_pct,
        integral_pct_s=0.0,
        since_change=cycles.since_change + 1,
    )


def with_new_steps(cycles: Cycles, is_up: bool) -> Cycles:
    """Begin to discard anew: the steps have changed with the move that was just taken in."""
    return replace(cycles, since_change=1 if is_up else 0)


def has_converged(cycles: Cycles, plan: ConvergencePlan, scan_s: float, noise_pct: float) -> bool:
    """Whether the last whole cycles agree in period and swing.

    What can't be seen is no disagreement: one scan of period and one standard deviation of noise of swing.
    """
    last = cycles.whole[-plan.cycles_to_agree :]
    if len(last) < plan.cycles_to_agree or not all(cycle.is_usable for cycle in last):
        return False
    periods = [cycle.period_s for cycle in last]
    swings = [cycle.pv_amplitude_pct for cycle in last]
    return _agree(periods, plan.agreement_pct, scan_s) and _agree(swings, plan.agreement_pct, noise_pct)


def _agree(readings: list[float], agreement_pct: float, unseen: float) -> bool:
    mean = sum(readings) / len(readings)
    return max(readings) - min(readings) <= 0.01 * agreement_pct * abs(mean) + unseen
