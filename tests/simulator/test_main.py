"""The plant as a process of its own."""

import json
import signal
import socket
import struct
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest

pytestmark = pytest.mark.socket
ROOT = Path(__file__).parents[2]
COMMAND = [sys.executable, "-m", "simulator"]


@contextmanager
def plant(*arguments: str) -> Iterator["subprocess.Popen[str]"]:
    with subprocess.Popen(
        [*COMMAND, *arguments],
        cwd=ROOT,
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    ) as running:
        try:
            yield running
        finally:
            running.kill()


def answer(running: "subprocess.Popen[str]", line: str) -> dict[str, object]:
    assert running.stdin is not None
    assert running.stdout is not None
    running.stdin.write(line + "\n")
    running.stdin.flush()
    told: dict[str, object] = json.loads(running.stdout.readline())
    return told


def ready(running: "subprocess.Popen[str]") -> dict[str, object]:
    assert running.stdout is not None
    told: dict[str, object] = json.loads(running.stdout.readline())
    return told


def read_registers(port: object, address: int, count: int) -> tuple[int, ...]:
    with socket.create_connection(("127.0.0.1", int(str(port))), timeout=5.0) as wire:
        wire.sendall(struct.pack(">HHHBBHH", 1, 0, 6, 1, 3, address, count))
        head = wire.recv(9, socket.MSG_WAITALL)
        assert head[7] == 3
        return struct.unpack(f">{count}H", wire.recv(2 * count, socket.MSG_WAITALL))


def test_a_whole_life_from_ready_over_panel_and_wire_to_quit() -> None:
    with plant("fast-loop-little", "--modbus", "0") as running:
        told = ready(running)
        assert told["ready"] is True
        assert (told["rig"], told["pid"]) == ("fast-loop-little", running.pid)
        assert read_registers(told["modbus_port"], 2, 2) == (0, 0x4248)  # 50.0, low word first
        assert answer(running, "mode TIC-1 MAN") == {"ok": True, "mode": "MAN"}
        assert answer(running, "op TIC-1 30") == {"ok": True, "op_pct": 30.0}
        assert read_registers(told["modbus_port"], 62, 1) == (3000,)
        assert answer(running, "nonsense")["ok"] is False
        first = answer(running, "state")["plc_clock_ms"]
        while (later := answer(running, "state")["plc_clock_ms"]) == first:
            pass
        assert int(str(later)) > int(str(first))
        assert answer(running, "quit") == {"ok": True}
        assert running.wait(10.0) == 0
        assert running.stderr is not None
        assert running.stderr.read() == ""


def test_over_the_wire_the_guard_lends_moves_and_takes_back() -> None:
    with plant("fast-loop") as running:
        port = ready(running)["modbus_port"]
        assert answer(running, "enable TIC-1") == {"ok": True}
        while answer(running, "state TIC-1")["enable"] is not True:
            pass
        with socket.create_connection(("127.0.0.1", int(str(port))), timeout=5.0) as wire:

            def write(address: int, *words: int) -> None:
                body = struct.pack(">BBHHB", 1, 16, address, len(words), 2 * len(words))
                body += struct.pack(f">{len(words)}H", *words)
                wire.sendall(struct.pack(">HHH", 1, 0, len(body)) + body)
                assert wire.recv(12, socket.MSG_WAITALL)[7] == 16

            write(30, 0, 4711, 1, 1)
            while read_registers(port, 12, 4) != (1, 0, 0, 4711):  # armed, no alarm, our token
                pass
            write(6, 0)
            write(30, 0, 4711, 2, 2, 0x425C, 0)  # 55.0 with the next sequence number
            while read_registers(port, 4, 2) != (0x425C, 0):
                pass
            begun_ms = int(str(answer(running, "state")["plc_clock_ms"]))
        # From here nobody beats: the client has gone.
        while read_registers(port, 12, 2) != (2, 1):
            pass
        state = answer(running, "state TIC-1")
        assert (state["mode"], state["guard_state"]) == ("AUTO", "gave back")
        ended_ms = int(str(answer(running, "state")["plc_clock_ms"]))
        # The rig's timeout is 1.0 s after the last heartbeat, which came shortly before begun_ms.
        assert 800 <= ended_ms - begun_ms <= 2000


def test_the_end_of_stdin_ends_it_only_when_asked_to_and_a_termination_always() -> None:
    with plant("fast-loop", "--until-eof") as until_eof, plant("fast-loop") as going_on:
        ready(until_eof)
        port = ready(going_on)["modbus_port"]
        for running in (until_eof, going_on):
            assert running.stdin is not None
            running.stdin.close()
        assert until_eof.wait(10.0) == 0
        assert read_registers(port, 6, 1) == (1,)
        going_on.send_signal(signal.SIGTERM)
        assert going_on.wait(10.0) == 0


def test_a_taken_port_is_told_in_one_line() -> None:
    with socket.create_server(("127.0.0.1", 0)) as taken:
        port = str(taken.getsockname()[1])
        ended = subprocess.run(
            [*COMMAND, "fast-loop", "--modbus", port], cwd=ROOT, capture_output=True, text=True, check=False
        )
    assert ended.returncode == 3
    assert f"127.0.0.1:{port}" in ended.stderr
    assert "Traceback" not in ended.stderr


@pytest.mark.parametrize(
    ("arguments", "complaint"),
    [
        (["no-such-rig"], "no-such-rig: no such rig"),
        ([], "RIG"),
        (["fast-loop", "--modbus", "99999"], "'99999' is no port; write 0 to 65535"),
    ],
)
def test_bad_usage_ends_with_two_and_a_clear_line(arguments: list[str], complaint: str) -> None:
    ended = subprocess.run([*COMMAND, *arguments], cwd=ROOT, capture_output=True, text=True, check=False)
    assert ended.returncode == 2
    assert complaint in ended.stderr


def test_the_map_is_printed_and_nothing_is_served() -> None:
    ended = subprocess.run([*COMMAND, "juice-skid", "--map"], cwd=ROOT, capture_output=True, text=True, check=True)
    lines = ended.stdout.splitlines()
    assert lines[0].split()[:3] == ["loop", "address", "type"]
    assert any(line.split()[:5] == ["TIC-204", "34", "REAL", "rw", "%"] for line in lines)
