"""The link against a server of its library, troubled on purpose."""

import asyncio
import re
from collections.abc import AsyncIterator, Iterator
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest
from asyncua import ua
from asyncua.ua.status_codes import StatusCodes
from cryptography import x509
from cryptography.hazmat.primitives.serialization import Encoding

from autotune.config.types import DataType, LoopConfig, MessageSecurity, OpcUaEndpoint, OpcUaTag, Tag
from autotune.errors import LinkClosed, LinkError, LinkTimeout, WriteForbidden
from autotune.experiment.commands import DriveOutput
from autotune.field import open_link
from autotune.field.facts import TellsFacts
from autotune.field.link import RawValue
from autotune.field.opc_ua.certificates import own_certificate
from autotune.field.opc_ua.opening import is_readable_by_others
from autotune.field.opc_ua.writing import judge_write, split_writes
from autotune.field.translate import sample_tags, to_raw, to_sample
from autotune.loop.quality import Quality
from autotune.loop.write import WriteOutcome
from tests.field.certificates import certificate
from tests.field.link_conformance import PROMPT_S, Trouble, TroubledLinkConformance, is_connected
from tests.field.loops import GUARDED, with_tags
from tests.field.ua_plant import NAMESPACE, UaPlant, Wire, in_the_plant, node_text

pytestmark = pytest.mark.socket

AT_REST: dict[str, RawValue] = {"pv": 48.5, "sp": 50.0, "op": 40.0, "mode": 1, "gain": 0.5, "integral": 1.5}
HELD = {
    name: (DataType.DINT if name == "mode" else tag.type or DataType.REAL, AT_REST.get(name, 0))
    for name, tag in GUARDED.tags
}
SILENCE_S, PATIENCE_S = 1.0, 10.0  # the deadline where an answer never comes, and where it does on a busy machine


@pytest.fixture(scope="module")
def plant() -> Iterator[UaPlant]:
    with UaPlant(HELD) as plant:
        yield plant


class UaBench:
    def __init__(self, plant: UaPlant, wire: Wire, timeout_s: float) -> None:
        self.plant = plant
        self.wire = wire
        self.heard = wire.heard
        self.loop = in_the_plant(GUARDED, wire.url, timeout_s)
        self.link = open_link(self.loop)

    def held(self, name: str) -> RawValue:
        return self.plant.held(name)

    def trouble(self, *troubles: Trouble) -> None:
        self.heard.clear()
        self.plant.script.extend(troubles)

    def hang_up(self) -> None:
        self.wire.hang_up()


@pytest.fixture
async def bench(plant: UaPlant, request: pytest.FixtureRequest) -> AsyncIterator[UaBench]:
    plant.reset()
    waits_for_silence = any(word in request.node.name for word in ("SILENT", "nothing_is_sent_twice"))
    async with Wire(plant) as wire:
        bench = UaBench(plant, wire, SILENCE_S if waits_for_silence else PATIENCE_S)
        yield bench
        await bench.link.close()


