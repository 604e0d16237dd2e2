"""What every link to a controller offers, whatever the protocol.

A link speaks tag names and raw values.  It never retries, never reconnects by itself, and stamps
each request when it is sent and when its answer is complete.  Scaling, spans and meaning live in
``translate``; which addresses may be written lives in ``write_list``.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Protocol

from autotune.loop.quality import Quality
from autotune.loop.sample import Stamp
from autotune.loop.write import WriteReport

RawValue = int | float | bool
"""A value as the controller holds it, decoded from its data type but not scaled."""


@dataclass(frozen=True, slots=True)
class Reading:
    """One tag as read: ``raw`` is ``None`` when there is no usable number; ``quality`` is the wire's word."""

    raw: RawValue | None
    quality: Quality
    source_s: float | None = None
    """The source's own sampling instant on our clock, only where shown to be one (seconds)."""
    reason: str = ""
    """Why the quality isn't good, where the wire says so."""


@dataclass(frozen=True, slots=True)
class ReadReport:
    """All tags asked for, and the request's span on our monotonic clock (seconds)."""

    readings: Mapping[str, Reading]
    sent: Stamp


class LoopLink(Protocol):
    """One connection to one controller, for one loop's tags."""

    @property
    def is_connected(self) -> bool:
        """Whether requests can be sent now; after any missed answer it is ``False``."""
        ...

    async def connect(self) -> None:
        """Open a fresh connection.

        Raises ``LinkClosed`` or ``LinkTimeout``; both name the address and what to check.
        """
        ...

    async def read(self, names: Sequence[str]) -> ReadReport:
        """Read the named tags in as few requests as the protocol allows, each with its own deadline.

        Raises ``LinkTimeout``, ``LinkClosed`` or ``LinkRefused``; after the first two the connection is gone.
        """
        ...

    async def write(self, values: Mapping[str, RawValue]) -> WriteReport:
        """Write the named tags, in one request where they lie side by side, in the given order otherwise.

        Returns what became of it; wire trouble is an outcome, not an exception.  The first outcome that
        is not ``APPLIED`` stops the rest.  Raises ``WriteForbidden`` before anything is sent when a tag,
        an address or a value is not on the write list.
        """
        ...

    async def close(self) -> None:
        """Drop the connection; never raises and may be called again."""
        ...
