"""Our OPC UA link against a server of another maker's stack, node-opcua.

What the server holds is asked from the server's own address space, not over the wire.
"""

import socket
from collections.abc import AsyncIterator, Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import pytest
from cryptography import x509

from autotune.config.types import DataType, LoopConfig, MessageSecurity, OpcUaEndpoint, OpcUaTag
from autotune.errors import LinkClosed
from autotune.experiment.commands import SetMode
from autotune.field import open_link
from autotune.field.facts import TellsFacts
from autotune.field.link import RawValue
from autotune.field.opc_ua.certificates import own_certificate, thumbprint_of
from autotune.field.translate import sample_tags, settings_tags, to_block_fields, to_raw, to_sample
from autotune.loop.mode import LoopMode
from autotune.loop.quality import Quality
from autotune.loop.settings import BlockFields
from autotune.loop.write import WriteOutcome
from tests.field.link_conformance import PROMPT_S, LinkConformance
from tests.field.loops import GUARDED
from tests.interop.foreign import ForeignServer, free_port, need_node_packages, node_server

pytestmark = pytest.mark.socket

USER, PASSWORD = "technician", "j4m & marmalade"
MODES = ("MAN", "AUTO", "CAS")
AT_REST: dict[str, RawValue] = {
    "pv": 48.5, "sp": 50.0, "op": 40.0, "mode": 1, "gain": 0.5, "integral": 90.0, "boot_count": 3,
    "guard_timeout_s": 2.0,
}  # fmt: skip
RANGES = {"pv": (0.0, 150.0), "sp": (0.0, 150.0), "op": (0.0, 100.0)}
READ_ONLY = {"pv", "boot_count", "plc_clock_ms"}
TYPES = {DataType.REAL: "Float", DataType.LREAL: "Double", DataType.UINT: "UInt16", DataType.UDINT: "UInt32"}
HELD = {name: tag.type for name, tag in GUARDED.tags} | {"derivative": DataType.LREAL}


@dataclass(frozen=True, slots=True)
class Foreign:
    """The running server, and the endpoint of somebody whom it lets in."""

    server: ForeignServer
    endpoint: OpcUaEndpoint


@pytest.fixture(scope="module")
def foreign(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Foreign]:
    need_node_packages()
    folder = tmp_path_factory.mktemp("node-opcua")
    (folder / "password.txt").write_text(f"{PASSWORD}\n")
    tags = {
        name: {
            "type": "Int32" if name == "mode" else TYPES[held or DataType.REAL],
            "raw": AT_REST.get(name, 0),
            "range": RANGES.get(name),
            "writable": name not in READ_ONLY,
        }
        for name, held in HELD.items()
    }
    told = {
        "port": free_port(), "folder": str(folder), "trusted": str(own_certificate(folder / "pki").path),
        "user": USER, "password": PASSWORD, "loop": "TIC-204", "modes": MODES, "tags": tags,
    }  # fmt: skip
    with node_server("opc_ua_server.js", told, folder) as server:
        certificate = x509.load_der_x509_certificate(bytes.fromhex(server.ready["certificate"]))
        endpoint = OpcUaEndpoint(
            f"opc.tcp://127.0.0.1:{told['port']}/skid",
            request_timeout_s=PROMPT_S,
            connect_gap_s=0.0,
            server_thumbprint=thumbprint_of(certificate),
            server_name=socket.gethostname(),
            user=USER,
            password_from="file:password.txt",
            folder=folder,
            pki_dir=folder / "pki",
        )
        yield Foreign(server, endpoint)


def at(endpoint: OpcUaEndpoint, **more: OpcUaTag) -> LoopConfig:
    """The loop in the foreign server."""
    tags = tuple((name, OpcUaTag(f"ns=2;s=TIC-204.{name}")) for name in HELD)
    controller = replace(GUARDED.controller, endpoint=endpoint)
    return replace(GUARDED, controller=controller, tags=tuple({**dict(tags), **more}.items()))


class ForeignBench:
    def __init__(self, foreign: Foreign, endpoint: OpcUaEndpoint) -> None:
        self.server = foreign.server
        self.loop = at(endpoint)
        self.link = open_link(self.loop)
        for name, raw in AT_REST.items():
            self.server.ask(f"{name} {raw}")

    def held(self, name: str) -> RawValue:
        raw: RawValue = self.server.ask(name)
        return raw


@pytest.fixture
async def bench(foreign: Foreign) -> AsyncIterator[ForeignBench]:
    bench = ForeignBench(foreign, foreign.endpoint)
    yield bench
    await bench.link.close()


