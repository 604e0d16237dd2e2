"""The link over real sockets: the common rules, the octets of the standard, and what the wire can do to it."""

import asyncio
import socket
from collections.abc import AsyncIterator, Callable, Mapping
from contextlib import asynccontextmanager
from dataclasses import replace

import pytest

from autotune.config.types import DataType, LoopConfig, ModbusEndpoint, ModbusTag, RegisterTable
from autotune.errors import LinkClosed, LinkRefused, LinkTimeout, WriteForbidden
from autotune.field import open_link
from autotune.field.back_off import BackOff
from autotune.field.codec import from_words, to_words, width
from autotune.field.link import RawValue, Reading
from autotune.field.modbus.link import ModbusLink
from autotune.field.write_list import Permit, WriteList, build_write_list
from autotune.loop.quality import Quality
from autotune.loop.write import WriteOutcome
from tests.field.link_conformance import PROMPT_S, Trouble, TroubledLinkConformance
from tests.field.loops import ENDPOINT, GUARDED, PLAIN, at_endpoint, holding, with_tags
from tests.field.peer import CLOSES, PROPER, SILENT, UNHEARD, Peer, Reaction, refuses, sends, sends_raw
from tests.field.reference import expected, octets

pytestmark = pytest.mark.socket

PATIENT_S = 600.0
"""A deadline that no test lives to see: what ends sooner was seen by an event."""

TIMEOUT_S = 0.3
"""Long enough that a busy machine answers in time, short enough to wait for silence."""

AT_REST: Mapping[str, RawValue] = {"pv": 75.0, "sp": 72.0, "op": 40.0, "mode": 1, "boot_count": 3, "gain": 1.5}
REACTIONS = {
    Trouble.NONE: PROPER,
    Trouble.SILENT: SILENT,
    Trouble.CLOSED: CLOSES,
    Trouble.REFUSED: refuses(3),
}


def endpoint_of(peer: Peer, **changes: float) -> ModbusEndpoint:
    return replace(ENDPOINT, port=peer.port, **{"request_timeout_s": TIMEOUT_S, **changes})  # type: ignore[arg-type]  # only floats are ever changed


def place_of(loop: LoopConfig, name: str) -> ModbusTag:
    tag = loop.tag(name)
    assert isinstance(tag, ModbusTag)
    return tag


class PeerBench:
    def __init__(self, peer: Peer) -> None:
        self.peer = peer
        self.link = open_link(at_endpoint(GUARDED, endpoint_of(peer)))
        self.heard = peer.heard
        for name, raw in AT_REST.items():
            tag = place_of(GUARDED, name)
            peer.registers[tag.address : tag.address + width(tag)] = to_words(tag, raw)

    def held(self, name: str) -> RawValue:
        tag = place_of(GUARDED, name)
        raw = from_words(tag, self.peer.registers[tag.address : tag.address + width(tag)])
        assert raw is not None
        return raw

    def trouble(self, *troubles: Trouble) -> None:
        self.peer.script.extend(REACTIONS[trouble] for trouble in troubles)

    def hang_up(self) -> None:
        self.peer.hang_up()


@pytest.fixture
async def peer() -> AsyncIterator[Peer]:
    async with Peer() as listening:
        yield listening


class TestModbusLink(TroubledLinkConformance):
    @pytest.fixture
    async def bench(self, peer: Peer) -> AsyncIterator[PeerBench]:
        bench = PeerBench(peer)
        yield bench
        await bench.link.close()


@asynccontextmanager
async def link_to(
    peer: Peer, tags: Mapping[str, ModbusTag], *, permits: Callable[[str], bool] = lambda _name: True, **changes: float
) -> AsyncIterator[ModbusLink]:
    """A connected link to these tags only, all of which may be written in their whole range."""
    allowed = tuple(Permit(name, tag, -1e9, 1e9, (True, False)) for name, tag in tags.items() if permits(name))
    link = ModbusLink(endpoint_of(peer, **changes), tuple(tags.items()), WriteList("TIC-204", allowed))
    await link.connect()
    try:
        yield link
    finally:
        await link.close()


