"""The phases of a write, and the one table of how it moves between them."""

from collections.abc import Mapping
from enum import Enum
from types import MappingProxyType


class Phase(Enum):
    """Where a write stands; the last four are its ends."""

    PLANNED = "planned"
    CHECKING = "checking"  # reads what the controller holds now
    TAKING = "taking"  # to manual, output held; nothing written yet
    RELEASING = "releasing"  # gives the mode back; nothing was written
    WRITING = "writing"  # one field is on its way
    VERIFYING = "verifying"  # reads until that field holds
    PROVING = "proving"  # reads what is left to put back
    PUTTING_BACK = "putting back"  # one field is on its way back
    RETURNING = "returning"  # gives the mode back, with a last read of everything
    WRITTEN = "written"  # all fields hold the new numbers
    PUT_BACK = "put back"  # all fields hold the numbers as found
    UNVERIFIED = "unverified"  # not shown to be either, or the mode isn't back: loud
    REFUSED = "refused"  # no setting was written


class Trigger(Enum):
    """What moves a write from one phase to the next."""

    CONFIRMED = "confirmed"
    WAITED = "waited"
    MANUAL_NEEDED = "manual needed"
    READY = "ready"
    TAKE_FAILED = "take failed"
    NOTHING_WRITTEN = "nothing written"
    FIELD_WRITTEN = "field written"
    FIELD_REFUSED = "field refused"
    FIELD_HOLDS = "field holds"
    ALL_HOLD = "all hold"
    NOT_HELD = "not held"
    FIELD_LEFT = "field left"
    ALL_BACK = "all back"
    SEEN_NEW = "seen new"
    SEEN_OLD = "seen old"
    NOT_SEEN = "not seen"


_ENDS = {Trigger.SEEN_NEW: Phase.WRITTEN, Trigger.SEEN_OLD: Phase.PUT_BACK, Trigger.NOT_SEEN: Phase.UNVERIFIED}

TRANSITIONS: Mapping[Phase, Mapping[Trigger, Phase]] = MappingProxyType(
    {
        Phase.PLANNED: {Trigger.CONFIRMED: Phase.CHECKING},
        Phase.CHECKING: {
            Trigger.WAITED: Phase.CHECKING,
            Trigger.NOTHING_WRITTEN: Phase.REFUSED,
            Trigger.MANUAL_NEEDED: Phase.TAKING,
            Trigger.READY: Phase.WRITING,
        },
        Phase.TAKING: {
            Trigger.WAITED: Phase.TAKING,
            Trigger.NOTHING_WRITTEN: Phase.REFUSED,
            Trigger.TAKE_FAILED: Phase.RELEASING,
            Trigger.READY: Phase.WRITING,
        },
        Phase.RELEASING: {
            Trigger.WAITED: Phase.RELEASING,
            Trigger.NOTHING_WRITTEN: Phase.REFUSED,
            Trigger.NOT_SEEN: Phase.UNVERIFIED,
        },
        Phase.WRITING: {
            Trigger.WAITED: Phase.WRITING,
            Trigger.FIELD_WRITTEN: Phase.VERIFYING,
            Trigger.FIELD_REFUSED: Phase.PROVING,
        },
        Phase.VERIFYING: {
            Trigger.WAITED: Phase.VERIFYING,
            Trigger.FIELD_HOLDS: Phase.WRITING,
            Trigger.ALL_HOLD: Phase.RETURNING,
            Trigger.NOT_HELD: Phase.PROVING,
        },
        Phase.PROVING: {
            Trigger.WAITED: Phase.PROVING,
            Trigger.FIELD_LEFT: Phase.PUTTING_BACK,
            Trigger.ALL_BACK: Phase.RETURNING,
            **_ENDS,
        },
        Phase.PUTTING_BACK: {Trigger.WAITED: Phase.PUTTING_BACK, Trigger.FIELD_WRITTEN: Phase.PROVING},
        Phase.RETURNING: {Trigger.WAITED: Phase.RETURNING, **_ENDS},
        Phase.WRITTEN: {},
        Phase.PUT_BACK: {},
        Phase.UNVERIFIED: {},
        Phase.REFUSED: {},
    }
)
"""``Phase x Trigger -> Phase``; what isn't here can't happen."""

TERMINAL_PHASES = frozenset(phase for phase, exits in TRANSITIONS.items() if not exits)
