"""The link against the soft plant: another implementation of the protocol, in a process of its own."""

import asyncio
import json
import socket
import struct
import subprocess
import sys
from collections.abc import AsyncIterator, Iterator
from dataclasses import replace

import pytest

from autotune.config.types import DataType, ModbusTag
from autotune.errors import LinkRefused
from autotune.experiment.commands import SetMode
from autotune.field import open_link
from autotune.field.codec import from_words, to_words, width
from autotune.field.link import RawValue
from autotune.field.translate import sample_tags, settings_tags, to_block_fields, to_raw, to_sample
from autotune.loop.mode import LoopMode
from autotune.loop.quality import Quality
from autotune.loop.sample import GuardState
from autotune.loop.settings import BlockFields
from autotune.loop.span import Span
from autotune.loop.write import WriteOutcome
from tests.field.link_conformance import PROMPT_S, LinkConformance
from tests.field.loops import ENDPOINT, GUARDED, at_endpoint, holding, with_tags

pytestmark = pytest.mark.socket

DEVICE_ID = 1
TIMEOUT_S = 2.0  # the machine may be busy; nothing here waits for it
AT_REST: dict[str, RawValue] = {"sp": 50.0, "mode": 1, "gain": 0.5, "integral": 1.5}
IN_RIG = replace(GUARDED, pv_span=Span(0.0, 100.0, "degC"))


@pytest.fixture(scope="module")
def plant_port() -> Iterator[int]:
    """The port of a soft plant that ends with its standard input."""
    with subprocess.Popen(
        [sys.executable, "-m", "simulator", "fast-loop", "--modbus", "0", "--until-eof"],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    ) as plant:
        assert plant.stdin is not None
        assert plant.stdout is not None
        yield json.loads(plant.stdout.readline())["modbus_port"]
        plant.stdin.close()
        assert plant.wait(PROMPT_S) == 0


def ask(port: int, pdu: bytes) -> bytes:
    """One question to the plant over a socket of the test's own; the answer without its header."""
    with socket.create_connection(("127.0.0.1", port), PROMPT_S) as own, own.makefile("rb") as answers:
        own.sendall(struct.pack(">HHHB", 1, 0, 1 + len(pdu), DEVICE_ID) + pdu)
        length = struct.unpack(">H", answers.read(6)[4:])[0]
        return answers.read(length)[1:]


class PlantBench:
    def __init__(self, port: int) -> None:
        self.port = port
        self.loop = at_endpoint(IN_RIG, replace(ENDPOINT, port=port, device_id=DEVICE_ID, request_timeout_s=TIMEOUT_S))
        self.link = open_link(self.loop)
        for name, raw in AT_REST.items():
            tag = self.place(name)
            words = to_words(tag, raw)
            count = len(words)
            ask(port, struct.pack(f">BHHB{count}H", 16, tag.address, count, 2 * count, *words))

    def place(self, name: str) -> ModbusTag:
        tag = self.loop.tag(name)
        assert isinstance(tag, ModbusTag)
        return tag

    def held(self, name: str) -> RawValue:
        tag = self.place(name)
        answer = ask(self.port, struct.pack(">BHH", 3, tag.address, width(tag)))
        raw = from_words(tag, struct.unpack(f">{width(tag)}H", answer[2:]))
        assert raw is not None
        return raw


@pytest.fixture
async def bench(plant_port: int) -> AsyncIterator[PlantBench]:
    bench = PlantBench(plant_port)
    yield bench
    await bench.link.close()


class TestModbusLinkToTheSoftPlant(LinkConformance):
    async def test_a_whole_sample_makes_sense(self, bench: PlantBench) -> None:
        await bench.link.connect()
        report = await bench.link.read(sample_tags(bench.loop))
        sample = to_sample(bench.loop, report)
        assert sample.pv_quality is Quality.GOOD
        assert sample.pv_pct is not None
        assert 20.0 < sample.pv_pct < 80.0
        assert sample.sp_pct == 50.0
        assert sample.mode is LoopMode.AUTO
        assert sample.guard is not None
        assert sample.guard.state is GuardState.IDLE
        assert sample.guard.holder == 0
        assert sample.guard.timeout_s == 1.0

    async def test_its_clock_counts_its_scans(self, bench: PlantBench) -> None:
        await bench.link.connect()
        clocks_ms = [await self._clock_ms(bench)]
        async with asyncio.timeout(PROMPT_S):
            while len(clocks_ms) < 3:
                if (clock_ms := await self._clock_ms(bench)) != clocks_ms[-1]:
                    clocks_ms.append(clock_ms)
        assert clocks_ms == sorted(clocks_ms)

    async def _clock_ms(self, bench: PlantBench) -> int:
        clock_ms = to_sample(bench.loop, await bench.link.read(["plc_clock_ms"])).plc_clock_ms
        assert clock_ms is not None
        return clock_ms

    async def test_settings_are_read_as_the_rig_has_them(self, bench: PlantBench) -> None:
        await bench.link.connect()
        fields = to_block_fields(bench.loop, await bench.link.read(settings_tags(bench.loop)))
        assert fields == BlockFields(0.5, 1.5, 0.0)

    async def test_the_mode_is_changed_by_command(self, bench: PlantBench) -> None:
        await bench.link.connect()
        report = await bench.link.write(to_raw(bench.loop, SetMode(LoopMode.MAN)))
        assert report.outcome is WriteOutcome.APPLIED
        assert bench.held("mode") == 0

    async def test_what_the_plant_does_not_have_is_refused_by_address(self, bench: PlantBench) -> None:
        loop = with_tags(bench.loop, {"pv": holding(9000, DataType.REAL)})
        link = open_link(loop)
        await link.connect()
        with pytest.raises(LinkRefused, match=r"exception 02h.*pv: holding 9000 \.\. 9001"):
            await link.read(["pv"])
        await link.close()