def tags_from(table: RegisterTable, first: int, kinds: list[DataType]) -> dict[str, ModbusTag]:
    return {f"t{first + at}": ModbusTag(table, first + at, kind) for at, kind in enumerate(kinds)}


@pytest.mark.parametrize(
    ("function", "table", "first", "count", "raws"),
    [
        ("FC01", RegisterTable.COIL, 0x13, 19, [1, 0, 1, 1, 0, 0, 1, 1, 1, 1, 0, 1, 0, 1, 1, 0, 1, 0, 1]),
        (
            "FC02",
            RegisterTable.DISCRETE,
            0xC4,
            22,
            [0, 0, 1, 1, 0, 1, 0, 1, 1, 1, 0, 1, 1, 0, 1, 1, 1, 0, 1, 0, 1, 1],
        ),
        ("FC03", RegisterTable.HOLDING, 0x6B, 3, [0x022B, 0, 0x64]),
        ("FC04", RegisterTable.INPUT, 8, 1, [10]),
    ],
)
async def test_reads_ask_in_the_standards_octets_and_understand_its_answers(
    peer: Peer, function: str, table: RegisterTable, first: int, count: int, raws: list[int]
) -> None:
    """ST-MB1; the bits are listed in the specification's text, lowest address first."""
    asks, answers = (octets(pdu) for pdu in expected("ST-MB1")[function])
    kind = DataType.BOOL if table in (RegisterTable.COIL, RegisterTable.DISCRETE) else DataType.UINT
    tags = tags_from(table, first, [kind] * count)
    peer.script.append(sends(answers))
    async with link_to(peer, tags) as link:
        report = await link.read(tuple(tags))
    assert peer.pdus == [asks]
    assert [reading.raw for reading in report.readings.values()] == raws


@pytest.mark.parametrize(
    ("function", "tags", "raws"),
    [
        ("FC05", {"coil": ModbusTag(RegisterTable.COIL, 172, DataType.BOOL)}, [True]),
        ("FC06", {"one": holding(1, DataType.UINT)}, [3]),
        (
            "FC15",
            tags_from(RegisterTable.COIL, 0x13, [DataType.BOOL] * 10),
            [True, False, True, True, False, False, True, True, True, False],
        ),
        ("FC16", {"a": holding(1, DataType.UINT), "b": holding(2, DataType.UINT)}, [10, 258]),
    ],
)
async def test_writes_are_the_standards_octets_and_its_answer_is_applied(
    peer: Peer, function: str, tags: dict[str, ModbusTag], raws: list[RawValue]
) -> None:
    """ST-MB1."""
    asks, answers = (octets(pdu) for pdu in expected("ST-MB1")[function])
    peer.script.append(sends(answers))
    async with link_to(peer, tags) as link:
        report = await link.write(dict(zip(tags, raws, strict=True)))
    assert peer.pdus == [asks]
    assert report.outcome is WriteOutcome.APPLIED


@pytest.mark.parametrize("raw", [True, False])
async def test_a_bit_of_a_register_is_set_by_a_mask_that_spares_the_others(peer: Peer, raw: bool) -> None:
    """ST-MB1 and ST-MB6: function 22 makes (current AND and) OR (or AND NOT and)."""
    mask_example = octets(expected("ST-MB1")["FC22"][0])
    peer.registers[4] = 0x12
    async with link_to(peer, {"flag": replace(holding(4, DataType.UINT), bit=5)}) as link:
        report = await link.write({"flag": raw})
        assert (await link.read(["flag"])).readings["flag"].raw is raw
    assert report.outcome is WriteOutcome.APPLIED
    assert peer.pdus[0][:3] == mask_example[:3]
    assert peer.pdus[0][3:] == octets("FF DF 00 20") if raw else octets("FF DF 00 00")
    assert peer.registers[4] == (0x32 if raw else 0x12)


async def test_the_peer_masks_as_the_standard_computes(peer: Peer) -> None:
    """ST-MB6: 12 with and F2, or 25 makes 17; checks the other end of these tests."""
    peer.registers[4] = 0x12
    reader, writer = await asyncio.open_connection("127.0.0.1", peer.port)
    asks, answers = (octets(pdu) for pdu in expected("ST-MB1")["FC22"])
    writer.write(octets("00 01 00 00 00 08 11") + asks)
    assert await reader.readexactly(14) == octets("00 01 00 00 00 08 11") + answers
    writer.close()
    await writer.wait_closed()
    assert peer.registers[4] == int(expected("ST-MB6")["result"], 16)


