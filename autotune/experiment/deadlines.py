"""By when something must have happened; the shell sleeps, the machine says until when (seconds, our clock)."""

from autotune.experiment.phases import Phase
from autotune.experiment.state import Experiment, Stage

VIEW_SCANS = 2.0
"""A reading is missing when it is later than this many scans."""


def next_deadline_s(experiment: Experiment) -> float | None:
    """When ``TimePassed`` is due unless something happens before; ``None`` where nothing waits for the clock."""
    if experiment.phase is Phase.CHECKING:
        return look_due_s(experiment)
    if experiment.phase not in (Phase.BASELINE, Phase.TESTING):
        return None
    dues_s = (
        view_due_s(experiment),
        take_over_due_s(experiment),
        switch_due_s(experiment),
        end_due_s(experiment),
    )
    return min((due_s for due_s in dues_s if due_s is not None), default=None)


def look_due_s(experiment: Experiment) -> float:
    """When the look around must have seen the loop."""
    return experiment.stage_s + experiment.plan.look_around_s + experiment.plan.take_over_within_s


def view_due_s(experiment: Experiment) -> float:
    """When the next reading must have come."""
    seen_s = experiment.stage_s if experiment.seen_s is None else experiment.seen_s
    return seen_s + VIEW_SCANS * experiment.plan.scan_s + experiment.plan.limits.safe_without_view_s


def take_over_due_s(experiment: Experiment) -> float | None:
    """When the claim or the change of mode must have been seen."""
    if experiment.stage not in (Stage.CLAIMING, Stage.SWITCHING):
        return None
    return experiment.stage_s + experiment.plan.take_over_within_s


def switch_due_s(experiment: Experiment) -> float | None:
    """When the relay must have switched."""
    return None if experiment.relay is None else experiment.relay.switched_s + experiment.plan.limits.switch_within_s


def end_due_s(experiment: Experiment) -> float | None:
    """When the test must be over."""
    return None if experiment.touched_s is None else experiment.touched_s + experiment.plan.limits.test_within_s


def has_come(due_s: float | None, t_s: float) -> bool:
    """Whether a deadline has come; an instant that is no number counts as come."""
    return due_s is not None and not t_s < due_s
