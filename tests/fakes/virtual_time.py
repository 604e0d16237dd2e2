"""An event loop whose clock jumps to the next timer, for tests whose every part is in memory.

An hour of sleeps takes milliseconds and a deadlock is an error at once.  Threads, sockets, pipes and
processes are refused: while they are in flight nothing tells how far the clock may jump.  Only
``loop.time()`` is virtual; code under test must take its time from there, never from ``time``.
"""

import asyncio
from collections import deque
from collections.abc import Callable, Coroutine, Iterable
from contextlib import suppress
from typing import Any, NoReturn, TypeVar

T = TypeVar("T")

DAY_S = 86_400.0
PASSES_AT_ONE_INSTANT = 10_000


class Deadlock(AssertionError):
    """Nothing is ready and no timer runs, yet the main coroutine has not ended."""


class EndlessRun(AssertionError):
    """Timers still fire, yet the main coroutine has not ended within its virtual time."""


class TasksLeftBehind(AssertionError):
    """The main coroutine ended and other tasks did not."""


class RefusedInVirtualTime(AssertionError):
    """The code under test reached for what virtual time cannot follow."""


def _refusing(name: str) -> Any:
    def refuse(*_args: object, **_keywords: object) -> NoReturn:
        raise RefusedInVirtualTime(f"{name}: virtual time knows no threads, sockets, pipes or processes")

    return refuse


class _JumpingSelector:
    """Stands where the loop waits for its sockets; waiting is moving the clock."""

    def __init__(self, wait: Callable[[float | None], None]) -> None:
        self._wait = wait

    def select(self, timeout_s: float | None) -> list[object]:
        self._wait(timeout_s)
        return []


class VirtualLoop(asyncio.BaseEventLoop):
    """The loop; ``time()`` starts at 0 s and moves only when nothing is ready.

    ``on_pass`` is called with the number of each pass over what is ready, before the pass: whatever happens between
    two of them happens at an await of the code under test.  ``signal_handlers`` are those that were asked for; calling
    one delivers its signal.  Raises ``Deadlock`` when nothing is ready and no timer runs, ``EndlessRun`` past
    ``within_s``.
    """

    _ready: deque[object]  # the base class's own: the callbacks of the next pass

    def __init__(self, within_s: float = DAY_S, on_pass: Callable[[int], None] | None = None) -> None:
        super().__init__()
        self.signal_handlers: dict[int, Callable[[], object]] = {}
        self._now_s = 0.0
        self._within_s = within_s
        self._on_pass = on_pass
        self._passes = self._passes_now = 0
        self._selector = _JumpingSelector(self._jump)  # the base class waits by calling its select()

    def time(self) -> float:
        """Virtual seconds since the loop was made."""
        return self._now_s

    def add_signal_handler(self, sig: int, callback: Callable[..., Any], *args: Any) -> None:  # type: ignore[override]
        """Keep what the signal would call."""
        self.signal_handlers[sig] = lambda: callback(*args)

    def remove_signal_handler(self, sig: int) -> bool:
        """Forget what the signal would call."""
        return self.signal_handlers.pop(sig, None) is not None

    def _jump(self, timeout_s: float | None) -> None:
        self._passes += 1
        self._passes_now += 1
        if self._passes_now > PASSES_AT_ONE_INSTANT:
            raise EndlessRun(f"the clock stands at {self._now_s:g} s; busy: {_places(self)}")
        if self._on_pass is not None:
            self._on_pass(self._passes)
        if timeout_s == 0.0 or self._ready:
            return
        if timeout_s is None:
            raise Deadlock(f"at {self._now_s:g} s nothing is ready and no timer runs; waiting: {_places(self)}")
        self._passes_now = 0
        self._now_s += timeout_s
        if not self._now_s <= self._within_s:
            raise EndlessRun(f"not ended within {self._within_s:g} s of virtual time; waiting: {_places(self)}")

    def _process_events(self, _events: list[object]) -> None:
        """Take the selector's events, of which there are none."""

    def cancel_what_is_left(self) -> None:
        """Cancel every task and let it end, for at most an hour; one that is deaf to its cancel stays."""

        def stop_after_the_last(_task: "asyncio.Task[Any]") -> None:
            if not asyncio.all_tasks(self):
                self.stop()

        self._within_s = self._now_s + 3600.0
        self._on_pass = None
        self._passes_now = 0
        for task in (left := asyncio.all_tasks(self)):
            task.add_done_callback(stop_after_the_last)
            task.cancel()
        if left:
            with suppress(Deadlock, EndlessRun):  # what brought us here is the error to tell
                self.run_forever()

    run_in_executor = _refusing("run_in_executor")
    call_soon_threadsafe = _refusing("call_soon_threadsafe")
    getaddrinfo = _refusing("getaddrinfo")
    getnameinfo = _refusing("getnameinfo")
    create_connection = _refusing("create_connection")
    create_server = _refusing("create_server")
    create_datagram_endpoint = _refusing("create_datagram_endpoint")
    create_unix_connection = _refusing("create_unix_connection")
    create_unix_server = _refusing("create_unix_server")
    connect_accepted_socket = _refusing("connect_accepted_socket")
    connect_read_pipe = _refusing("connect_read_pipe")
    connect_write_pipe = _refusing("connect_write_pipe")
    subprocess_exec = _refusing("subprocess_exec")
    subprocess_shell = _refusing("subprocess_shell")
    add_reader = _refusing("add_reader")
    add_writer = _refusing("add_writer")
    sock_connect = _refusing("sock_connect")
    sock_accept = _refusing("sock_accept")
    sock_recv = _refusing("sock_recv")
    sock_recv_into = _refusing("sock_recv_into")
    sock_sendall = _refusing("sock_sendall")


def run_virtual(
    main: Coroutine[Any, Any, T], *, within_s: float = DAY_S, on_pass: Callable[[int], None] | None = None
) -> T:
    """Run ``main`` to its end in virtual time, at most ``within_s`` of it, and return its result.

    Raises what ``main`` raises; ``Deadlock`` or ``EndlessRun``; ``TasksLeftBehind`` when other tasks are
    not done when ``main`` is; the exception of a task or callback that nobody awaited.
    """
    loop = VirtualLoop(within_s, on_pass)
    unheard: list[dict[str, Any]] = []
    loop.set_exception_handler(lambda _loop, context: unheard.append(context))
    try:
        result = loop.run_until_complete(main)
        if left := asyncio.all_tasks(loop):
            raise TasksLeftBehind(f"not done when the main coroutine was: {_places(loop, left)}")
    finally:
        loop.cancel_what_is_left()
        loop.run_until_complete(loop.shutdown_asyncgens())
        loop.close()
    for context in unheard:
        raise context.get("exception") or AssertionError(str(context["message"]))
    return result


def _places(loop: VirtualLoop, tasks: Iterable["asyncio.Task[Any]"] | None = None) -> str:
    """Name every task and the line in which it waits."""
    return "; ".join(sorted(_place(task) for task in (asyncio.all_tasks(loop) if tasks is None else tasks)))


def _place(task: "asyncio.Task[Any]") -> str:
    outermost: Any = task.get_coro()
    innermost: Any = outermost
    while getattr(following := getattr(innermost, "cr_await", None), "cr_frame", None) is not None:
        innermost = following
    frame = getattr(innermost, "cr_frame", None)
    line = f"{frame.f_code.co_filename}:{frame.f_lineno}" if frame else "its end"
    return f"{task.get_name()} ({getattr(outermost, '__qualname__', outermost)}) at {line}"
