"""Programs of foreign stacks as processes of their own: a line in, a line of JSON out."""

import json
import os
import shutil
import socket
import subprocess
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest

from tests.field.link_conformance import PROMPT_S

HERE = Path(__file__).parent
_CACHE = Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache") / "autotune-interop"
_LOCK = "package-lock.json"
START_S = 60.0
"""Longest time for a script to load its packages on a busy machine."""


def need_node_packages() -> None:
    """Skip the test where node-opcua and modbus-serial aren't those of the lock file."""
    installed = _CACHE / "installed-lock.json"
    if shutil.which("node") is None:
        pytest.skip("Node isn't installed, so the stacks node-opcua and modbus-serial can't run")
    if not installed.exists() or installed.read_bytes() != (HERE / _LOCK).read_bytes():
        pytest.skip("the stacks node-opcua and modbus-serial aren't installed: run tests/interop/install")


def need_mbpoll() -> str:
    """The path of mbpoll, which speaks Modbus by libmodbus; skips the test where there is none."""
    found = shutil.which("mbpoll")
    if found is None:
        pytest.skip("mbpoll isn't installed: install it from the system's packages, or run tests/interop/install")
    return found


def free_port() -> int:
    """A port that nobody listens on at this moment; these stacks can't be asked for a free one."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port: int = probe.getsockname()[1]
        return port


def _environment(home: Path) -> dict[str, str]:
    return {**os.environ, "NODE_PATH": str(_CACHE / "node_modules"), "HOME": str(home), "XDG_CONFIG_HOME": str(home)}


def run_node(script: str, told: object, home: Path) -> Any:
    """Run a script to its end with ``told`` as its standard input; the JSON object that it printed."""
    ran = subprocess.run(
        ["node", str(HERE / script)],
        input=json.dumps(told), capture_output=True, text=True, timeout=START_S, env=_environment(home), check=False,
    )  # fmt: skip
    assert ran.returncode == 0, ran.stderr
    return json.loads(ran.stdout.splitlines()[-1])


class ForeignServer:
    """A running server; ``ready`` is what it told at its start."""

    def __init__(self, process: "subprocess.Popen[str]", ready: Any) -> None:
        self.ready = ready
        self._process = process

    def ask(self, line: str) -> Any:
        """What it answers to a line."""
        assert self._process.stdin is not None
        self._process.stdin.write(f"{line}\n")
        self._process.stdin.flush()
        return _next_object(self._process)


@contextmanager
def node_server(script: str, told: object, home: Path) -> Iterator[ForeignServer]:
    """A server script, told by its first line what to serve; it ends with its standard input."""
    with subprocess.Popen(
        ["node", str(HERE / script)],
        stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, env=_environment(home),
    ) as process:  # fmt: skip
        assert process.stdin is not None
        try:
            server = ForeignServer(process, None)
            server.ready = server.ask(json.dumps(told))
            yield server
            process.stdin.close()
            assert process.wait(PROMPT_S) == 0
        finally:
            process.kill()


def _next_object(process: "subprocess.Popen[str]") -> Any:
    """The next line that is JSON; the libraries print remarks of their own."""
    assert process.stdout is not None
    for line in process.stdout:
        try:
            return json.loads(line)
        except ValueError:
            continue
    raise AssertionError(f"the server has ended with {process.wait(PROMPT_S)}")
