"""What became of a write."""

from dataclasses import dataclass
from enum import Enum

from autotune.loop.sample import Stamp


class WriteOutcome(Enum):
    """An exception or a silence never means "not applied"."""

    APPLIED = "applied"  # the controller acknowledged it
    REFUSED = "refused"  # the controller said no; nothing changed
    NOT_HEARD = "not heard"  # no answer: it may have landed; read before anything else


@dataclass(frozen=True, slots=True)
class WriteReport:
    """Outcome of one write request; ``sent`` spans request to reply (or deadline) on our clock, seconds."""

    outcome: WriteOutcome
    sent: Stamp
    detail: str = ""