async def test_a_refused_read_says_in_words_where_and_why(peer: Peer) -> None:
    """ST-MB3."""
    peer.script.append(sends(octets(expected("ST-MB3")["reply"])))
    async with link_to(peer, {"pv": holding(0x6B, DataType.REAL)}) as link:
        with pytest.raises(LinkRefused) as caught:
            await link.read(["pv"])
    words = str(caught.value)
    for part in (f"127.0.0.1:{peer.port}", "device id 17", "exception 02h", "illegal data address", "pv"):
        assert part in words
    assert "holding 107 .. 108 counted from 0, 108 .. 109 counted from 1" in words
    assert "counts from 0 or from 1" in words


@pytest.mark.parametrize(
    ("code", "word", "outcome"),
    [
        (0x01, "illegal function", WriteOutcome.REFUSED),
        (0x02, "illegal data address", WriteOutcome.REFUSED),
        (0x03, "illegal data value", WriteOutcome.REFUSED),
        (0x04, "server device failure", WriteOutcome.NOT_HEARD),
        (0x05, "acknowledge", WriteOutcome.NOT_HEARD),
        (0x06, "busy", WriteOutcome.REFUSED),
        (0x07, "negative acknowledge", WriteOutcome.NOT_HEARD),
        (0x08, "memory parity", WriteOutcome.NOT_HEARD),
        (0x0A, "gateway path unavailable", WriteOutcome.REFUSED),
        (0x0B, "failed to respond", WriteOutcome.NOT_HEARD),
        (0x63, "does not define", WriteOutcome.NOT_HEARD),
    ],
)
async def test_an_exception_to_a_write_is_a_refusal_only_where_surely_nothing_changed(
    peer: Peer, code: int, word: str, outcome: WriteOutcome
) -> None:
    """ST-MB3: a device that failed midway, is still at it or answered its gateway too late may have written."""
    peer.script.append(refuses(code))
    async with link_to(peer, {"sp": holding(2, DataType.REAL)}) as link:
        report = await link.write({"sp": 61.0})
        assert link.is_connected
    assert report.outcome is outcome
    assert word in report.detail
    assert f"{code:02X}h" in report.detail
    assert "holding 2 .. 3 counted from 0" in report.detail


async def test_a_refused_write_of_coils_names_them(peer: Peer) -> None:
    peer.script.append(refuses(2))
    async with link_to(peer, tags_from(RegisterTable.COIL, 3, [DataType.BOOL] * 2)) as link:
        report = await link.write({"t3": True, "t4": False})
    assert "t3, t4: coil 3 .. 4 counted from 0, 4 .. 5 counted from 1" in report.detail


async def test_a_device_without_mask_writes_gets_advice(peer: Peer) -> None:
    peer.script.append(refuses(1))
    async with link_to(peer, {"flag": replace(holding(4, DataType.UINT), bit=5)}) as link:
        report = await link.write({"flag": True})
    assert report.outcome is WriteOutcome.REFUSED
    assert "function 22" in report.detail


async def test_a_hole_between_registers_is_read_over_only_as_far_as_the_file_allows(peer: Peer) -> None:
    tags = {"a": holding(0, DataType.UINT), "b": holding(30, DataType.UINT)}
    async with link_to(peer, tags) as link:
        await link.read(["a", "b"])
    async with link_to(peer, tags, read_gap_registers=0) as link:
        peer.registers[30] = 7
        assert (await link.read(["b", "a"])).readings == {
            "b": Reading(7, Quality.GOOD),
            "a": Reading(0, Quality.GOOD),
        }
    assert [len(peer.frames), peer.pdus[0]] == [3, octets("03 00 00 00 1F")]
    peer.script.append(refuses(2))
    async with link_to(peer, tags) as link:
        with pytest.raises(LinkRefused, match="read_gap_registers = 0"):
            await link.read(["a", "b"])


