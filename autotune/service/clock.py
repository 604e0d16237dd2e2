"""Wall time for records only.  Nothing that decides reads it."""

from collections.abc import Callable
from datetime import UTC, datetime

WallClock = Callable[[], datetime]


def utc_now() -> datetime:
    """The present instant in UTC."""
    return datetime.now(UTC)
