"""The test as a pure machine: ``step(experiment, event) -> (experiment, commands)``.

Code decides only which trigger an event is; where it leads stands in ``phases.TRANSITIONS``.  The new experiment
is to be stored before any of its commands is performed: a write may land though its answer is never heard.
"""

from collections.abc import Mapping
from dataclasses import replace
from math import isfinite
from types import MappingProxyType

from autotune.errors import IllegalEvent
from autotune.experiment import baseline, checking, recording, testing, watching
from autotune.experiment.commands import ClaimLoop, DriveOutput, SetMode
from autotune.experiment.deadlines import has_come, next_deadline_s
from autotune.experiment.ending import Step, close, end_early, finish, stop_untouched, trip, trip_with
from autotune.experiment.events import (
    AbortAsked,
    Event,
    FinishAsked,
    HandBackEnded,
    ReadFailed,
    SampleArrived,
    SmallerStepsAsked,
    Started,
    TicksMissed,
    TimePassed,
    Written,
)
from autotune.experiment.interlocks import OF_THE_CLOCK, TripCode, first_trip
from autotune.experiment.phases import Phase, Trigger, next_phase
from autotune.experiment.plan import TestPlan
from autotune.experiment.relay import SMALLER_RATIO, with_smaller_steps
from autotune.experiment.state import Experiment, Stage, Unheard, record
from autotune.loop.limits import AsFound
from autotune.loop.write import WriteOutcome

__all__ = ["begin", "next_deadline_s", "record", "step"]

_COMING = (SampleArrived, ReadFailed, TimePassed, TicksMissed, AbortAsked, FinishAsked, SmallerStepsAsked)

HEARD: Mapping[Phase, tuple[type, ...]] = MappingProxyType(
    {
        Phase.IDLE: (Started, AbortAsked),
        Phase.CHECKING: _COMING,
        Phase.BASELINE: (*_COMING, Written),
        Phase.TESTING: (*_COMING, Written),
        Phase.RESTORING: (*_COMING, Written, HandBackEnded),
        Phase.COMPLETE: (*_COMING, Written),
        Phase.ABORTED: (*_COMING, Written),
        Phase.RELEASED: (*_COMING, Written),
        Phase.STRANDED: (*_COMING, Written),
    }
)
"""Which events a phase may meet; RESTORING and the terminal phases hear most of them without acting."""


def begin(plan: TestPlan) -> Experiment:
    """A test that has not started."""
    return Experiment(plan=plan)


def step(experiment: Experiment, event: Event) -> Step:
    """What an event makes of the experiment, and what to do next, in order.

    Raises ``IllegalEvent``, and leaves the experiment as it is, for an event that its phase can't meet, and for a
    time that is no number or lies before the last one.
    """
    if not isinstance(event, HEARD[experiment.phase]):
        raise IllegalEvent(f"{type(event).__name__} can't happen in phase {experiment.phase.value}")
    if not isfinite(event.t_s) or (experiment.t_s is not None and event.t_s < experiment.t_s):
        raise IllegalEvent(f"{type(event).__name__} at {event.t_s} s comes after {experiment.t_s} s")
    experiment = replace(experiment, t_s=event.t_s)
    if experiment.phase is Phase.IDLE:
        return _step_idle(experiment, event)
    if experiment.phase is Phase.CHECKING:
        return _step_checking(experiment, event)
    if experiment.as_found is not None and experiment.phase in (Phase.BASELINE, Phase.TESTING):
        return _step_touched(experiment, experiment.as_found, event)
    if isinstance(event, HandBackEnded):
        return close(experiment, event)
    return (replace(experiment, sample=event.sample) if isinstance(event, SampleArrived) else experiment), ()


def _step_idle(experiment: Experiment, event: Event) -> Step:
    if isinstance(event, AbortAsked):
        return stop_untouched(experiment, event.by)
    phase = next_phase(experiment.phase, Trigger.STARTED)
    return replace(experiment, phase=phase, stage=Stage.LOOKING, stage_s=event.t_s, started_s=event.t_s), ()


