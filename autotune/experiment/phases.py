"""The one table of the test: from which phase which trigger leads where.  Code only decides which trigger."""

from collections.abc import Mapping
from enum import Enum
from types import MappingProxyType

from autotune.errors import IllegalEvent


class Phase(Enum):
    """Where a test stands.  The loop is touched in BASELINE and TESTING and until RESTORING has ended."""

    IDLE = "IDLE"
    CHECKING = "CHECKING"
    BASELINE = "BASELINE"
    TESTING = "TESTING"
    RESTORING = "RESTORING"
    COMPLETE = "COMPLETE"
    ABORTED = "ABORTED"
    RELEASED = "RELEASED"
    STRANDED = "STRANDED"

    @property
    def is_terminal(self) -> bool:
        """Whether the test is over."""
        return self in TERMINAL

    @property
    def is_touched(self) -> bool:
        """Whether the test holds the loop, or may."""
        return self in TOUCHED


class Trigger(Enum):
    """What moves a test from one phase to the next."""

    STARTED = "started"
    STOPPED = "stopped before anything was written"
    REFUSED = "refused"
    FIT = "fit"
    STEADY = "steady"
    NOT_STEADY = "not steady"
    ENOUGH = "seen enough"
    ENDED_EARLY = "ended early"
    TRIPPED = "tripped"
    TAKEN = "taken by somebody"
    HANDED_BACK = "handed back after a good end"
    HANDED_BACK_EARLY = "handed back after any other end"
    NOT_CONFIRMED = "hand-back not confirmed"


TERMINAL = frozenset({Phase.COMPLETE, Phase.ABORTED, Phase.RELEASED, Phase.STRANDED})
TOUCHED = frozenset({Phase.BASELINE, Phase.TESTING, Phase.RESTORING})

TRANSITIONS: Mapping[tuple[Phase, Trigger], Phase] = MappingProxyType(
    {
        (Phase.IDLE, Trigger.STARTED): Phase.CHECKING,
        (Phase.IDLE, Trigger.STOPPED): Phase.ABORTED,
        (Phase.CHECKING, Trigger.STOPPED): Phase.ABORTED,
        (Phase.CHECKING, Trigger.REFUSED): Phase.ABORTED,
        (Phase.CHECKING, Trigger.FIT): Phase.BASELINE,
        (Phase.BASELINE, Trigger.STEADY): Phase.TESTING,
        (Phase.BASELINE, Trigger.NOT_STEADY): Phase.RESTORING,
        (Phase.BASELINE, Trigger.ENDED_EARLY): Phase.RESTORING,
        (Phase.BASELINE, Trigger.TRIPPED): Phase.RESTORING,
        (Phase.BASELINE, Trigger.TAKEN): Phase.RELEASED,
        (Phase.TESTING, Trigger.ENOUGH): Phase.RESTORING,
        (Phase.TESTING, Trigger.ENDED_EARLY): Phase.RESTORING,
        (Phase.TESTING, Trigger.TRIPPED): Phase.RESTORING,
        (Phase.TESTING, Trigger.TAKEN): Phase.RELEASED,
        (Phase.RESTORING, Trigger.HANDED_BACK): Phase.COMPLETE,
        (Phase.RESTORING, Trigger.HANDED_BACK_EARLY): Phase.ABORTED,
        (Phase.RESTORING, Trigger.TAKEN): Phase.RELEASED,
        (Phase.RESTORING, Trigger.NOT_CONFIRMED): Phase.STRANDED,
    }
)


def next_phase(phase: Phase, trigger: Trigger) -> Phase:
    """Where ``trigger`` leads from ``phase``; raises ``IllegalEvent`` where the table has no entry."""
    try:
        return TRANSITIONS[phase, trigger]
    except KeyError:
        raise IllegalEvent(f"phase {phase.value} has no entry for '{trigger.value}'") from None


def to_mermaid() -> str:
    """The table as the text of a Mermaid state diagram, for DEVELOPERS.md."""
    arrows = [f"    {phase.value} --> {to.value}: {trigger.value}" for (phase, trigger), to in TRANSITIONS.items()]
    ends = [f"    {phase.value} --> [*]" for phase in Phase if phase.is_terminal]
    return "\n".join(["stateDiagram-v2", f"    [*] --> {Phase.IDLE.value}", *arrows, *ends]) + "\n"
