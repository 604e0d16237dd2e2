"""Wall time for records only, which nothing that decides reads; and how early a timer may fire."""

import time
from collections.abc import Callable
from datetime import UTC, datetime

WallClock = Callable[[], datetime]

TICK_S = time.get_clock_info("monotonic").resolution
"""An event loop may wake us this much too early: who must not be early waits for one tick longer."""


def utc_now() -> datetime:
    """The present instant in UTC."""
    return datetime.now(UTC)
