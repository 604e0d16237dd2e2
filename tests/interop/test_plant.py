"""The soft plant, looked at and written to by clients of other makers: node-opcua, and mbpoll, which uses libmodbus.

What the plant holds is asked at its panel.
"""

import json
import re
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from tests.field.link_conformance import PROMPT_S
from tests.interop.foreign import need_mbpoll, need_node_packages, run_node

pytestmark = pytest.mark.socket

LOOP = "TIC-1"  # of the rig fast-loop
MODES = ("MAN", "AUTO", "CAS")
USER, PASSWORD = "technician", "j4m & marmalade"


@dataclass(frozen=True, slots=True)
class Plant:
    """A running soft plant: what it told when it was ready, and its panel."""

    ready: dict[str, Any]
    process: "subprocess.Popen[str]"

    def press(self, line: str) -> dict[str, Any]:
        """One line at the panel and its answer."""
        assert self.process.stdin is not None
        assert self.process.stdout is not None
        self.process.stdin.write(f"{line}\n")
        self.process.stdin.flush()
        answer: dict[str, Any] = json.loads(self.process.stdout.readline())
        assert answer["ok"], f"{line}: {answer}"
        return answer


@pytest.fixture(scope="module")
def plant() -> Iterator[Plant]:
    with subprocess.Popen(
        [
            sys.executable, "-m", "simulator", "fast-loop", "--modbus", "0", "--opc-ua", "0", "--until-eof",
            "--opc-ua-trust-all", "--opc-ua-user", f"{USER}:{PASSWORD}:operate", "--opc-ua-anonymous", "none",
        ],
        stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True,
    ) as process:  # fmt: skip
        assert process.stdin is not None
        assert process.stdout is not None
        yield Plant(json.loads(process.stdout.readline()), process)
        process.stdin.close()
        assert process.wait(PROMPT_S) == 0


def test_a_foreign_opc_ua_client_works_with_the_plant_as_the_standard_says(plant: Plant, tmp_path: Path) -> None:
    need_node_packages()
    plant.press(f"settings {LOOP} gain=0.5")
    plant.press(f"sp {LOOP} 50")
    told = {"url": plant.ready["opc_ua_url"], "folder": str(tmp_path), "user": USER, "password": PASSWORD}
    seen = run_node("opc_ua_client.js", {**told, "loop": f"ns=2;s={LOOP}"}, tmp_path)
    held = plant.press(f"state {LOOP}")
    assert {"pv", "sp", "op", "mode", "gain", "holder_request"} <= set(seen["browsed"])
    assert {name: one["type"] for name, one in seen["read"].items()} == {
        "pv": "Float", "sp": "Float", "op": "Float", "mode": "Int32", "gain": "Float",
        "boot_count": "UInt16", "holder": "UInt32",
    }  # fmt: skip
    assert {one["status"] for one in seen["read"].values()} == {"Good"}
    assert {name: seen["read"][name]["raw"] for name in ("sp", "mode", "gain", "holder")} == {
        "sp": 50.0, "mode": 1, "gain": 0.5, "holder": 0,
    }  # fmt: skip
    assert seen["range"] == [0.0, 100.0]
    assert (seen["written"].pop("gain"), seen["written"].pop("sp")) == ("Good", "Good")
    assert seen["written"] == {"gain_as_double": "BadTypeMismatch", "pv": "BadNotWritable"}
    assert (held["gain"], held["sp"]) == (2.25, 61.5)
    assert seen["clocks"] == sorted(set(seen["clocks"]))
    assert "BadUserAccessDenied" in seen["wrong_password"]
    assert "End point must exist" in seen["without_security"]  # the plant offers none


class Mbpoll:
    """One request each time, by mbpoll's own rules: addresses from 0, high word first."""

    def __init__(self, program: str, port: int) -> None:
        self._command = (program, "-m", "tcp", "-p", str(port), "-a", "1", "-0", "-1", "-B", "-o", "10")

    def run(self, *options: object) -> "subprocess.CompletedProcess[str]":
        return subprocess.run(
            [*self._command, *map(str, options)], capture_output=True, text=True, timeout=PROMPT_S * 2, check=False
        )

    def read(self, kind: str, address: int, count: int = 1) -> list[float]:
        ran = self.run("-t", kind, "-r", address, "-c", count, "127.0.0.1")
        assert ran.returncode == 0, ran.stdout + ran.stderr
        return [float(told) for told in re.findall(r"(?m)^\[\d+\]:\s+(\S+)", ran.stdout)]

    def write(self, kind: str, address: int, *settings: float) -> bool:
        ran = self.run("-t", kind, "-r", address, "127.0.0.1", "--", *settings)
        assert ran.returncode == 0 or "Write" in ran.stdout + ran.stderr, ran.stdout + ran.stderr
        return ran.returncode == 0


@pytest.fixture
def mbpoll(plant: Plant) -> Mbpoll:
    return Mbpoll(need_mbpoll(), plant.ready["modbus_port"])


def test_a_foreign_modbus_client_reads_reals_words_and_bits(plant: Plant, mbpoll: Mbpoll) -> None:
    plant.press(f"sp {LOOP} 42.5")
    held = plant.press(f"state {LOOP}")
    assert mbpoll.read("4:float", 2) == [42.5]
    assert mbpoll.read("4", 6) == [MODES.index(held["mode"])]
    assert mbpoll.read("4:float", 20) == [1.0]
    assert mbpoll.read("4:int", 14) == [held["holder"]]
    assert mbpoll.read("1", 10, 2) == [1.0, 1.0]


def test_a_foreign_modbus_client_writes_what_the_map_says(plant: Plant, mbpoll: Mbpoll) -> None:
    assert mbpoll.write("4:float", 40, 2.5)
    assert mbpoll.write("4:float", 2, 55.5)
    assert mbpoll.write("4", 32, 4711)  # one register alone: function 06h
    held = plant.press(f"state {LOOP}")
    assert (held["gain"], held["sp"], held["heartbeat"]) == (2.5, 55.5, 4711)


@pytest.mark.parametrize(("kind", "address"), [("4", 9000), ("3", 9000)])
def test_a_foreign_modbus_client_is_refused_what_the_map_has_not(kind: str, address: int, mbpoll: Mbpoll) -> None:
    ran = mbpoll.run("-t", kind, "-r", address, "127.0.0.1")
    assert "Illegal data address" in ran.stdout + ran.stderr


def test_a_foreign_modbus_client_cannot_write_the_measured_value(plant: Plant, mbpoll: Mbpoll) -> None:
    ran = mbpoll.run("-t", "4:float", "-r", 0, "127.0.0.1", "1.0")
    assert "Illegal data address" in ran.stdout + ran.stderr
    assert plant.press(f"state {LOOP}")["pv"] != 1.0