async def test_an_answer_in_pieces_is_one_answer(peer: Peer) -> None:
    peer.registers[0] = 7
    peer.script.append(Reaction(lambda _request, answer: [bytes((octet,)) for octet in answer]))
    async with link_to(peer, {"a": holding(0, DataType.UINT)}) as link:
        assert (await link.read(["a"])).readings["a"].raw == 7


@pytest.mark.parametrize("reaction", [sends_raw(b"\x00\x01\x00\x00\x00\x05\x11"), SILENT, UNHEARD])
async def test_half_an_answer_and_none_are_missed_at_the_requests_own_deadline(peer: Peer, reaction: Reaction) -> None:
    peer.script.append(reaction)
    async with link_to(peer, {"a": holding(0, DataType.UINT)}) as link:
        with pytest.raises(LinkTimeout, match="a: holding 0 counted from 0, 1 counted from 1"):
            await link.read(["a"])
        assert not link.is_connected
    assert await peer.was_reset.get()


@pytest.mark.parametrize("reaction", [sends_raw(b"SSH-2.0-server\r\n"), sends(b"\x03\x02\x00"), CLOSES])
async def test_garbage_and_a_closed_peer_are_seen_at_once(peer: Peer, reaction: Reaction) -> None:
    peer.script.append(reaction)
    async with (
        asyncio.timeout(PROMPT_S),
        link_to(peer, {"a": holding(0, DataType.UINT)}, request_timeout_s=PATIENT_S) as link,
    ):
        with pytest.raises(LinkClosed):
            await link.read(["a"])
        assert not link.is_connected


async def test_an_answer_that_comes_after_its_deadline_never_answers_the_next_request(peer: Peer) -> None:
    """S8: the late answer goes to a connection that is gone."""
    late: list[bytes] = []

    def keep(_request: bytes, answer: bytes) -> list[bytes]:
        late.append(answer)
        return []

    peer.registers[0] = 7
    peer.script.append(Reaction(keep))
    async with link_to(peer, {"a": holding(0, DataType.UINT)}) as link:
        with pytest.raises(LinkTimeout):
            await link.read(["a"])
        peer.registers[0] = 8
        peer.script.append(Reaction(lambda _request, answer: [*late, answer]))
        await link.connect()
        with pytest.raises(LinkClosed):  # both carry transaction 1: more than one answer is not believed
            await link.read(["a"])
        await link.connect()
        assert (await link.read(["a"])).readings["a"].raw == 8


async def test_nobody_listening_is_a_closed_link_that_names_the_address() -> None:
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        port = free.getsockname()[1]
        link = open_link(at_endpoint(PLAIN, replace(ENDPOINT, port=port, request_timeout_s=PROMPT_S)))
        with pytest.raises(LinkClosed, match=f"127.0.0.1:{port} device id 17.*check the address, the port"):
            await link.connect()
        assert not link.is_connected


async def test_a_controller_that_lets_nobody_in_is_a_timeout() -> None:
    """A full queue of a listening socket: the handshake is never answered."""
    with socket.socket() as full, socket.socket() as waiting:
        full.bind(("127.0.0.1", 0))
        full.listen(0)
        waiting.connect(full.getsockname())
        link = open_link(at_endpoint(PLAIN, replace(ENDPOINT, port=full.getsockname()[1])))
        with pytest.raises(LinkTimeout, match="power"):
            await link.connect()
        assert not link.is_connected


async def test_connections_keep_their_gap(peer: Peer) -> None:
    now_s = asyncio.get_running_loop().time
    begun_s = now_s()
    async with link_to(peer, {"a": holding(0, DataType.UINT)}, connect_gap_s=0.02) as link:
        await link.connect()
        assert now_s() >= begun_s + 0.0199
        await link.connect()
        assert now_s() >= begun_s + 0.0599
        await link.read(["a"])


