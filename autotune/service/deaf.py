"""Running something to its own end, whoever cancels us meanwhile."""

import asyncio
from collections.abc import Callable, Coroutine
from typing import Any, TypeVar

T = TypeVar("T")


async def to_the_end(work: Coroutine[Any, Any, T], on_cancel: Callable[[], None]) -> T:
    """Await ``work`` as a task that no cancellation reaches.

    A cancellation of the caller calls ``on_cancel`` (which asks the work to end by itself) and is raised
    again only when the work is over.  Raises what the work raises.
    """
    task = asyncio.ensure_future(work)
    cancellation: asyncio.CancelledError | None = None
    while not task.done():
        try:
            await asyncio.wait({task})
        except asyncio.CancelledError as heard:
            cancellation = heard
            on_cancel()
    if cancellation is not None and not task.cancelled() and task.exception() is None:
        raise cancellation
    return task.result()
