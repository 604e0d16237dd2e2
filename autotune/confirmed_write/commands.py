"""What to do.  Commands are imperative and data; the shell performs one and reports back before the next."""

from dataclasses import dataclass

from autotune.loop.mode import LoopMode


@dataclass(frozen=True, slots=True)
class ReadSettings:
    """Read the settings (the active ones where the block stages them), mode, output and setpoint in one request.

    Answered by ``SettingsRead`` when all settings came with good quality, else by ``ReadFailed``.
    """


@dataclass(frozen=True, slots=True)
class WriteField:
    """Write one settings field; ``number`` is in the field's own unit.  Answered by ``FieldWritten``."""

    name: str
    number: float


@dataclass(frozen=True, slots=True)
class SetMode:
    """Request a mode of the block; manual holds the output where it is.  Answered by ``ModeSet``."""

    mode: LoopMode


@dataclass(frozen=True, slots=True)
class SetSetpoint:
    """Give the setpoint back, in percent of span.  Answered by ``SetpointSet``."""

    sp_pct: float


Command = ReadSettings | WriteField | SetMode | SetSetpoint
