"""TESTING: the relay runs, cycle by cycle, until there is enough."""

from dataclasses import replace

from autotune.experiment import recording
from autotune.experiment.cycles import Cycles, has_converged, with_move_up, with_new_steps, with_sample, with_switch
from autotune.experiment.deadlines import end_due_s, has_come
from autotune.experiment.ending import Step, finish, trip
from autotune.experiment.held import drive
from autotune.experiment.interlocks import OF_A_CYCLE, first_trip
from autotune.experiment.recording import Rested
from autotune.experiment.relay import Relay, fitted, is_switch_due, level_pct, switched
from autotune.experiment.room import next_op_pct, room_of
from autotune.experiment.state import Experiment, Stage
from autotune.experiment.watching import rise_pct, view_of
from autotune.loop.limits import AsFound
from autotune.loop.sample import Sample

CYCLES_TO_FIT = 2
"""The number of the running cycle since the steps changed, from which on the one before it tells of them."""


def push(experiment: Experiment, sample: Sample, op_pct: float, *, is_relay: bool) -> Step:
    """Hold the output at ``op_pct``; with a guard on every sample, without one only where it moves."""
    held, driven = drive(experiment.held, op_pct, sample.op_pct if sample.op_pct is not None else op_pct)
    if held.sequence == experiment.held.sequence:
        is_said = experiment.plan.has_guard
        return (replace(experiment, held=held), (driven,)) if is_said else (experiment, ())
    recorded = recording.with_move(experiment.recording, op_pct, held.sequence, sample, is_relay)
    return replace(experiment, held=held, moved_s=experiment.t_s, recording=recorded), (driven,)


def advance(
    experiment: Experiment, as_found: AsFound, relay: Relay, rested: Rested, sample: Sample, pv_pct: float
) -> Step:
    """The next step of the relay, on a reading that was judged good."""
    t_s = experiment.t_s or 0.0
    rise = rise_pct(experiment.plan, rested, pv_pct)
    experiment = replace(experiment, cycles=with_sample(experiment.cycles, t_s, pv_pct, -relay.push_sign * rise))
    if has_come(end_due_s(experiment), t_s):
        return finish(experiment, "the time is over, and there are enough whole cycles")
    is_due = is_switch_due(relay, rise, rested.hysteresis_pct, experiment.plan.relay.blanking_s, t_s)
    if is_due and experiment.unheard is None:
        return _switch(experiment, as_found, relay, sample, pv_pct, rise)
    return drive_relay(experiment, as_found, relay, sample)


def drive_relay(experiment: Experiment, as_found: AsFound, relay: Relay, sample: Sample) -> Step:
    """Bring the output to the relay's level; while a write is unheard nothing moves."""
    held_pct = as_found.op_pct if experiment.held.op_pct is None else experiment.held.op_pct
    if experiment.unheard is not None:
        return push(experiment, sample, held_pct, is_relay=True)
    limits, moved_s, t_s = experiment.plan.limits, experiment.moved_s, experiment.t_s or 0.0
    moving_s = experiment.plan.scan_s if moved_s is None else min(t_s - moved_s, experiment.plan.scan_s)
    op_pct = next_op_pct(limits, as_found, held_pct, level_pct(relay, as_found), moving_s)
    return push(experiment, sample, op_pct, is_relay=True)


def _switch(
    experiment: Experiment, as_found: AsFound, relay: Relay, sample: Sample, pv_pct: float, rise: float
) -> Step:
    t_s, plan = experiment.t_s or 0.0, experiment.plan
    cycles = with_switch(experiment.cycles, t_s, relay.switched_s, relay.push_sign * rise)
    is_up = not relay.is_high
    if is_up:
        cycles = with_move_up(cycles, plan.convergence, t_s, pv_pct, relay.amplitude_pct)
        experiment = replace(experiment, cycles=cycles)
        fired = first_trip(view_of(experiment, as_found, sample), OF_A_CYCLE)
        if fired is not None:
            return trip(experiment, fired)
        if has_converged(cycles, plan.convergence, plan.scan_s, experiment.noise_pct or 0.0):
            return finish(experiment, "the last whole cycles agree")
        if len(cycles.whole) >= plan.limits.cycles_at_most:
            return finish(experiment, "the cycles have run out, and enough of them are usable")
        relay = _fit(experiment, as_found, relay, cycles)
    turned = switched(relay, t_s)
    if turned.amplitude_pct != relay.amplitude_pct:
        cycles = with_new_steps(cycles, is_up)
    experiment = replace(experiment, cycles=cycles, relay=turned, wrong_since_s=None, stage=Stage.CYCLING)
    return drive_relay(experiment, as_found, turned, sample)


def _fit(experiment: Experiment, as_found: AsFound, relay: Relay, cycles: Cycles) -> Relay:
    """Fit the steps to the wanted swing, from a whole cycle in which they did not change.

    Too large a swing is reduced at once; too small a one may still be growing, so only a usable cycle enlarges.
    """
    wanted_swing_pct = experiment.plan.relay.wanted_swing_pct
    if wanted_swing_pct is None or not cycles.whole or cycles.since_change < CYCLES_TO_FIT:
        return relay
    room = room_of(experiment.plan.limits, as_found)
    last = cycles.whole[-1]
    return fitted(relay, last.pv_amplitude_pct, wanted_swing_pct, room, may_enlarge=last.is_usable)
