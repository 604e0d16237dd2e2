"""Our Modbus link against a server of another maker's stack, modbus-serial.

What the server holds is asked from its own table, not over the wire.
"""

import struct
from collections.abc import AsyncIterator, Iterator
from dataclasses import dataclass, replace
from pathlib import Path

import pytest

from autotune.config.types import DataType, ModbusTag, Order
from autotune.errors import LinkRefused, LinkTimeout
from autotune.experiment.commands import SetMode
from autotune.field import open_link
from autotune.field.codec import from_words, to_words, width
from autotune.field.link import RawValue
from autotune.field.translate import sample_tags, settings_tags, to_block_fields, to_raw, to_sample
from autotune.loop.mode import LoopMode
from autotune.loop.quality import Quality
from autotune.loop.settings import BlockFields
from autotune.loop.write import WriteOutcome
from tests.field.link_conformance import PROMPT_S, LinkConformance
from tests.field.loops import ENDPOINT, GUARDED, at_endpoint, holding, with_tags
from tests.interop.foreign import ForeignServer, free_port, need_node_packages, node_server

pytestmark = pytest.mark.socket

SIZE = 100
AT_REST: dict[str, RawValue] = {
    "pv": 48.5, "sp": 50.0, "op": 40.0, "mode": 1, "gain": 0.5, "integral": 90.0, "derivative": 0.0, "boot_count": 3,
}  # fmt: skip


@dataclass(frozen=True, slots=True)
class Foreign:
    """The running server and its port."""

    server: ForeignServer
    port: int


@pytest.fixture(scope="module")
def foreign(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Foreign]:
    need_node_packages()
    home: Path = tmp_path_factory.mktemp("modbus-serial")
    told = {"port": free_port(), "device_id": ENDPOINT.device_id, "size": SIZE}
    with node_server("modbus_server.js", told, home) as server:
        yield Foreign(server, told["port"])


class ForeignBench:
    def __init__(self, foreign: Foreign) -> None:
        self.server = foreign.server
        self.endpoint = replace(ENDPOINT, port=foreign.port, request_timeout_s=PROMPT_S)
        self.loop = at_endpoint(GUARDED, self.endpoint)
        self.link = open_link(self.loop)
        for name, raw in AT_REST.items():
            tag = self.place(name)
            self.server.ask(" ".join(map(str, (tag.address, 0, *to_words(tag, raw)))))

    def place(self, name: str) -> ModbusTag:
        tag = self.loop.tag(name)
        assert isinstance(tag, ModbusTag)
        return tag

    def held(self, name: str) -> RawValue:
        tag = self.place(name)
        raw = from_words(tag, self.server.ask(f"{tag.address} {width(tag)}"))
        assert raw is not None
        return raw


@pytest.fixture
async def bench(foreign: Foreign) -> AsyncIterator[ForeignBench]:
    bench = ForeignBench(foreign)
    yield bench
    await bench.link.close()


class TestModbusLinkToAForeignServer(LinkConformance):
    async def test_a_sample_and_the_settings_make_sense(self, bench: ForeignBench) -> None:
        await bench.link.connect()
        sample = to_sample(bench.loop, await bench.link.read(sample_tags(bench.loop)))
        assert (sample.pv_quality, sample.mode) == (Quality.GOOD, LoopMode.AUTO)
        assert sample.pv_pct == pytest.approx(100.0 * 48.5 / 150.0)
        assert sample.op_pct == 40.0
        fields = to_block_fields(bench.loop, await bench.link.read(settings_tags(bench.loop)))
        assert fields == BlockFields(0.5, 90.0, 0.0)

    async def test_the_mode_is_commanded(self, bench: ForeignBench) -> None:
        await bench.link.connect()
        assert (await bench.link.write(to_raw(bench.loop, SetMode(LoopMode.MAN)))).outcome is WriteOutcome.APPLIED
        assert bench.held("mode") == 0

    @pytest.mark.parametrize(("order", "code"), [(Order.BIG, ">f"), (Order.LITTLE, "<f")])
    async def test_a_real_lies_in_the_servers_words_as_the_file_tells(
        self, order: Order, code: str, bench: ForeignBench
    ) -> None:
        place = replace(holding(60, DataType.REAL), word_order=order, byte_order=order)
        link = open_link(with_tags(bench.loop, {"gain": place}))
        await link.connect()
        assert (await link.write({"gain": 2.25})).outcome is WriteOutcome.APPLIED
        octets = struct.pack(code, 2.25)  # IEEE 754 single, its octets in the order of the registers
        assert bench.server.ask("60 2") == list(struct.unpack(">HH", octets))
        assert (await link.read(["gain"])).readings["gain"].raw == 2.25
        await link.close()

    async def test_what_the_server_does_not_have_is_refused_by_address(self, bench: ForeignBench) -> None:
        link = open_link(with_tags(bench.loop, {"pv": holding(SIZE, DataType.REAL)}))
        await link.connect()
        with pytest.raises(LinkRefused, match=rf"exception 02h.*pv: holding {SIZE} \.\. {SIZE + 1}"):
            await link.read(["pv"])
        assert link.is_connected
        await link.close()

    async def test_another_device_id_gets_no_answer(self, bench: ForeignBench) -> None:
        endpoint = replace(bench.endpoint, device_id=ENDPOINT.device_id + 1, request_timeout_s=0.3)
        link = open_link(at_endpoint(GUARDED, endpoint))
        await link.connect()
        with pytest.raises(LinkTimeout):
            await link.read(["pv"])
        assert not link.is_connected
