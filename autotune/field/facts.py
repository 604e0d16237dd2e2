"""What a controller tells about its own tags and about itself, beyond the readings."""

from dataclasses import dataclass
from datetime import datetime
from typing import Protocol, runtime_checkable

from autotune.config.types import DataType


@dataclass(frozen=True, slots=True)
class NodeFact:
    """One tag's node as its server describes it; ``None`` or empty is what it doesn't tell.

    ``low_eu`` .. ``high_eu`` is its range in ``unit``; ``unit_id`` the number of the unit after OPC 10000-8.
    ``is_writable`` is what the present session may do.  ``words`` are an enumeration's, by number.
    """

    name: str
    where: str
    held: DataType | None = None
    is_scalar: bool | None = None
    is_readable: bool | None = None
    is_writable: bool | None = None
    low_eu: float | None = None
    high_eu: float | None = None
    unit: str = ""
    unit_id: int | None = None
    words: tuple[tuple[int, str], ...] = ()
    fault: str = ""


@dataclass(frozen=True, slots=True)
class CertificateFact:
    """A certificate in use: ``whose`` it is, its SHA-256 thumbprint, where it lies, and its last day."""

    whose: str
    thumbprint: str
    expires_utc: datetime
    path: str = ""


@dataclass(frozen=True, slots=True)
class ServerFacts:
    """Everything that a look at one loop's nodes and at the connection showed."""

    nodes: tuple[NodeFact, ...]
    certificates: tuple[CertificateFact, ...]


@runtime_checkable
class TellsFacts(Protocol):
    """A link whose controller describes its tags by itself."""

    async def facts(self) -> ServerFacts:
        """Ask the connected controller.  Raises ``LinkTimeout``, ``LinkClosed`` or ``LinkRefused``."""
        ...
