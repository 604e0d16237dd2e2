"""Starts tools quickly: ``python -m tests.faults.nursery`` loads the program once and forks a process per run.

Each line of standard input is one order, each answer one line: the process number, and later how it ended (a negative
number is the signal).  A forked tool is a process like any other: it can be killed, stopped, and put into a
network of its own.
"""

import asyncio
import ctypes
import json
import os
import select
import signal
import sys
import traceback
from collections.abc import Mapping
from pathlib import Path
from typing import Any

CLONE_NEWNET = 0x40000000
CRASHED = 70
"""Exit code of a tool that ended by an exception that it does not know."""


class Nursery:
    """The harness's end of a nursery."""

    def __init__(self, process: asyncio.subprocess.Process) -> None:
        self._process = process
        self._started: asyncio.Queue[int] = asyncio.Queue()
        self._one_at_a_time = asyncio.Lock()
        self._ends: dict[int, asyncio.Future[int]] = {}
        self._listening = asyncio.create_task(self._listen(), name="nursery")

    @classmethod
    async def open(cls) -> "Nursery":
        """Start one; it loads the whole program first."""
        process = await asyncio.create_subprocess_exec(
            sys.executable, "-m", "tests.faults.nursery",
            cwd=Path(__file__).parents[2], stdin=asyncio.subprocess.PIPE, stdout=asyncio.subprocess.PIPE,
            env=os.environ | {"OPENBLAS_NUM_THREADS": "1"},
        )  # fmt: skip
        return cls(process)

    async def start(self, arguments: list[str], typed: str, folder: Path, name: str, network: str | None) -> "Tool":
        """Run ``tests.faults.tool`` with ``typed`` on its standard input; its output goes to files in ``folder``."""
        order = {"arguments": arguments, "typed": typed, "stem": str(folder / name), "network": network}
        assert self._process.stdin is not None
        async with self._one_at_a_time:
            self._process.stdin.write(f"{json.dumps(order)}\n".encode())
            pid = await self._started.get()
        return Tool(pid, folder / name, self._ends[pid])

    async def close(self) -> None:
        """End it; whatever it started and still runs is killed."""
        for pid, end in self._ends.items():
            if not end.done():
                os.kill(pid, signal.SIGKILL)
        assert self._process.stdin is not None
        self._process.stdin.close()
        await self._process.wait()
        await self._listening

    async def _listen(self) -> None:
        assert self._process.stdout is not None
        while line := await self._process.stdout.readline():
            told: dict[str, int] = json.loads(line)
            if "started" in told:
                self._ends[told["started"]] = asyncio.get_running_loop().create_future()
                self._started.put_nowait(told["started"])
            else:
                self._ends[told["ended"]].set_result(told["code"])
        for end in self._ends.values():
            if not end.done():
                end.set_result(-signal.SIGKILL)  # with the nursery gone nobody tells how it ended


class Tool:
    """One run of the tool: its life, its exit code and what it said."""

    def __init__(self, pid: int, stem: Path, end: "asyncio.Future[int]") -> None:
        self.pid = pid
        self._stem = stem
        self._end = end

    @property
    def is_over(self) -> bool:
        """Whether it has ended."""
        return self._end.done()

    def signal(self, number: signal.Signals) -> None:
        """Send a signal, unless it has ended."""
        if not self.is_over:
            os.kill(self.pid, number)

    async def ended(self) -> int:
        """Its exit code, once it has ended."""
        return await asyncio.shield(self._end)

    @property
    def code(self) -> int:
        """The exit code of a tool that is over; the signal, negative, where one ended it."""
        return self._end.result()

    @property
    def answer(self) -> dict[str, Any] | None:
        """The JSON object on standard output; ``None`` when there is none."""
        text = self._stem.with_suffix(".out").read_text("utf-8")
        answer: dict[str, Any] | None = json.loads(text) if text.strip() else None
        return answer

    @property
    def said(self) -> str:
        """Everything said to people."""
        return self._stem.with_suffix(".err").read_text("utf-8")


def _serve() -> None:
    """Fork a tool per line of standard input and tell of each end; no thread and no event loop is ever forked."""
    import tests.faults.tool  # noqa: F401 - loaded once, before the first fork

    children, wakes = os.pipe()
    for descriptor in (children, wakes):
        os.set_blocking(descriptor, False)
    signal.set_wakeup_fd(wakes)
    signal.signal(signal.SIGCHLD, lambda *_: None)
    running: set[int] = set()
    rest = b""
    while True:
        ready, _, _ = select.select([0, children], [], [])
        if children in ready:
            os.read(children, 4096)
            _reap(running)
        if 0 in ready:
            orders = os.read(0, 65536)
            if not orders:
                return
            *lines, rest = (rest + orders).split(b"\n")
            for line in lines:
                pid = os.fork()
                if pid == 0:
                    _become_tool(json.loads(line))
                running.add(pid)
                _say({"started": pid})


def _reap(running: set[int]) -> None:
    for pid in tuple(running):
        ended, status = os.waitpid(pid, os.WNOHANG)
        if ended:
            running.discard(pid)
            _say({"ended": pid, "code": os.waitstatus_to_exitcode(status)})


def _become_tool(order: Mapping[str, Any]) -> None:
    code = CRASHED
    try:
        signal.set_wakeup_fd(-1)
        for number in (signal.SIGCHLD, signal.SIGINT, signal.SIGTERM):
            signal.signal(number, signal.default_int_handler if number is signal.SIGINT else signal.SIG_DFL)
        if order["network"]:
            _enter_network(order["network"])
        _redirect(order["stem"], order["typed"])
        from tests.faults import tool

        code = tool.main(order["arguments"])
    except BaseException:  # noqa: BLE001 - a fork must end here, whatever happens
        traceback.print_exc()
        code = CRASHED
    finally:
        sys.stdout.flush()
        sys.stderr.flush()
        os._exit(code)


def _redirect(stem: str, typed: str) -> None:
    """Standard input, output and error of the tool; nothing of the nursery's stays open."""
    Path(f"{stem}.in").write_text(typed, "utf-8")
    kept = [os.open(f"{stem}.in", os.O_RDONLY)]
    kept += [os.open(f"{stem}.{end}", os.O_WRONLY | os.O_CREAT | os.O_TRUNC, 0o600) for end in ("out", "err")]
    for descriptor, wanted in zip(kept, (0, 1, 2), strict=True):
        os.dup2(descriptor, wanted)
    os.closerange(3, 256)
    sys.stdin, sys.stdout, sys.stderr = (open(n, "r" if n == 0 else "w", encoding="utf-8") for n in (0, 1, 2))  # noqa: SIM115


def _enter_network(name: str) -> None:
    descriptor = os.open(f"/var/run/netns/{name}", os.O_RDONLY)
    if ctypes.CDLL(None, use_errno=True).setns(descriptor, CLONE_NEWNET) != 0:
        raise OSError(ctypes.get_errno(), f"can't enter the network {name}")


def _say(told: Mapping[str, int]) -> None:
    os.write(1, f"{json.dumps(told)}\n".encode())


if __name__ == "__main__":
    _serve()
