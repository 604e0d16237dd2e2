"""Signals that ask us to end, heard as a wish while something holds a loop."""

import asyncio
import signal
from collections.abc import Callable, Coroutine, Iterator
from contextlib import contextmanager
from typing import Any, TypeVar

T = TypeVar("T")

_NAMES = ("SIGINT", "SIGTERM", "SIGHUP")


def run_to_its_end(job: Coroutine[Any, Any, T]) -> T:
    """Run ``job`` as ``asyncio.run`` does; once it is over Ctrl-C isn't heard, lest its exit code be lost to it."""

    async def whole() -> T:
        try:
            return await job
        finally:
            signal.signal(signal.SIGINT, signal.SIG_IGN)

    before = signal.getsignal(signal.SIGINT)
    try:
        return asyncio.run(whole())
    finally:
        signal.signal(signal.SIGINT, before)


@contextmanager
def hear_signals(wish: Callable[[str], object]) -> Iterator[None]:
    """Within the block a signal to end calls ``wish`` with its name, as often as it comes, and does nothing else."""
    loop = asyncio.get_running_loop()
    signals = [getattr(signal, name) for name in _NAMES if hasattr(signal, name)]
    try:
        for number in signals:
            loop.add_signal_handler(number, wish, signal.Signals(number).name)
    except NotImplementedError:  # Windows: Ctrl-C only
        with _ctrl_c(lambda: loop.call_soon_threadsafe(wish, "SIGINT")):
            yield
        return
    try:
        yield
    finally:
        for number in signals:
            loop.remove_signal_handler(number)


@contextmanager
def _ctrl_c(act: Callable[[], object]) -> Iterator[None]:
    before = signal.signal(signal.SIGINT, lambda *_: act())
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, before)
