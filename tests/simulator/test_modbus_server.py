"""The wire, byte by byte: what a client may send, and how, and what comes back."""

import asyncio
import inspect
import json
import struct
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager, suppress
from pathlib import Path

import pytest
from pymodbus.client import AsyncModbusTcpClient
from pymodbus.pdu import ModbusPDU
from pymodbus.server import ModbusTcpServer
from pymodbus.server.requesthandler import ServerRequestHandler

from simulator.block import Mode
from simulator.modbus_server import PlantServer
from tests.simulator.conftest import Served

pytestmark = pytest.mark.socket
CHECKS = {
    check["id"]: check
    for check in json.loads((Path(__file__).parents[1] / "reference" / "checks.json").read_text(encoding="utf-8"))
}
UNIT = 17  # the unit of the standard's example


def adu(transaction: int, pdu: str, unit: int = UNIT) -> bytes:
    body = bytes.fromhex(pdu)
    return struct.pack(">HHHB", transaction, 0, len(body) + 1, unit) + body


class Wire:
    """A raw socket."""

    def __init__(self, reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        self.reader = reader
        self.writer = writer

    async def send(self, *pieces: bytes) -> None:
        """Send the pieces one by one, each seen by the server before the next."""
        for piece in pieces:
            self.writer.write(piece)
            await self.writer.drain()
            for _ in range(5):
                await asyncio.sleep(0)

    async def answer(self) -> tuple[int, int, bytes]:
        """The next answer: transaction, unit, PDU."""
        head = await asyncio.wait_for(self.reader.readexactly(7), 5.0)
        transaction, protocol, length, unit = struct.unpack(">HHHB", head)
        assert protocol == 0
        return transaction, unit, await asyncio.wait_for(self.reader.readexactly(length - 1), 5.0)

    async def ask(self, pdu: str, unit: int = UNIT) -> str:
        await self.send(adu(1, pdu, unit))
        transaction, answered_unit, answer = await self.answer()
        assert (transaction, answered_unit) == (1, unit)
        return answer.hex(" ").upper()


@asynccontextmanager
async def connected(served: Served) -> AsyncIterator[Wire]:
    reader, writer = await asyncio.open_connection("127.0.0.1", served.server.port)
    try:
        yield Wire(reader, writer)
    finally:
        writer.close()
        with suppress(ConnectionError):
            await writer.wait_closed()


@pytest.fixture
async def wire(served: Served) -> AsyncIterator[Wire]:
    async with connected(served) as opened:
        yield opened


async def test_the_standards_own_example_frame_is_answered(wire: Wire) -> None:
    # MODBUS Application Protocol V1.1b3, section 6.3, as a TCP frame: 3 registers from 6Bh.  107 = loop 1, status.
    frame = bytes.fromhex(CHECKS["ST-MB4"]["expected"]["adu"])
    await wire.send(frame)
    transaction, unit, answer = await wire.answer()
    assert (transaction, unit) == (1, UNIT)
    assert answer == bytes.fromhex("03 06 0000 0000 0000")


async def test_pipelined_requests_are_all_answered_in_order_under_their_own_numbers(served: Served, wire: Wire) -> None:
    requests = [adu(100 + n, f"03 {n:04X} 0001") for n in range(60)]
    await wire.send(b"".join(requests))
    registers = [(await wire.answer()) for _ in requests]
    assert [answer[0] for answer in registers] == [100 + n for n in range(60)]
    words = [int.from_bytes(answer[2][2:], "big") for answer in registers]
    async with connected(served) as other:
        whole = bytes.fromhex(await other.ask("03 0000 003C"))
    assert words == list(struct.unpack(">60H", whole[2:]))


async def test_a_request_may_arrive_byte_by_byte_while_others_are_answered(wire: Wire) -> None:
    first, second = adu(1, "03 0006 0001"), adu(2, "03 000A 0001")
    stream = first + second + first
    await wire.send(*(stream[n : n + 1] for n in range(len(stream))))
    assert [(await wire.answer())[0] for _ in range(3)] == [1, 2, 1]


@pytest.mark.parametrize("cut", range(1, 24))
async def test_two_requests_may_be_cut_anywhere(wire: Wire, cut: int) -> None:
    stream = adu(1, "03 0006 0001") + adu(2, "03 000A 0001")
    await wire.send(stream[:cut], stream[cut:])
    assert await wire.answer() == (1, UNIT, bytes.fromhex("03 02 0001"))
    assert await wire.answer() == (2, UNIT, bytes.fromhex("03 02 0001"))


async def test_an_answer_that_is_late_keeps_the_number_of_its_own_request(served: Served, wire: Wire) -> None:
    served.wire.answer_delay_s = 0.05
    # The second comes while the first still waits for its answer, as after a client's own timeout.
    await wire.send(adu(7, "03 0006 0001"), adu(8, "03 0032 0002"))
    assert await wire.answer() == (7, UNIT, bytes.fromhex("03 02 0001"))
    assert await wire.answer() == (8, UNIT, bytes.fromhex("03 04 0001 0001"))


async def test_many_clients_are_served_side_by_side(served: Served) -> None:
    async def one(number: int) -> str:
        async with connected(served) as own:
            return await own.ask(f"03 {100 * number + 6:04X} 0001")

    assert await asyncio.gather(*(one(number) for number in range(6))) == [
        *["03 02 00 01"] * 5,
        "03 02 00 02",  # TIC-311 is in cascade
    ]


@pytest.mark.parametrize(
    ("request_", "answer"),
    [
        # address beyond the last loop: exception 2, the reply of ST-MB3
        ("03 0258 0001", "83 02"),
        ("03 0000 0000", "83 03"),  # 1 to 125 registers, V1.1b3 section 6.3
        ("03 0000 007E", "83 03"),
        ("03 0000", "83 03"),
        ("04 0006 0001", "04 02 00 01"),
        ("01 0000 0000", "81 03"),
        ("01 0000 07D1", "81 03"),  # 1 to 2000 coils, section 6.1
        ("02 000A 0002", "02 01 03"),
        ("01 000A 0002", "01 01 03"),
        ("02 0258 0001", "82 02"),
        ("05 005A FF00", "05 00 5A FF 00"),
        ("05 005A 0000", "05 00 5A 00 00"),
        ("05 005A 1234", "85 03"),  # only FF00 and 0000, section 6.5
        ("05 0000 FF00", "85 02"),
        ("06 0006 0000", "06 00 06 00 00"),
        ("06 0006 0007", "86 03"),
        ("06 0000 0001", "86 02"),
        ("0F 005A 000A 02 CD01", "0F 00 5A 00 0A"),
        ("0F 005A 000A 01 CD", "8F 03"),
        ("0F 0059 0002 01 03", "8F 02"),
        ("0F 005A 07B1 F7" + "00" * 247, "8F 03"),  # 1 to 1968 coils, section 6.11
        ("10 0020 0001 02 0007", "10 00 20 00 01"),
        ("10 0020 0002 02 0007", "90 03"),
        ("10 0020 0000 00", "90 03"),
        ("10 0006 0002 04 0000 0000", "90 02"),
        ("17 0006 0001 0020 0001 02 0009", "17 02 00 01"),
        ("17 0020 0001 0020 0001 02 0009", "17 02 00 09"),  # the write comes first, section 6.17
        ("17 0006 0001 0000 0001 02 0009", "97 02"),
        ("16 0000 00F2 0025", "96 02"),
        ("16 0020 00F2", "96 03"),
        ("08 0000 1234", "88 01"),
        ("2B 0E 01 00", "AB 01"),
        ("41 00", "C1 01"),
        ("83 02", "83 01"),
    ],
)
async def test_every_function_answers_as_the_standard_says(wire: Wire, request_: str, answer: str) -> None:
    assert await wire.ask(request_) == answer


async def test_mask_write_does_the_standards_arithmetic(wire: Wire) -> None:
    check = CHECKS["ST-MB6"]
    await wire.ask(f"06 0020 00{check['inputs']['cur']}")
    masks = f"00{check['inputs']['and_']} 00{check['inputs']['or_']}"
    assert await wire.ask(f"16 0020 {masks}") == f"16 00 20 {masks[:2]} {masks[2:4]} {masks[5:7]} {masks[7:]}"
    assert await wire.ask("03 0020 0001") == f"03 02 00 {check['expected']['result']}"


async def test_another_unit_is_a_gateway_target_that_does_not_respond(wire: Wire) -> None:
    assert await wire.ask("03 0000 0001", unit=18) == "83 0B"
    assert await wire.ask("06 0006 0000", unit=0) == "86 0B"


async def test_an_output_written_in_automatic_is_acknowledged_and_ignored(served: Served, wire: Wire) -> None:
    assert await wire.ask("10 0004 0002 04 41200000") == "10 00 04 00 02"
    assert served.plc.loops["TIC-204"].block.op_pct != 10.0
    await wire.ask("06 0006 0000")
    await wire.ask("10 0004 0002 04 41200000")
    assert served.plc.loops["TIC-204"].block.op_pct == 10.0


@pytest.mark.parametrize("garbage", ["000100010006110300000001", "0001000000011103", "00010000FFFF1103"])
async def test_a_stream_that_is_no_modbus_ends_the_connection(served: Served, wire: Wire, garbage: str) -> None:
    await wire.send(bytes.fromhex(garbage))
    with pytest.raises((ConnectionError, asyncio.IncompleteReadError)):
        await wire.answer()
    async with connected(served) as other:
        assert await other.ask("03 0006 0001") == "03 02 00 01"


async def test_a_dropped_request_is_never_executed_and_a_dropped_answer_was(served: Served, wire: Wire) -> None:
    mailbox = served.plc.loops["TIC-204"].mailbox
    served.wire.drop_requests = 1
    await wire.send(adu(1, "06 0020 0005"), adu(2, "03 0020 0001"))
    assert await wire.answer() == (2, UNIT, bytes.fromhex("03 02 0000"))
    served.wire.drop_answers = 1
    await wire.send(adu(2, "06 0020 0006"))
    await wire.send(adu(3, "03 0020 0001"))
    assert await wire.answer() == (3, UNIT, bytes.fromhex("03 02 0006"))
    assert mailbox.heartbeat == 6


async def test_half_a_frame_is_half_a_frame(served: Served, wire: Wire) -> None:
    served.wire.half_answers = 1
    await wire.send(adu(1, "03 0006 0001"))
    assert await asyncio.wait_for(wire.reader.readexactly(5), 5.0) == adu(1, "03 02 0001")[:5]
    await wire.send(adu(2, "03 0006 0001"))
    assert await wire.answer() == (2, UNIT, bytes.fromhex("03 02 0001"))


async def test_a_late_request_is_executed_even_when_its_client_has_gone(served: Served) -> None:
    served.wire.request_delay_s = 0.05
    mailbox = served.plc.loops["TIC-204"].mailbox
    async with connected(served) as leaving:
        await leaving.send(adu(1, "06 0020 0005"))
        while not served.server.answering:  # noqa: ASYNC110 - the connection is taken in its own time
            await asyncio.sleep(0)
        (still_answering,) = served.server.answering
        assert mailbox.heartbeat == 0
    await asyncio.wait_for(still_answering, 5.0)
    assert mailbox.heartbeat == 5


async def test_exceptions_can_be_ordered_for_all_or_for_one_function(served: Served, wire: Wire) -> None:
    served.wire.exceptions, served.wire.exception_code = -1, 6
    assert await wire.ask("03 0006 0001") == "83 06"
    served.wire.exception_function = 16
    assert await wire.ask("03 0006 0001") == "03 02 00 01"
    assert await wire.ask("10 0020 0001 02 0007") == "90 06"
    served.wire.clear()
    assert await wire.ask("10 0020 0001 02 0007") == "10 00 20 00 01"


async def test_writes_that_touch_a_barred_register_are_refused(served: Served, wire: Wire) -> None:
    served.wire.refused_addresses.add(42)
    assert await wire.ask("10 0028 0004 08 3F800000 40A00000") == "90 02"
    assert await wire.ask("10 0028 0002 04 3F800000") == "10 00 28 00 02"


async def test_connections_can_be_reset_and_new_ones_made(served: Served, wire: Wire) -> None:
    await wire.ask("03 0006 0001")
    served.wire.close_requests += 1
    served.server.follow_closings()
    with pytest.raises((ConnectionError, asyncio.IncompleteReadError)):
        await wire.answer()
    served.server.follow_closings()
    async with connected(served) as other:
        assert await other.ask("03 0006 0001") == "03 02 00 01"


async def test_the_usual_client_reads_writes_and_sees_refusals(served: Served) -> None:
    client = AsyncModbusTcpClient("127.0.0.1", port=served.server.port, timeout=2, retries=0)
    assert await client.connect()
    try:
        await client.write_register(6, Mode.MAN, device_id=UNIT)
        words = client.convert_to_registers(33.25, client.DATATYPE.FLOAT32)
        assert not (await client.write_registers(4, words, device_id=UNIT)).isError()
        answer = await client.read_holding_registers(4, count=2, device_id=UNIT)
        assert client.convert_from_registers(answer.registers, client.DATATYPE.FLOAT32) == 33.25
        assert (await client.read_input_registers(62, count=1, device_id=UNIT)).registers == [3325]
        assert (await client.read_discrete_inputs(10, count=2, device_id=UNIT)).bits[:2] == [True, True]
        refused = await client.write_register(0, 1, device_id=UNIT)
        assert refused.isError()
        assert refused.exception_code == 2
    finally:
        client.close()
    assert served.plc.loops["TIC-204"].block.op_pct == 33.25


async def test_a_port_that_is_taken_is_an_error(served: Served) -> None:
    second = PlantServer(
        served.server.registers, served.wire, device_id=UNIT, host="127.0.0.1", port=served.server.port
    )
    with pytest.raises(RuntimeError):
        _ = second.port
    with pytest.raises(RuntimeError):
        await second.start()


def test_pymodbus_still_has_the_inner_names_that_the_server_builds_on() -> None:
    assert "addr" in inspect.signature(ServerRequestHandler.callback_data).parameters
    assert list(inspect.signature(ServerRequestHandler.callback_disconnected).parameters) == ["self", "exc"]
    assert list(inspect.signature(ServerRequestHandler.callback_connected).parameters) == ["self"]
    assert list(inspect.signature(ServerRequestHandler.__init__).parameters)[1:] == [
        "owner",
        "trace_packet",
        "trace_pdu",
        "trace_connect",
    ]
    assert list(inspect.signature(ModbusTcpServer.callback_new_connection).parameters) == ["self"]
    assert list(inspect.signature(ModbusPDU.datastore_update).parameters) == ["self", "context", "device_id"]


async def test_pymodbus_still_keeps_what_the_server_reaches_for(served: Served) -> None:
    for name in ("context", "decoder", "transport", "active_connections", "trace_packet", "trace_pdu", "trace_connect"):
        assert hasattr(served.server, name), name
    async with connected(served) as own:
        await own.ask("03 0006 0001")
        (connection,) = served.server.connections()
        assert connection.transport is not None
        assert connection.max_buffer_size == 1 << 20
        assert callable(connection.framer.buildFrame)
        assert connection.recv_buffer == b""