class TestOpcUaLink(TroubledLinkConformance):
    async def test_a_read_is_one_request_however_many_tags_there_are(self, bench: UaBench) -> None:
        await bench.link.connect()
        names = sample_tags(bench.loop)
        await bench.link.read(names)
        assert bench.plant.requests == [("read", tuple(f"TIC-204.{name}" for name in names))]

    async def test_the_parts_of_an_output_move_go_together_and_the_sequence_after_them(self, bench: UaBench) -> None:
        await bench.link.connect()
        report = await bench.link.write(to_raw(bench.loop, DriveOutput(41.0, 4711, 2, 3)))
        assert report.outcome is WriteOutcome.APPLIED
        assert bench.plant.requests == [
            ("write", ("TIC-204.holder_request", "TIC-204.heartbeat", "TIC-204.op_request")),
            ("write", ("TIC-204.sequence",)),
        ]
        assert [bench.held(name) for name in ("holder_request", "heartbeat", "op_request", "sequence")] == [
            4711, 2, 41.0, 3,
        ]  # fmt: skip

    async def test_a_request_that_is_written_in_part_is_told_and_stops_the_rest(self, bench: UaBench) -> None:
        await bench.link.connect()
        bench.plant.refused_nodes["TIC-204.heartbeat"] = StatusCodes.BadOutOfRange
        report = await bench.link.write({"holder_request": 4711, "heartbeat": 2, "op_request": 41.0, "sequence": 3})
        assert report.outcome is WriteOutcome.NOT_HEARD
        assert "heartbeat (ns=2;s=TIC-204.heartbeat): BadOutOfRange (803C0000h)" in report.detail
        assert "holder_request, op_request had been applied" in report.detail
        assert bench.held("sequence") == 0

    @pytest.mark.parametrize(
        ("code", "outcome"),
        [
            (StatusCodes.BadNotWritable, WriteOutcome.REFUSED),
            (StatusCodes.BadTypeMismatch, WriteOutcome.REFUSED),
            (StatusCodes.BadTimeout, WriteOutcome.NOT_HEARD),
            (StatusCodes.BadDeviceFailure, WriteOutcome.NOT_HEARD),
            (StatusCodes.GoodClamped, WriteOutcome.NOT_HEARD),
            (StatusCodes.GoodCompletesAsynchronously, WriteOutcome.NOT_HEARD),
            (StatusCodes.UncertainLastUsableValue, WriteOutcome.NOT_HEARD),
        ],
    )
    async def test_the_status_of_a_node_decides_what_became_of_a_write(
        self, bench: UaBench, code: int, outcome: WriteOutcome
    ) -> None:
        await bench.link.connect()
        bench.plant.refused_nodes["TIC-204.sp"] = code
        report = await bench.link.write({"sp": 61.0})
        assert report.outcome is outcome
        assert f"{code:08X}h" in report.detail

    @pytest.mark.parametrize(
        ("code", "outcome", "stays"),
        [
            (StatusCodes.BadTooManyOperations, WriteOutcome.REFUSED, True),
            (StatusCodes.BadInternalError, WriteOutcome.NOT_HEARD, True),
            (StatusCodes.BadSessionIdInvalid, WriteOutcome.NOT_HEARD, False),
        ],
    )
    async def test_a_fault_of_the_whole_request_is_told_by_its_status(
        self, bench: UaBench, code: int, outcome: WriteOutcome, stays: bool
    ) -> None:
        await bench.link.connect()
        bench.plant.write_fault = code
        report = await bench.link.write({"sp": 61.0})
        assert report.outcome is outcome
        assert is_connected(bench) is stays

    @pytest.mark.parametrize(
        ("code", "quality"),
        [
            (StatusCodes.GoodLocalOverride, Quality.FORCED),
            (StatusCodes.GoodClamped, Quality.CLAMPED),
            (0x0500, Quality.CLAMPED),  # good, a data value, limited low
            (StatusCodes.UncertainSensorNotAccurate, Quality.UNCERTAIN),
            (StatusCodes.BadSensorFailure, Quality.BAD),
            (StatusCodes.BadWaitingForInitialData, Quality.BAD),
        ],
    )
    async def test_a_status_on_the_wire_is_the_quality_of_the_sample(
        self, bench: UaBench, code: int, quality: Quality
    ) -> None:
        await bench.link.connect()
        bench.plant.put("pv", in_status(48.5, code))
        sample = to_sample(bench.loop, await bench.link.read(sample_tags(bench.loop)))
        assert sample.pv_quality is quality
        assert (sample.pv_pct is None) is (quality is Quality.BAD)

    async def test_a_node_that_has_no_good_number_when_we_connect_keeps_its_declared_type(self, bench: UaBench) -> None:
        bench.plant.put("sp", in_status(0.0, StatusCodes.BadWaitingForInitialData))
        await bench.link.connect()
        assert (await bench.link.write({"sp": 61.5})).outcome is WriteOutcome.APPLIED
        assert bench.held("sp") == 61.5

    async def test_a_source_s_time_is_kept_only_where_the_file_says_what_it_is(self, bench: UaBench) -> None:
        await bench.link.connect()
        sampled = datetime.now(UTC) - timedelta(seconds=0.25)
        bench.plant.put(
            "pv",
            ua.DataValue(
                ua.Variant(48.5, ua.VariantType.Float),
                SourceTimestamp=ua.DateTime.fromtimestamp(sampled.timestamp(), UTC),
            ),
        )
        assert (await bench.link.read(["pv"])).readings["pv"].source_s is None
        link = open_link(with_endpoint(bench.loop, source_time_is_sampling=True))
        await link.connect()
        report = await link.read(["pv", "sp"])
        source_s = report.readings["pv"].source_s
        assert source_s is not None
        assert source_s <= report.sent.latest_s - 0.25 + 1e-3
        await link.close()

    async def test_a_source_s_time_that_lies_ahead_of_ours_is_none(self, bench: UaBench) -> None:
        ahead = datetime.now(UTC) + timedelta(seconds=60)
        bench.plant.put(
            "pv",
            ua.DataValue(
                ua.Variant(48.5, ua.VariantType.Float),
                SourceTimestamp=ua.DateTime.fromtimestamp(ahead.timestamp(), UTC),
            ),
        )
        link = open_link(with_endpoint(bench.loop, source_time_is_sampling=True))
        await link.connect()
        assert (await link.read(["pv"])).readings["pv"].source_s is None
        await link.close()

    async def test_a_node_of_whole_numbers_takes_no_fraction_unless_the_file_tells_its_type(
        self, bench: UaBench
    ) -> None:
        bench.plant.place("whole", "ns=2;s=whole", DataType.INT, 50)
        link = open_link(with_tags(bench.loop, {"sp": OpcUaTag("ns=2;s=whole")}))
        await link.connect()
        with pytest.raises(WriteForbidden, match=r'holds whole numbers .*add type = "INT"'):
            await link.write({"sp": 61.5})
        assert (await link.write({"sp": 61.0})).outcome is WriteOutcome.APPLIED
        assert bench.held("whole") == 61
        await link.close()

    async def test_a_type_that_the_node_does_not_have_is_not_written(self, bench: UaBench) -> None:
        link = open_link(with_tags(bench.loop, {"sp": OpcUaTag(node_text("sp"), DataType.LREAL)}))
        await link.connect()
        with pytest.raises(WriteForbidden, match=r"is a LREAL in the file, but .* holds a REAL"):
            await link.write({"sp": 61.0})
        assert bench.plant.requests == []
        await link.close()

    async def test_nodes_are_found_by_path_and_by_the_namespace_s_uri(self, bench: UaBench) -> None:
        tags: dict[str, Tag] = {
            "pv": OpcUaTag("", path="/Pasteuriser/TIC-204/pv", namespace=NAMESPACE),
            "sp": OpcUaTag("", path="/2:Pasteuriser/2:TIC-204/2:sp"),
            "op": OpcUaTag(f"nsu={NAMESPACE};s=TIC-204.op"),
        }
        link = open_link(with_tags(bench.loop, tags))
        await link.connect()
        readings = (await link.read(tuple(tags))).readings
        assert [readings[name].raw for name in tags] == [48.5, 50.0, 40.0]
        await link.close()

    @pytest.mark.parametrize(
        ("tag", "reason"),
        [
            (OpcUaTag("ns=2;s=TIC-999.pv"), "BadNodeIdUnknown"),
            (OpcUaTag("", path="/2:Pasteuriser/2:TIC-999/2:pv"), "nothing lies at /2:Pasteuriser"),
            (OpcUaTag("nsu=urn:nobody;s=pv"), f"no namespace urn:nobody; it has: .*{NAMESPACE}"),
            (OpcUaTag("", path="/Pasteuriser/TIC-204/pv", namespace="urn:nobody"), "no namespace urn:nobody"),
        ],
    )
    async def test_a_tag_without_a_node_is_bad_and_says_why_and_the_others_are_read(
        self, bench: UaBench, tag: OpcUaTag, reason: str
    ) -> None:
        link = open_link(with_tags(bench.loop, {"sp": tag}))
        await link.connect()
        readings = (await link.read(["sp", "op"])).readings
        assert (readings["sp"].raw, readings["sp"].quality) == (None, Quality.BAD)
        assert re.search(reason, readings["sp"].reason)
        assert readings["op"].raw == 40.0
        only_missing = await link.read(["sp"])
        assert only_missing.readings["sp"].quality is Quality.BAD
        with pytest.raises(WriteForbidden):
            await link.write({"sp": 61.0})
        await link.close()

    async def test_a_name_that_leads_to_another_node_after_a_reconnect_ends_it(self, bench: UaBench) -> None:
        """S10: the write list is frozen by node."""
        bench.plant.place("swapped", "ns=2;s=first")
        link = open_link(with_tags(bench.loop, {"sp": OpcUaTag("", path="/2:Pasteuriser/2:swapped")}))
        await link.connect()
        await link.close()
        bench.plant.place("swapped", "ns=2;s=second")
        with pytest.raises(LinkClosed, match=r"now leads to .*second.*check the configuration"):
            await link.connect()
        assert not link.is_connected

    async def test_a_barred_node_is_not_written_whatever_name_leads_to_it(self, bench: UaBench) -> None:
        """S10."""
        barred = with_endpoint(bench.loop, never_written=(f"nsu={NAMESPACE};s=TIC-204.sp",))
        link = open_link(with_tags(barred, {"sp": OpcUaTag("", path="/2:Pasteuriser/2:TIC-204/2:sp")}))
        await link.connect()
        with pytest.raises(WriteForbidden, match="never let write"):
            await link.write({"sp": 61.0})
        assert bench.held("sp") == 50.0
        await link.close()

    async def test_a_password_is_never_sent_without_security(
        self, bench: UaBench, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        monkeypatch.setenv("AUTOTUNE_TEST_PASSWORD", "juice 4!")
        link = open_link(with_endpoint(bench.loop, user="technician", password_from="env:AUTOTUNE_TEST_PASSWORD"))
        with pytest.raises(LinkClosed, match="sent so that others can read it"):
            await link.connect()
        assert b"technician" not in bench.wire.octets_up
        assert b"juice 4!" not in bench.wire.octets_up

    async def test_a_server_that_does_not_offer_what_the_file_wants_is_told_by_what_it_offers(
        self, bench: UaBench, tmp_path: Path
    ) -> None:
        wanted = with_endpoint(bench.loop, security=MessageSecurity.SIGN_AND_ENCRYPT, pki_dir=tmp_path)
        with pytest.raises(LinkClosed, match=r"does not offer Basic256Sha256 with sign and encrypt; it offers: none;"):
            await open_link(wanted).connect()

    async def test_an_expired_certificate_of_our_own_is_not_shown_to_anybody(
        self, bench: UaBench, tmp_path: Path
    ) -> None:
        own = own_certificate(tmp_path)
        own.path.write_bytes(expired_certificate().public_bytes(Encoding.DER))
        secured = with_endpoint(bench.loop, security=MessageSecurity.SIGN_AND_ENCRYPT, pki_dir=tmp_path)
        with pytest.raises(LinkClosed, match=r"our own certificate .* can't be used: it expired on .*move it"):
            await open_link(secured).connect()
        assert bench.wire.octets_up == b""

    async def test_a_closed_link_gives_its_session_back(self, bench: UaBench) -> None:
        await bench.link.connect()
        await bench.link.close()
        await bench.wire.left.wait()
        close_session_request = b"\x01\x00\xd9\x01"  # node id i=473 in four bytes, OPC 10000-6, 5.2.2.9 and annex A.3
        assert bench.wire.octets_up.count(close_session_request) == 1
        assert bench.wire.octets_up.count(b"CLOF") == 1

    async def test_none_of_the_library_s_own_tasks_runs(self, bench: UaBench) -> None:
        await bench.link.connect()
        await bench.link.read(["pv"])
        running = {str(task.get_coro()) for task in asyncio.all_tasks()}
        assert not [task for task in running if "Client." in task or "UaSession." in task]

    async def test_keys_are_renewed_while_every_sample_comes(self, bench: UaBench) -> None:
        link = open_link(with_endpoint(bench.loop, channel_lifetime_s=0.4))
        await link.connect()
        samples = 0
        async with asyncio.timeout(PROMPT_S):
            while bench.wire.octets_up.count(b"OPNF") < 4:  # OPC 10000-6, 7.1.2.2: the first, and three renewals
                assert (await link.read(["pv"])).readings["pv"].raw == 48.5
                samples += 1
                await asyncio.sleep(0.02)
        assert (await link.read(["pv"])).readings["pv"].raw == 48.5
        await link.close()
        assert samples > 10

    async def test_facts_say_type_rights_and_what_a_node_does_not_tell(self, bench: UaBench) -> None:
        await bench.link.connect()
        assert isinstance(bench.link, TellsFacts)
        facts = {fact.name: fact for fact in (await bench.link.facts()).nodes}
        assert (facts["pv"].held, facts["pv"].is_scalar, facts["pv"].is_writable) == (DataType.REAL, True, True)
        assert (facts["mode"].held, facts["pv"].low_eu, facts["pv"].unit_id) == (DataType.DINT, None, None)


async def test_writes_are_split_so_that_the_order_of_what_matters_is_ours() -> None:
    assert split_writes(["sp", "gain", "mode"]) == [["sp"], ["gain"], ["mode"]]
    assert split_writes(["holder_request", "heartbeat", "sequence"]) == [["holder_request", "heartbeat"], ["sequence"]]
    assert split_writes([]) == []


def test_an_answer_that_is_too_short_says_nothing_about_the_rest() -> None:
    outcome, detail = judge_write("opc.tcp://x", {"sp": "ns=2;s=sp", "gain": "ns=2;s=gain"}, [0], [])
    assert outcome is WriteOutcome.NOT_HEARD
    assert detail == "opc.tcp://x answered 1 of 2 writes"


@pytest.mark.parametrize(
    ("security", "token_policy", "readable"),
    [
        (MessageSecurity.SIGN_AND_ENCRYPT, "None", False),
        (MessageSecurity.SIGN_AND_ENCRYPT, "Basic256Sha256", False),
        (MessageSecurity.SIGN, "Basic256Sha256", False),
        (MessageSecurity.SIGN, "None", True),
        (MessageSecurity.SIGN, "", True),
        (MessageSecurity.NONE, "Basic256Sha256", True),  # to a server that nobody has seen the certificate of
        (MessageSecurity.NONE, "None", True),
    ],
)
def test_a_password_goes_out_only_where_nobody_else_can_read_it(
    security: MessageSecurity, token_policy: str, readable: bool
) -> None:
    # OPC 10000-4, 7.41.4: with the policy None the password is sent as it is; OPC 10000-7: the policies' URIs
    uri = f"http://opcfoundation.org/UA/SecurityPolicy#{token_policy}" if token_policy else None
    assert is_readable_by_others(security, uri) is readable


async def test_nobody_at_the_address_is_a_closed_link() -> None:
    link = open_link(in_the_plant(GUARDED, "opc.tcp://127.0.0.1:9/nobody"))
    with pytest.raises(LinkClosed, match=r"opc\.tcp://127\.0\.0\.1:9/nobody: .*check the address"):
        await link.connect()


async def test_a_server_that_accepts_and_says_nothing_is_a_timeout() -> None:
    server = await asyncio.start_server(lambda _reader, _writer: None, "127.0.0.1", 0)
    url = f"opc.tcp://127.0.0.1:{server.sockets[0].getsockname()[1]}"
    link = open_link(in_the_plant(GUARDED, url, 0.05))
    with pytest.raises(LinkTimeout, match=r"within 0\.05 s"):
        await link.connect()
    server.close()


async def test_what_speaks_another_protocol_is_a_closed_link() -> None:
    async def answer(_reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        writer.write(b"HTTP/1.1 400 Bad Request\r\n\r\n" * 4)
        await writer.drain()
        writer.close()

    server = await asyncio.start_server(answer, "127.0.0.1", 0)
    link = open_link(in_the_plant(GUARDED, f"opc.tcp://127.0.0.1:{server.sockets[0].getsockname()[1]}", 1.0))
    with pytest.raises(LinkError):
        await link.connect()
    assert not link.is_connected
    server.close()
    await server.wait_closed()


def in_status(number: float, code: int) -> ua.DataValue:
    """A single with a status."""
    return ua.DataValue(ua.Variant(number, ua.VariantType.Float), ua.StatusCode(ua.UInt32(code)))


def expired_certificate() -> x509.Certificate:
    return certificate(ends=datetime.now(UTC) - timedelta(days=1))


def taken_at(instant: datetime) -> ua.DataValue:
    """A good reading with its source's time."""
    source_time = ua.DateTime.fromtimestamp(instant.timestamp(), UTC)
    return ua.DataValue(ua.Variant(48.5, ua.VariantType.Float), SourceTimestamp=source_time)


def with_endpoint(loop: LoopConfig, **changes: Any) -> LoopConfig:
    """The loop at the same server, reached otherwise."""
    endpoint = loop.controller.endpoint
    assert isinstance(endpoint, OpcUaEndpoint)
    return replace(loop, controller=replace(loop.controller, endpoint=replace(endpoint, **changes)))
