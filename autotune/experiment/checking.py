"""CHECKING: look around; nothing is written."""

from dataclasses import replace

from autotune.experiment import trace
from autotune.experiment.baseline import take_over
from autotune.experiment.deadlines import has_come, look_due_s
from autotune.experiment.ending import Step, refuse
from autotune.experiment.fitness import find, no_view, refusals
from autotune.experiment.state import Experiment
from autotune.loop.sample import Sample


def look(experiment: Experiment, sample: Sample, t_s: float) -> Step:
    """Take in a reading; at the end of the look around refuse with every reason, or take the loop over."""
    experiment = replace(
        experiment,
        sample=sample,
        seen_s=t_s,
        looked=experiment.looked.appended(sample),
        trace=trace.with_sample(experiment.trace, sample, t_s, experiment.plan.scan_s),
    )
    if t_s - experiment.stage_s < experiment.plan.look_around_s:
        return experiment, ()
    looked = tuple(experiment.looked)
    found = refusals(experiment.plan, looked, t_s)
    if found:
        return refuse(experiment, found)
    return take_over(experiment, find(experiment.plan, looked), sample)


def wait(experiment: Experiment, t_s: float) -> Step:
    """Nothing was read: wait on, or refuse because the loop can't be seen."""
    if has_come(look_due_s(experiment), t_s):
        return refuse(experiment, (no_view(),))
    return experiment, ()
