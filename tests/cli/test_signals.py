"""A signal to end is heard as a wish within the block, and is what it was before after it."""

import asyncio
import signal
from collections.abc import AsyncGenerator, Callable
from typing import Any

import pytest

from autotune.cli.signals import hear_signals, run_to_its_end


class WithoutSignals(asyncio.SelectorEventLoop):
    """An event loop that knows no signals, as on Windows."""

    def add_signal_handler(self, sig: int, callback: Callable[..., Any], *args: Any) -> None:  # type: ignore[override]
        raise NotImplementedError


@pytest.mark.parametrize("make", [asyncio.SelectorEventLoop, WithoutSignals])
def test_a_signal_is_heard_as_often_as_it_comes_and_then_no_more(
    make: Callable[[], asyncio.AbstractEventLoop],
) -> None:
    heard: list[str] = []

    async def main() -> None:
        count = asyncio.Semaphore(0)

        def wish(name: str) -> None:
            heard.append(name)
            count.release()

        with hear_signals(wish):
            for _ in range(2):
                signal.raise_signal(signal.SIGINT)
                async with asyncio.timeout(10.0):
                    await count.acquire()
        with pytest.raises(KeyboardInterrupt):
            signal.raise_signal(signal.SIGINT)

    before = signal.signal(signal.SIGINT, signal.default_int_handler)
    loop = make()
    try:
        loop.run_until_complete(main())
    finally:
        loop.close()
        signal.signal(signal.SIGINT, before)
    assert heard == ["SIGINT", "SIGINT"]


def test_ctrl_c_that_comes_when_all_is_over_does_not_take_the_exit_code_away() -> None:
    kept: list[AsyncGenerator[None, None]] = []

    async def late() -> AsyncGenerator[None, None]:
        try:
            yield
        finally:
            signal.raise_signal(signal.SIGINT)

    async def job() -> int:
        kept.append(late())  # what is left open is closed when the job is over
        await anext(kept[0])
        return 4

    before = signal.signal(signal.SIGINT, signal.default_int_handler)
    try:
        assert run_to_its_end(job()) == 4
        assert signal.getsignal(signal.SIGINT) is signal.default_int_handler
    finally:
        signal.signal(signal.SIGINT, before)