async def test_only_an_answered_request_shortens_the_gap(peer: Peer) -> None:
    back_off = BackOff(1.0)
    link = ModbusLink(endpoint_of(peer), [("a", holding(0, DataType.UINT))], WriteList("TIC-204", ()), back_off)
    await link.connect()
    peer.script.append(CLOSES)
    with pytest.raises(LinkClosed):
        await link.read(["a"])
    back_off.attempted(0.0)
    assert back_off.wait_s(0.0) == 2.0
    await link.connect()
    await link.read(["a"])
    back_off.attempted(0.0)
    assert back_off.wait_s(0.0) == 1.0
    await link.close()


async def test_a_fresh_connection_drops_the_former_one(peer: Peer) -> None:
    async with link_to(peer, {"a": holding(0, DataType.UINT)}) as link:
        await link.connect()
        assert await peer.was_reset.get()
        await link.read(["a"])


async def test_an_answer_that_a_gateway_still_owes_to_the_former_connection_is_not_believed(peer: Peer) -> None:
    async with link_to(peer, {"a": holding(0, DataType.UINT)}) as link:
        peer.script.append(SILENT)
        with pytest.raises(LinkTimeout):
            await link.read(["a"])
        owed = peer.frames[0][:4] + octets("00 05 11 03 02 00 07")
        peer.script.append(sends_raw(owed))
        await link.connect()
        with pytest.raises(LinkClosed, match="no question of ours"):
            await link.read(["a"])
        assert [frame[:2] for frame in peer.frames] == [b"\0\1", b"\0\2"]


async def test_a_cancelled_connect_leaves_the_link_closed(peer: Peer) -> None:
    link = open_link(at_endpoint(PLAIN, endpoint_of(peer, connect_gap_s=PATIENT_S)))
    await link.connect()
    connecting = asyncio.ensure_future(link.connect())
    assert not await peer.was_reset.get() or not link.is_connected
    connecting.cancel()
    with pytest.raises(asyncio.CancelledError):
        await connecting
    assert not link.is_connected


async def test_a_bit_is_written_only_as_a_mask_and_an_unlisted_tag_not_at_all(peer: Peer) -> None:
    """S10."""
    tags = {"op": holding(4, DataType.REAL), "other": holding(6, DataType.REAL)}
    async with link_to(peer, tags, permits=lambda name: name == "op") as link:
        with pytest.raises(WriteForbidden, match="'other' is not on the write list"):
            await link.write({"op": 40.0, "other": 1.0})
    assert peer.frames == []


async def test_a_write_of_nothing_is_applied_and_a_read_of_nothing_is_empty(peer: Peer) -> None:
    async with link_to(peer, {}) as link:
        assert (await link.write({})).outcome is WriteOutcome.APPLIED
        assert (await link.read([])).readings == {}
    assert peer.frames == []


async def test_all_tables_and_types_of_one_loop_are_read_together(peer: Peer) -> None:
    tags = {
        "pv": ModbusTag(RegisterTable.INPUT, 10, DataType.INT, scale=0.1),
        "flag": replace(holding(5, DataType.UINT), bit=15),
        "coil": ModbusTag(RegisterTable.COIL, 3, DataType.BOOL),
        "pump": ModbusTag(RegisterTable.DISCRETE, 99, DataType.BOOL),
        "nan": holding(20, DataType.REAL),
    }
    peer.input_registers[10] = 0xFFFE
    peer.registers[5] = 0x8000
    peer.registers[20] = 0x7FC0
    peer.discretes[99] = True
    async with link_to(peer, tags) as link:
        readings = (await link.read(tuple(tags))).readings
    assert {name: reading.raw for name, reading in readings.items()} == {
        "pv": -2,
        "flag": True,
        "coil": False,
        "pump": True,
        "nan": None,
    }
    assert readings["nan"].quality is Quality.BAD
    assert len(peer.frames) == 4


async def test_the_link_of_a_loop_writes_by_the_loops_own_list(peer: Peer) -> None:
    loop = with_tags(at_endpoint(PLAIN, endpoint_of(peer)), {})
    link = open_link(loop)
    await link.connect()
    with pytest.raises(WriteForbidden):
        await link.write({"op": loop.limits.op_high_pct + 0.1})
    assert (await link.write({"op": loop.limits.op_high_pct})).outcome is WriteOutcome.APPLIED
    assert {permit.name for permit in build_write_list(loop).permits} >= {"op"}
    await link.close()