class TestOpcUaLinkToAForeignServer(LinkConformance):
    """Signed, encrypted, with a password."""

    async def test_a_sample_and_the_settings_make_sense(self, bench: ForeignBench) -> None:
        await bench.link.connect()
        sample = to_sample(bench.loop, await bench.link.read(sample_tags(bench.loop)))
        assert (sample.pv_quality, sample.mode) == (Quality.GOOD, LoopMode.AUTO)
        assert sample.pv_pct == pytest.approx(100.0 * 48.5 / 150.0)
        assert sample.op_pct == 40.0
        fields = to_block_fields(bench.loop, await bench.link.read(settings_tags(bench.loop)))
        assert fields == BlockFields(0.5, 90.0, 0.0)

    async def test_an_enumeration_is_commanded_and_a_double_keeps_its_digits(self, bench: ForeignBench) -> None:
        await bench.link.connect()
        assert (await bench.link.write(to_raw(bench.loop, SetMode(LoopMode.MAN)))).outcome is WriteOutcome.APPLIED
        assert (await bench.link.write({"derivative": 50.1})).outcome is WriteOutcome.APPLIED
        assert (bench.held("mode"), bench.held("derivative")) == (0, 50.1)

    async def test_ranges_units_words_and_rights_are_found(self, bench: ForeignBench) -> None:
        await bench.link.connect()
        assert isinstance(bench.link, TellsFacts)
        by_name = {fact.name: fact for fact in (await bench.link.facts()).nodes}
        pv, derivative, mode = by_name["pv"], by_name["derivative"], by_name["mode"]
        assert (pv.held, pv.low_eu, pv.high_eu, pv.unit, pv.is_writable) == (DataType.REAL, 0.0, 150.0, "°C", False)
        assert (derivative.held, derivative.low_eu, derivative.is_writable) == (DataType.LREAL, None, True)
        assert (mode.held, mode.words) == (DataType.DINT, tuple(enumerate(MODES)))

    async def test_a_failed_transmitter_gives_no_number(self, foreign: Foreign) -> None:
        link = open_link(at(foreign.endpoint, pv=OpcUaTag("ns=2;s=TIC-204.failed")))
        await link.connect()
        reading = (await link.read(["pv"])).readings["pv"]
        assert (reading.raw, reading.quality) == (None, Quality.BAD)
        assert "BadSensorFailure" in reading.reason
        await link.close()

    async def test_a_tag_is_found_by_its_browse_path(self, bench: ForeignBench, foreign: Foreign) -> None:
        by_path = OpcUaTag("", path="/TIC-204/gain", namespace="urn:skid:juice")
        link = open_link(at(foreign.endpoint, gain=by_path))
        await link.connect()
        assert (await link.write({"gain": 2.25})).outcome is WriteOutcome.APPLIED
        assert bench.held("gain") == 2.25
        await link.close()


async def test_without_security_and_nameless_it_works_all_the_same(foreign: Foreign) -> None:
    in_the_clear = replace(foreign.endpoint, security=MessageSecurity.NONE, user="", password_from="")
    bench = ForeignBench(foreign, in_the_clear)
    await bench.link.connect()
    assert (await bench.link.write({"sp": 61.5, "gain": 2.25})).outcome is WriteOutcome.APPLIED
    assert (bench.held("sp"), bench.held("gain")) == (61.5, 2.25)
    assert (await bench.link.read(["sp"])).readings["sp"].raw == 61.5
    await bench.link.close()


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"server_thumbprint": "00" * 32}, "another certificate than the pinned one"),
        ({"pki_dir": Path("other-pki")}, r"let it trust .*autotune-certificate\.der"),
        ({"password_from": "file:wrong.txt"}, "does not let in user 'technician'"),
        ({"security": MessageSecurity.SIGN}, "it offers: none; Basic256Sha256 with sign and encrypt"),
    ],
    ids=["not the pinned server", "not a trusted client", "not the password", "not offered"],
)
async def test_a_connection_is_refused_and_said_why(changes: dict[str, Any], words: str, foreign: Foreign) -> None:
    (foreign.endpoint.folder / "wrong.txt").write_text("not the password\n")
    if "pki_dir" in changes:
        changes = {"pki_dir": foreign.endpoint.folder / changes["pki_dir"]}
    link = open_link(at(replace(foreign.endpoint, **changes)))
    with pytest.raises(LinkClosed, match=words):
        await link.connect()
    assert not link.is_connected
