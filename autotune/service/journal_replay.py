"""A journal run through the machine again: the same events give the same commands."""

from collections.abc import Iterable
from itertools import takewhile

from autotune.errors import JournalError
from autotune.experiment.commands import Command
from autotune.experiment.events import Event
from autotune.experiment.machine import begin, step
from autotune.experiment.plan import TestPlan
from autotune.experiment.state import Experiment
from autotune.service.journal_reading import JournalLine


def replay(lines: Iterable[JournalLine]) -> tuple[Experiment, tuple[Command, ...]]:
    """The experiment as the journal's last event left it, and every command it gave on the way.

    What a later process did after a ``resumed`` line is not the machine's and is left out.
    Raises ``JournalError`` where the plan is missing, ``IllegalEvent`` where the machine no longer takes an event.
    """
    experiment: Experiment | None = None
    commands: list[Command] = []
    for line in takewhile(lambda line: line.kind != "resumed", lines):
        if line.kind == "plan" and isinstance(line.payload, TestPlan):
            experiment = begin(line.payload)
        elif line.kind == "event" and isinstance(line.payload, Event):
            if experiment is None:
                raise JournalError(f"line {line.n}: an event before the plan; the beginning of the journal is missing")
            experiment, given = step(experiment, line.payload)
            commands += given
    if experiment is None:
        raise JournalError("the journal holds no plan; nothing can be replayed")
    return experiment, tuple(commands)
