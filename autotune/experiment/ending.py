"""How a test comes to its end: every way out of a phase but the good progress."""

from dataclasses import replace

from autotune.experiment.commands import Command, HandBack, ReleaseLoop
from autotune.experiment.events import HandBackEnded, HandBackResult
from autotune.experiment.held import may_release
from autotune.experiment.interlocks import TripCode, to_trip
from autotune.experiment.phases import Trigger, next_phase
from autotune.experiment.state import EndKind, Experiment, Stage
from autotune.loop.outcome import Refusal, Trip
from autotune.loop.sample import Sample

Step = tuple[Experiment, tuple[Command, ...]]
"""What ``step`` answers: the new experiment, and what to do, in order."""

STAGES = {True: Stage.OVER, False: Stage.GIVING_BACK}


def refuse(experiment: Experiment, refusals: tuple[Refusal, ...]) -> Step:
    """End before anything was written."""
    experiment = replace(experiment, refusals=refusals)
    return _left(experiment, Trigger.REFUSED, EndKind.REFUSED, str(refusals[0])), ()


def stop_untouched(experiment: Experiment, by: str) -> Step:
    """End on a person's wish before anything was written."""
    trip = to_trip(TripCode.OPERATOR_ABORT, by, experiment.t_s or 0.0)
    experiment = replace(experiment, trip=trip)
    return _left(experiment, Trigger.STOPPED, EndKind.ENDED_EARLY, str(trip)), ()


def refuse_start(experiment: Experiment, refusal: Refusal) -> Experiment:
    """A test that was refused before it began, by what its shell had to show first."""
    return _left(replace(experiment, refusals=(refusal,)), Trigger.STOPPED, EndKind.REFUSED, str(refusal))


def trip(experiment: Experiment, fired: Trip) -> Step:
    """An interlock has fired: give the loop back now."""
    return _restored(replace(experiment, trip=fired), Trigger.TRIPPED, EndKind.TRIPPED, str(fired))


def trip_with(experiment: Experiment, code: TripCode, detail: str) -> Step:
    """Trip with a code, now."""
    return trip(experiment, to_trip(code, detail, experiment.t_s or 0.0))


def give_up(experiment: Experiment, refusal: Refusal) -> Step:
    """The loop is not steady enough for a test: give it back."""
    experiment = replace(experiment, refusals=(refusal,))
    return _restored(experiment, Trigger.NOT_STEADY, EndKind.REFUSED, str(refusal))


def finish(experiment: Experiment, because: str) -> Step:
    """There is enough: give the loop back."""
    return _restored(experiment, Trigger.ENOUGH, EndKind.ENOUGH, because)


def end_early(experiment: Experiment, by: str) -> Step:
    """A person wants to finish, and there is not enough: give the loop back."""
    return _restored(experiment, Trigger.ENDED_EARLY, EndKind.ENDED_EARLY, f"finished early by {by}")


def release(experiment: Experiment, sample: Sample, sign: str) -> Step:
    """The loop is somebody else's now (S3): write nothing to it.

    Only our token goes back, and only while the PLC names us or nobody as holder.
    """
    experiment = _left(experiment, Trigger.TAKEN, EndKind.TAKEN, sign)
    return experiment, (ReleaseLoop(),) if may_release(sample.guard, experiment.plan.token) else ()


def close(experiment: Experiment, ended: HandBackEnded) -> Step:
    """The hand-back has ended, one way or the other."""
    is_good = experiment.end is EndKind.ENOUGH
    trigger = {
        HandBackResult.RESTORED: Trigger.HANDED_BACK if is_good else Trigger.HANDED_BACK_EARLY,
        HandBackResult.GUARD_GAVE_BACK: Trigger.HANDED_BACK if is_good else Trigger.HANDED_BACK_EARLY,
        HandBackResult.TAKEN: Trigger.TAKEN,
        HandBackResult.NOT_CONFIRMED: Trigger.NOT_CONFIRMED,
    }[ended.result]
    return _moved_on(replace(experiment, hand_back=ended), trigger), ()


def _left(experiment: Experiment, trigger: Trigger, end: EndKind, because: str) -> Experiment:
    return _moved_on(replace(experiment, end=end, because=because), trigger)


def _restored(experiment: Experiment, trigger: Trigger, end: EndKind, because: str) -> Step:
    return _left(experiment, trigger, end, because), (HandBack(because),)


def _moved_on(experiment: Experiment, trigger: Trigger) -> Experiment:
    phase = next_phase(experiment.phase, trigger)
    return replace(experiment, phase=phase, stage=STAGES[phase.is_terminal], stage_s=experiment.t_s or 0.0)
