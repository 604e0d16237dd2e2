"""The event loop of the in-memory tests keeps its promises."""

import asyncio
import gc
import itertools
import socket
import time

import pytest

from tests.fakes.virtual_time import (
    Deadlock,
    EndlessRun,
    RefusedInVirtualTime,
    TasksLeftBehind,
    VirtualLoop,
    run_virtual,
)


async def _beat_for_ever() -> None:
    for _ in itertools.count():
        await asyncio.sleep(10.0)


async def _sleep_an_hour_in_seconds() -> float:
    for _ in range(3600):
        await asyncio.sleep(1.0)
    return asyncio.get_running_loop().time()


def test_an_hour_of_sleeps_takes_less_than_a_second() -> None:
    before_s = time.perf_counter()
    assert run_virtual(_sleep_an_hour_in_seconds()) == pytest.approx(3600.0, abs=1e-6)
    assert time.perf_counter() - before_s < 1.0


def test_sleepers_wake_in_the_order_of_their_timers() -> None:
    async def main() -> list[tuple[str, float]]:
        woken: list[tuple[str, float]] = []

        async def sleeper(name: str, delay_s: float) -> None:
            await asyncio.sleep(delay_s)
            woken.append((name, asyncio.get_running_loop().time()))

        await asyncio.gather(sleeper("late", 7.0), sleeper("early", 2.0), sleeper("between", 4.5))
        return woken

    assert run_virtual(main()) == [("early", 2.0), ("between", 4.5), ("late", 7.0)]


def test_a_timeout_fires_at_its_virtual_time() -> None:
    async def main() -> float:
        with pytest.raises(TimeoutError):
            async with asyncio.timeout(30.0):
                await asyncio.Event().wait()
        return asyncio.get_running_loop().time()

    assert run_virtual(main()) == 30.0


def test_a_cancelled_timer_does_not_move_the_clock() -> None:
    async def main() -> float:
        async with asyncio.timeout(500.0):
            await asyncio.sleep(1.0)
        return asyncio.get_running_loop().time()

    assert run_virtual(main()) == 1.0


def test_a_deadlock_is_raised_at_once_and_names_who_waits_and_where() -> None:
    async def wait_for_nobody(event: asyncio.Event) -> None:
        await event.wait()

    async def main() -> None:
        event = asyncio.Event()
        await asyncio.gather(asyncio.create_task(wait_for_nobody(event), name="the one that waits"))

    with pytest.raises(Deadlock, match=r"the one that waits \(.*wait_for_nobody\) at .*locks\.py:\d+"):
        run_virtual(main())


def test_an_endless_run_ends_at_its_virtual_time_and_names_who_waits() -> None:
    with pytest.raises(EndlessRun, match=r"600 s .*_beat_for_ever"):
        run_virtual(_beat_for_ever(), within_s=600.0)


def test_a_task_left_behind_fails_the_run_and_is_cancelled() -> None:
    cancelled = []

    async def heartbeat() -> None:
        try:
            await _beat_for_ever()
        finally:
            cancelled.append(True)

    async def main() -> None:
        task = asyncio.create_task(heartbeat(), name="heartbeat")
        await asyncio.sleep(2.5)
        assert not task.done()

    with pytest.raises(TasksLeftBehind, match="heartbeat"):
        run_virtual(main())
    assert cancelled == [True]


def test_a_task_left_behind_is_given_the_time_to_clean_up() -> None:
    ended_at_s = []

    async def restore_slowly() -> None:
        try:
            await asyncio.Event().wait()
        finally:
            await asyncio.sleep(20.0)
            ended_at_s.append(asyncio.get_running_loop().time())

    async def main() -> None:
        task = asyncio.create_task(restore_slowly())
        await asyncio.sleep(5.0)
        assert not task.done()

    with pytest.raises(TasksLeftBehind):
        run_virtual(main())
    assert ended_at_s == [25.0]


def test_a_task_that_is_deaf_to_its_cancel_does_not_hide_the_first_error() -> None:
    async def deaf() -> None:
        while True:
            try:
                await asyncio.Event().wait()
            except asyncio.CancelledError:
                continue

    async def main() -> None:
        task = asyncio.create_task(deaf())
        await asyncio.sleep(0)
        raise KeyError(task.get_name())

    with pytest.raises(KeyError):
        run_virtual(main())


def test_what_the_main_coroutine_raises_comes_through() -> None:
    async def main() -> None:
        await asyncio.sleep(1.0)
        raise LookupError("as it is")

    with pytest.raises(LookupError, match="as it is"):
        run_virtual(main())


def test_the_exception_of_a_task_that_nobody_awaited_comes_through() -> None:
    async def fail() -> None:
        raise LookupError("unheard")

    async def main() -> None:
        task = asyncio.create_task(fail())
        await asyncio.sleep(1.0)
        assert task.done()
        del task
        gc.collect()

    with pytest.raises(LookupError, match="unheard"):
        run_virtual(main())


def test_threads_are_refused() -> None:
    async def main() -> None:
        await asyncio.to_thread(int)

    with pytest.raises(RefusedInVirtualTime, match="run_in_executor"):
        run_virtual(main())


def test_calls_from_threads_are_refused() -> None:
    async def main() -> None:
        asyncio.get_running_loop().call_soon_threadsafe(int)

    with pytest.raises(RefusedInVirtualTime, match="call_soon_threadsafe"):
        run_virtual(main())


def test_connections_servers_and_raw_sockets_are_refused() -> None:
    async def connect() -> None:
        await asyncio.open_connection("127.0.0.1", 502)

    async def listen() -> None:
        await asyncio.start_server(lambda _reader, _writer: None, "127.0.0.1", 0)

    async def receive() -> None:
        near, far = socket.socketpair()
        with near, far:
            near.setblocking(False)
            await asyncio.get_running_loop().sock_recv(near, 1)

    with pytest.raises(RefusedInVirtualTime, match="create_connection"):
        run_virtual(connect())
    with pytest.raises(RefusedInVirtualTime, match="create_server"):
        run_virtual(listen())
    with pytest.raises(RefusedInVirtualTime, match="sock_recv"):
        run_virtual(receive())


def test_processes_are_refused() -> None:
    async def main() -> None:
        await asyncio.create_subprocess_exec("true")

    with pytest.raises(RefusedInVirtualTime, match="subprocess_exec"):
        run_virtual(main())


def test_a_loop_starts_at_zero_and_knows_no_wall_clock() -> None:
    loop = VirtualLoop()
    try:
        assert loop.time() == 0.0
    finally:
        loop.close()
