"""What happened.  Events are past tense and carry ``t_s`` of our monotonic clock."""

from dataclasses import dataclass

from autotune.loop.mode import LoopMode
from autotune.loop.settings import BlockFields
from autotune.loop.write import WriteReport


@dataclass(frozen=True, slots=True)
class SettingsRead:
    """The controller's settings, actual mode, output and setpoint; percent of span, ``None`` where not readable."""

    t_s: float
    fields: BlockFields
    mode: LoopMode
    op_pct: float | None
    sp_pct: float | None = None


@dataclass(frozen=True, slots=True)
class ReadFailed:
    """The settings did not come, or not with good quality."""

    t_s: float
    detail: str


@dataclass(frozen=True, slots=True)
class FieldWritten:
    """A settings field was written; ``report`` tells what became of it on the wire."""

    t_s: float
    name: str
    report: WriteReport


@dataclass(frozen=True, slots=True)
class ModeSet:
    """A mode was requested; ``report`` tells what became of it on the wire."""

    t_s: float
    report: WriteReport


@dataclass(frozen=True, slots=True)
class SetpointSet:
    """The setpoint was written; ``report`` tells what became of it on the wire."""

    t_s: float
    report: WriteReport


@dataclass(frozen=True, slots=True)
class TimePassed:
    """``next_deadline_s`` came without anything else happening."""

    t_s: float


@dataclass(frozen=True, slots=True)
class CancelAsked:
    """A person or the service wants the write to end and the settings to be put back; ``by`` says who."""

    t_s: float
    by: str


Event = SettingsRead | ReadFailed | FieldWritten | ModeSet | SetpointSet | TimePassed | CancelAsked
