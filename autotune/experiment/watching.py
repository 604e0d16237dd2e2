"""A reading of a touched loop: take it in, and judge it before anything else."""

from dataclasses import replace

from autotune.experiment import recording, trace
from autotune.experiment.commands import ClaimLoop, SetMode
from autotune.experiment.deadlines import end_due_s, switch_due_s, take_over_due_s, view_due_s
from autotune.experiment.ending import Step, release, trip
from autotune.experiment.held import confirmed, is_ours
from autotune.experiment.interlocks import (
    OF_THE_CLOCK,
    OF_THE_LOOP,
    OF_THE_PLC,
    WRONG_SIDE_HYSTERESES,
    View,
    first_trip,
)
from autotune.experiment.plan import TestPlan
from autotune.experiment.recording import Rested
from autotune.experiment.state import Experiment, Stage, Unheard
from autotune.experiment.takeover import sign_of_takeover
from autotune.loop.limits import AsFound
from autotune.loop.sample import Sample

HALVES_AFTER_FIRST = 6.0
HALVES_LATER = 2.0
"""How many longest half cycles PV may stay on the wrong side after a switch, per unit of 1 + step ratio.

On an integrator the half cycle after the larger step lasts up to (1 + ratio) first halves.  From rest the first half
is short: behind n equal lags PV starts as t^n, and comes back after t of (1 + t)^n = 2 t^n first halves, 2.4 for two
lags and 11 for eight.
"""

RECORDED = (Stage.HOLDING, Stage.FIRST_MOVE, Stage.CYCLING)
"""Stages whose samples belong to the record."""


def rise_pct(plan: TestPlan, rested: Rested, pv_pct: float) -> float:
    """How far PV lies above its reference on the side to which a higher output pushes it."""
    return plan.action.process_sign * (pv_pct - rested.reference_pct)


def take_in(experiment: Experiment, sample: Sample, t_s: float) -> Experiment:
    """The experiment after a reading, before it is judged."""
    experiment = replace(
        experiment,
        sample=sample,
        seen_s=t_s,
        trace=trace.with_sample(experiment.trace, sample, t_s, experiment.plan.scan_s),
        wrong_since_s=_wrong_since_s(experiment, sample, t_s),
    )
    if experiment.unheard is not None and _shows(experiment, sample, experiment.unheard):
        experiment = replace(experiment, unheard=None)
    return experiment


def judge(experiment: Experiment, as_found: AsFound, sample: Sample) -> Step | None:
    """Judge a reading that was taken in; ``None`` when the test may go on.

    What the PLC did by itself comes first, then whose loop it is, then every other interlock.
    """
    view = view_of(experiment, as_found, sample)
    fired = first_trip(view, OF_THE_PLC)
    if fired is not None:
        return trip(experiment, fired)
    sign = sign_of_takeover(experiment.plan, as_found, experiment.held, sample)
    if sign is not None:
        return release(experiment, sample, sign)
    fired = first_trip(view, (*OF_THE_LOOP, *OF_THE_CLOCK))
    return None if fired is None else trip(experiment, fired)


def keep(experiment: Experiment, sample: Sample) -> Experiment:
    """The experiment with what a good reading confirms and adds to the record."""
    held = confirmed(experiment.held, sample, experiment.plan.limits.op_resolution_pct)
    kept_pv_pct = sample.pv_pct if experiment.stage in RECORDED else None
    recorded = recording.with_sample(experiment.recording, sample, kept_pv_pct, held.is_op_confirmed)
    return replace(experiment, held=held, recording=recorded)


def view_of(experiment: Experiment, as_found: AsFound, sample: Sample) -> View:
    """What the interlocks look at."""
    t_s = experiment.t_s or 0.0
    return View(
        t_s=t_s,
        plan=experiment.plan,
        sample=sample,
        as_found=as_found,
        held=experiment.held,
        trace=experiment.trace,
        is_claimed=experiment.is_claimed,
        moved_s=experiment.moved_s,
        unheard_s=None if experiment.unheard is None else experiment.unheard.since_s,
        frozen_after_s=experiment.frozen_after_s,
        reference_pct=experiment.reference_pct,
        ahead_s=_ahead_s(experiment, t_s),
        view_due_s=view_due_s(experiment),
        take_over_due_s=take_over_due_s(experiment),
        switch_due_s=switch_due_s(experiment),
        end_due_s=end_due_s(experiment),
        wrong_for_s=0.0 if experiment.wrong_since_s is None else t_s - experiment.wrong_since_s,
        wrong_at_most_s=_wrong_at_most_s(experiment),
        cycles=experiment.cycles,
    )


def _shows(experiment: Experiment, sample: Sample, unheard: Unheard) -> bool:
    """Whether a reading shows that an unheard write has landed."""
    command = unheard.command
    if isinstance(command, ClaimLoop):
        return sample.guard is not None and is_ours(sample.guard, command.token)
    if isinstance(command, SetMode):
        return sample.mode is command.mode
    resolution_pct = experiment.plan.limits.op_resolution_pct
    return sample.op_pct is not None and abs(sample.op_pct - command.op_pct) <= resolution_pct


def _wrong_since_s(experiment: Experiment, sample: Sample, t_s: float) -> float | None:
    """Since when PV has been on the side from which the output should be pushing it away."""
    relay, rested = experiment.relay, experiment.rested
    if relay is None or rested is None or sample.pv_pct is None:
        return None
    against_pct = -relay.push_sign * rise_pct(experiment.plan, rested, sample.pv_pct)
    if against_pct <= WRONG_SIDE_HYSTERESES * rested.hysteresis_pct:
        return None
    return t_s if experiment.wrong_since_s is None else experiment.wrong_since_s


def _wrong_at_most_s(experiment: Experiment) -> float:
    """Inverse response and dead time as declared, and after the first switch what the halves so far explain."""
    limits, relay, half_s = experiment.plan.limits, experiment.relay, experiment.cycles.half_s
    explained_s = 0.0
    if relay is not None and half_s is not None:
        halves = HALVES_AFTER_FIRST if relay.switches < 2 else HALVES_LATER
        explained_s = halves * half_s * (1.0 + relay.step_ratio)
    return limits.inverse_response_s + limits.dead_time_s + explained_s


def _ahead_s(experiment: Experiment, t_s: float) -> float:
    """How long PV would run on if the output turned now, or since it has turned: observed, else declared."""
    relay, lag_s = experiment.relay, experiment.cycles.lag_s
    if relay is None:
        return 0.0
    lag_s = experiment.plan.limits.dead_time_s if lag_s is None else lag_s
    is_pushed = relay.push_sign * experiment.plan.action.process_sign * experiment.trace.sure_rate_pct_per_s > 0.0
    return lag_s if is_pushed else max(0.0, lag_s - (t_s - relay.switched_s))
