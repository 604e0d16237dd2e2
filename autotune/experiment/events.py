"""What happened.  Events are past tense and carry ``t_s`` of our monotonic clock."""

from dataclasses import dataclass
from enum import Enum

from autotune.experiment.commands import Command
from autotune.loop.sample import Sample
from autotune.loop.write import WriteReport


@dataclass(frozen=True, slots=True)
class Started:
    """A person allowed the test; nothing has been written."""

    t_s: float


@dataclass(frozen=True, slots=True)
class SampleArrived:
    """One coalesced reading came in."""

    t_s: float
    sample: Sample


@dataclass(frozen=True, slots=True)
class ReadFailed:
    """A reading did not come in time, or came as an error."""

    t_s: float
    detail: str


@dataclass(frozen=True, slots=True)
class Written:
    """A command was performed; ``report`` tells what became of it on the wire."""

    t_s: float
    command: Command
    report: WriteReport


@dataclass(frozen=True, slots=True)
class TimePassed:
    """``next_deadline_s`` came without anything else happening."""

    t_s: float


@dataclass(frozen=True, slots=True)
class TicksMissed:
    """The shell could not keep its scan grid; ``count`` ticks were skipped in a row."""

    t_s: float
    count: int


@dataclass(frozen=True, slots=True)
class AbortAsked:
    """A person, a signal or the service wants the test to end now; ``by`` says who."""

    t_s: float
    by: str


@dataclass(frozen=True, slots=True)
class FinishAsked:
    """The operator wants to finish now and keep what has been measured."""

    t_s: float
    by: str


@dataclass(frozen=True, slots=True)
class SmallerStepsAsked:
    """The operator wants smaller steps from the next switch on."""

    t_s: float
    by: str


class HandBackResult(Enum):
    """How a hand-back ended."""

    RESTORED = "restored"  # written and verified as found
    GUARD_GAVE_BACK = "guard gave back"  # the PLC had done it already; verified
    TAKEN = "taken"  # it no longer held our last write: somebody's; nothing written
    NOT_CONFIRMED = "not confirmed"  # not shown to be as found: stranded


@dataclass(frozen=True, slots=True)
class HandBackEnded:
    """The one retried command came to its end."""

    t_s: float
    result: HandBackResult
    detail: str


Event = (
    Started
    | SampleArrived
    | ReadFailed
    | Written
    | TimePassed
    | TicksMissed
    | AbortAsked
    | FinishAsked
    | SmallerStepsAsked
    | HandBackEnded
)