def _step_checking(experiment: Experiment, event: Event) -> Step:
    match event:
        case SampleArrived():
            return checking.look(experiment, event.sample, event.t_s)
        case AbortAsked() | FinishAsked():
            return stop_untouched(experiment, event.by)
        case SmallerStepsAsked():
            return _ask_smaller_steps(experiment), ()
        case _:
            return checking.wait(experiment, event.t_s)


def _step_touched(experiment: Experiment, as_found: AsFound, event: Event) -> Step:
    match event:
        case SampleArrived():
            return _step_sample(experiment, as_found, event)
        case Written():
            return _step_written(experiment, event)
        case AbortAsked():
            return trip_with(experiment, TripCode.OPERATOR_ABORT, event.by)
        case FinishAsked():
            if experiment.cycles.has_enough_for_findings:
                return finish(experiment, f"finished by {event.by}")
            return end_early(experiment, event.by)
        case SmallerStepsAsked():
            return _ask_smaller_steps(experiment), ()
        case TicksMissed() if event.count > experiment.plan.limits.missed_ticks_at_most:
            return trip_with(experiment, TripCode.TICKS_MISSED, f"{event.count} in a row")
        case ReadFailed() if _is_view_lost(experiment, event.t_s):
            code = TripCode.LINK_LOST if experiment.unheard is None else TripCode.WRITE_NOT_HEARD
            return trip_with(experiment, code, event.detail)
        case _:
            return _step_clock(experiment, as_found)


def _step_sample(experiment: Experiment, as_found: AsFound, event: SampleArrived) -> Step:
    """Take in, judge, keep, and only then go on."""
    sample = event.sample
    experiment = watching.take_in(experiment, sample, event.t_s)
    stopped = watching.judge(experiment, as_found, sample)
    if stopped is not None:
        return stopped
    experiment = watching.keep(experiment, sample)
    relay, rested, pv_pct = experiment.relay, experiment.rested, sample.pv_pct
    if relay is None or rested is None or pv_pct is None:
        return baseline.advance(experiment, as_found, sample)
    return testing.advance(experiment, as_found, relay, rested, sample, pv_pct)


def _step_written(experiment: Experiment, event: Written) -> Step:
    command, outcome = event.command, event.report.outcome
    if isinstance(command, DriveOutput):
        recorded = recording.with_report(experiment.recording, command.sequence, event.report)
        experiment = replace(experiment, recording=recorded)
    if outcome is WriteOutcome.REFUSED:
        return trip_with(experiment, TripCode.WRITE_REFUSED, f"{type(command).__name__}: {event.report.detail}")
    if outcome is WriteOutcome.NOT_HEARD and isinstance(command, ClaimLoop | SetMode | DriveOutput):
        since_s = event.t_s if experiment.unheard is None else experiment.unheard.since_s
        experiment = replace(experiment, unheard=Unheard(command, since_s))
    elif experiment.unheard is not None and type(experiment.unheard.command) is type(command):
        experiment = replace(experiment, unheard=None)
    return experiment, ()


def _step_clock(experiment: Experiment, as_found: AsFound) -> Step:
    """Judge what the clock alone decides, on the last reading."""
    fired = first_trip(watching.view_of(experiment, as_found, experiment.sample or as_found.sample), OF_THE_CLOCK)
    return (experiment, ()) if fired is None else trip(experiment, fired)


def _is_view_lost(experiment: Experiment, t_s: float) -> bool:
    """Whether a failed reading leaves us without a view for longer than is safe."""
    return experiment.seen_s is None or has_come(experiment.seen_s + experiment.plan.limits.safe_without_view_s, t_s)


def _ask_smaller_steps(experiment: Experiment) -> Experiment:
    if experiment.relay is None:
        return replace(experiment, step_ratio=experiment.step_ratio * SMALLER_RATIO)
    return replace(experiment, relay=with_smaller_steps(experiment.relay))
