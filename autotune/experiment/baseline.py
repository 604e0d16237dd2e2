"""BASELINE: the loop is taken over and held as found, until its noise and drift are known."""

from dataclasses import replace

from autotune.experiment import trace
from autotune.experiment.cycles import start_cycles
from autotune.experiment.ending import Step, give_up
from autotune.experiment.fitness import refuse_rest
from autotune.experiment.held import Held, ask_mode, claim, is_ours
from autotune.experiment.phases import Trigger, next_phase
from autotune.experiment.recording import Rested
from autotune.experiment.relay import hysteresis_pct, start_relay
from autotune.experiment.room import room_of
from autotune.experiment.state import Experiment, Stage
from autotune.experiment.steadiness import SAMPLES_AT_LEAST, frozen_after_s, measure_rest
from autotune.experiment.testing import drive_relay, push
from autotune.loop.limits import AsFound
from autotune.loop.mode import LoopMode
from autotune.loop.sample import Sample


def take_over(experiment: Experiment, as_found: AsFound, sample: Sample) -> Step:
    """Begin: from here on the loop is touched.  The guard first, then manual, then the output as found."""
    t_s = experiment.t_s or 0.0
    experiment = replace(
        experiment,
        phase=next_phase(experiment.phase, Trigger.FIT),
        touched_s=t_s,
        as_found=as_found,
        held=Held(token=experiment.plan.token),
    )
    if not experiment.plan.has_guard:
        return _ask_manual(experiment, as_found, sample)
    held, claimed = claim(experiment.held)
    return replace(experiment, held=held, stage=Stage.CLAIMING, stage_s=t_s), (claimed,)


def advance(experiment: Experiment, as_found: AsFound, sample: Sample) -> Step:
    """The next step of the baseline, on a reading that was judged good."""
    if experiment.stage is Stage.CLAIMING:
        return _await_claim(experiment, as_found, sample)
    if experiment.stage is Stage.SWITCHING:
        return _await_manual(experiment, as_found, sample)
    if experiment.stage is Stage.SETTLING and experiment.held.is_op_confirmed:
        experiment = replace(experiment, stage=Stage.HOLDING, stage_s=experiment.t_s or 0.0)
    if experiment.stage is Stage.HOLDING and sample.pv_pct is not None:
        entry = (sample.taken.middle_s, sample.pv_pct)
        experiment = replace(experiment, resting=experiment.resting.appended(entry))
        held_s = (experiment.t_s or 0.0) - experiment.stage_s
        if held_s >= experiment.plan.baseline_s and len(experiment.resting) >= SAMPLES_AT_LEAST:
            return _judge_rest(experiment, as_found, sample, sample.pv_pct)
    return push(experiment, sample, as_found.op_pct, is_relay=False)


def _await_claim(experiment: Experiment, as_found: AsFound, sample: Sample) -> Step:
    if sample.guard is not None and is_ours(sample.guard, experiment.plan.token):
        t_s = experiment.t_s or 0.0
        experiment = replace(experiment, is_claimed=True, trace=trace.with_claim(experiment.trace, t_s))
        return _ask_manual(experiment, as_found, sample)
    return _keep_claim(experiment)


def _keep_claim(experiment: Experiment) -> Step:
    """While nothing is driven yet, the heartbeat goes on with the claim."""
    if not experiment.plan.has_guard:
        return experiment, ()
    held, claimed = claim(experiment.held)
    return replace(experiment, held=held), (claimed,)


def _ask_manual(experiment: Experiment, as_found: AsFound, sample: Sample) -> Step:
    if sample.mode is LoopMode.MAN:
        return _hold(experiment, as_found, sample)
    held, asked = ask_mode(experiment.held, LoopMode.MAN, sample.mode)
    experiment = replace(experiment, held=held, stage=Stage.SWITCHING, stage_s=experiment.t_s or 0.0)
    experiment, alive = _keep_claim(experiment)
    return experiment, (*alive, asked)


def _await_manual(experiment: Experiment, as_found: AsFound, sample: Sample) -> Step:
    return _hold(experiment, as_found, sample) if sample.mode is LoopMode.MAN else _keep_claim(experiment)


def _hold(experiment: Experiment, as_found: AsFound, sample: Sample) -> Step:
    experiment = replace(experiment, stage=Stage.SETTLING, stage_s=experiment.t_s or 0.0)
    return push(experiment, sample, as_found.op_pct, is_relay=False)


def _judge_rest(experiment: Experiment, as_found: AsFound, sample: Sample, pv_pct: float) -> Step:
    """Steady enough: fix reference and hysteresis, and make the first move."""
    plan, t_s = experiment.plan, experiment.t_s or 0.0
    times_s, pvs_pct = zip(*experiment.resting, strict=True)
    rest = measure_rest(times_s, pvs_pct)
    experiment = replace(experiment, rest=rest)
    refusal = refuse_rest(plan, rest)
    if refusal is not None:
        return give_up(experiment, refusal)
    relay = start_relay(plan.relay, room_of(plan.limits, as_found), experiment.step_ratio, t_s)
    experiment = replace(
        experiment,
        phase=next_phase(experiment.phase, Trigger.STEADY),
        stage=Stage.FIRST_MOVE,
        stage_s=t_s,
        rested=Rested(
            centre_pct=as_found.op_pct,
            reference_pct=rest.mean_pct,
            hysteresis_pct=hysteresis_pct(plan.relay, rest),
            noise_pct=rest.noise_pct,
            drift_pct_per_s=rest.drift_pct_per_s,
        ),
        frozen_after_s=frozen_after_s(rest, plan.scan_s, plan.limits.pv_frozen_s),
        relay=relay,
        cycles=start_cycles(t_s, pv_pct, relay.is_high),
    )
    return drive_relay(experiment, as_found, relay, sample)
