"""One question, one answer: fed in memory and in virtual time."""

import asyncio
import socket
import struct

import pytest
from hypothesis import given
from hypothesis import strategies as st
from pymodbus.pdu import ModbusPDU

from autotune.config.types import RegisterTable
from autotune.errors import LinkClosed, LinkError, LinkTimeout
from autotune.field.modbus.connection import Answer, Connection, next_transaction
from autotune.field.modbus.messages import to_read_pdu, to_write_pdu
from autotune.field.modbus.requests import ReadRequest, WriteCoils, WriteRegisters
from tests.fakes.virtual_time import run_virtual
from tests.field.reference import expected, inputs, octets
from tests.field.transport import MemoryTransport

TIMEOUT_S = 0.5
ANSWER = octets("11 03 06 02 2B 00 00 00 64")


def registers(first: int = 107, count: int = 3) -> ModbusPDU:
    return to_read_pdu(ReadRequest(RegisterTable.HOLDING, first, count, ("pv",)))


def frame(transaction: int, device_and_pdu: bytes, protocol: int = 0) -> bytes:
    return struct.pack(">HHH", transaction, protocol, len(device_and_pdu)) + device_and_pdu


def opened(device_id: int = 17) -> tuple[Connection, MemoryTransport]:
    connection = Connection("10.0.0.5:502 device id 17", device_id, TIMEOUT_S)
    transport = MemoryTransport(connection)
    connection.connection_made(transport)
    return connection, transport


def asked(connection: Connection, question: ModbusPDU) -> "asyncio.Task[Answer]":
    return asyncio.ensure_future(connection.ask(question))


async def fault_of(pieces: list[bytes], question: ModbusPDU) -> LinkError:
    """The fault that these octets cause as an answer; the connection must be gone then."""
    connection, transport = opened()
    asking = asked(connection, question)
    await asyncio.sleep(0)
    for piece in pieces:
        connection.data_received(piece)
    with pytest.raises(LinkError) as caught:
        await asking
    assert transport.is_closing()
    assert not connection.is_open
    return caught.value


def test_the_first_question_is_the_frame_of_the_standard() -> None:
    """ST-MB4."""

    async def main() -> None:
        connection, transport = opened(inputs("ST-MB4")["unit"])
        asking = asked(connection, registers())
        await asyncio.sleep(0)
        assert transport.written == [octets(expected("ST-MB4")["adu"])]
        connection.data_received(frame(1, ANSWER))
        assert (await asking).pdu.registers == [0x022B, 0, 0x64]

    run_virtual(main())


@given(st.lists(st.integers(1, 14), max_size=6))
def test_an_answer_may_come_in_any_pieces(cuts: list[int]) -> None:
    async def main() -> None:
        connection, _ = opened()
        asking = asked(connection, registers())
        await asyncio.sleep(0)
        answer = frame(1, ANSWER)
        ends = sorted({*cuts, len(answer)})
        for begin, end in zip([0, *ends], ends, strict=False):
            assert not asking.done()
            connection.data_received(answer[begin:end])
            await asyncio.sleep(0)
        assert (await asking).pdu.registers == [0x022B, 0, 0x64]
        assert connection.is_open

    run_virtual(main())


def test_transactions_are_counted_so_that_no_answer_fits_two_questions() -> None:
    async def main() -> None:
        connection, transport = opened()
        for transaction in (1, 2, 3):
            asking = asked(connection, registers())
            await asyncio.sleep(0)
            assert transport.written[-1][:2] == struct.pack(">H", transaction)
            connection.data_received(frame(transaction, ANSWER))
            await asking

    run_virtual(main())


def test_transaction_numbers_fill_16_bits_but_for_zero() -> None:
    numbers = [next_transaction(number) for number in range(0x10000)]
    assert sorted(numbers[:-1]) == list(range(1, 0x10000))
    assert numbers[-1] == 1


def test_stamps_are_the_instants_of_the_request_and_of_the_whole_reply() -> None:
    async def main() -> None:
        connection, _ = opened()
        await asyncio.sleep(3.0)
        asking = asked(connection, registers())
        await asyncio.sleep(0.1)
        connection.data_received(frame(1, ANSWER)[:9])
        await asyncio.sleep(0.2)
        connection.data_received(frame(1, ANSWER)[9:])
        await asyncio.sleep(5.0)
        sent = (await asking).sent
        assert (sent.earliest_s, sent.latest_s) == pytest.approx((3.0, 3.3))

    run_virtual(main())


@pytest.mark.parametrize("half", [b"", frame(1, ANSWER)[:3], frame(1, ANSWER)[:10]])
def test_silence_and_half_an_answer_are_missed_at_the_deadline_and_the_socket_is_dropped(half: bytes) -> None:
    """S8."""

    async def main() -> None:
        begun_s = asyncio.get_running_loop().time()
        assert isinstance(await fault_of([half] if half else [], registers()), LinkTimeout)
        assert asyncio.get_running_loop().time() == pytest.approx(begun_s + TIMEOUT_S)

    run_virtual(main())


def test_an_answer_after_the_deadline_is_no_answer_to_anything() -> None:
    async def main() -> None:
        connection, transport = opened()
        with pytest.raises(LinkTimeout, match=r"10\.0\.0\.5:502 device id 17 within 0\.5 s.*check the network"):
            await connection.ask(registers())
        connection.data_received(frame(1, ANSWER))
        with pytest.raises(LinkClosed, match="nothing was sent"):
            await connection.ask(registers())
        assert len(transport.written) == 1

    run_virtual(main())


@pytest.mark.parametrize(
    "received",
    [
        frame(2, ANSWER),  # another transaction
        frame(0, ANSWER),  # no transaction
        frame(1, b"\x12" + ANSWER[1:]),  # another device
        frame(1, ANSWER, protocol=1),
        frame(1, ANSWER) + b"\x00",
        frame(1, ANSWER) * 2,
        frame(1, b"\x11"),
        frame(1, b"\x11" + bytes(300)),
        frame(1, octets("11 04 06 02 2B 00 00 00 64")),  # another function
        frame(1, octets("11 03 04 02 2B 00 00")),  # fewer registers
        frame(1, octets("11 03 08 02 2B 00 00 00 64 00 00")),  # more registers
        frame(1, octets("11 03 06 02 2B 00 00 00")),  # fewer octets than announced
        frame(1, octets("11 03 06 02 2B 00 00 00 64 00")),  # more octets than announced
        frame(1, octets("11 03 05 02 2B 00 00 00")),  # half a register
        frame(1, octets("11 84 02")),  # an exception to another function
        frame(1, octets("11 83")),  # an exception without code
        frame(1, octets("11 83 02 00")),
        frame(1, octets("11 55 00")),  # no function
        b"HTTP/1.1 400 Bad Request\r\n\r\n",
        bytes(8),
    ],
)
def test_what_does_not_fit_the_question_is_not_believed_and_ends_the_connection(received: bytes) -> None:
    async def main() -> None:
        assert isinstance(await fault_of([received], registers()), LinkClosed)

    run_virtual(main())


def test_a_serial_gateway_that_passes_serial_frames_through_is_named() -> None:
    """ST-MB5: the serial form of the same answer ends in a checksum and has no header."""
    serial = next(octets(body + " " + crc) for body, crc in expected("ST-MB5").items() if body.startswith("11 03 06"))

    async def main() -> None:
        assert "no Modbus/TCP frame" in str(await fault_of([serial], registers()))

    run_virtual(main())


@pytest.mark.parametrize(
    ("question", "received"),
    [
        (WriteRegisters(1, (10, 258), ()), "11 10 00 01 00 01"),  # fewer written
        (WriteRegisters(1, (10, 258), ()), "11 10 00 02 00 02"),  # elsewhere
        (WriteRegisters(1, (3,), ()), "11 06 00 01 00 04"),  # another number
        (WriteCoils(172, (True,), ()), "11 05 00 AC 00 00"),
        (WriteCoils(172, (True,), ()), "11 05 00 AC 12 34"),
    ],
)
def test_a_write_whose_echo_differs_is_not_believed(question: WriteRegisters | WriteCoils, received: str) -> None:
    async def main() -> None:
        assert isinstance(await fault_of([frame(1, octets(received))], to_write_pdu(question)), LinkClosed)

    run_virtual(main())


def test_what_comes_unasked_ends_the_connection() -> None:
    async def main() -> None:
        connection, transport = opened()
        connection.data_received(frame(1, ANSWER))
        assert transport.is_closing()
        with pytest.raises(LinkClosed):
            await connection.ask(registers())

    run_virtual(main())


@pytest.mark.parametrize(("cause", "word"), [(None, "closed"), (ConnectionResetError("reset by peer"), "reset")])
def test_a_lost_connection_fails_the_open_question_at_once(cause: Exception | None, word: str) -> None:
    async def main() -> None:
        connection, transport = opened()
        asking = asked(connection, registers())
        await asyncio.sleep(0)
        transport.abort()
        connection.connection_lost(cause)
        with pytest.raises(LinkClosed, match=f"{word} the connection"):
            await asking
        assert asyncio.get_running_loop().time() == 0.0

    run_virtual(main())


@pytest.mark.parametrize("arrives", ["answer", "loss", "nothing"])
def test_a_cancel_is_never_swallowed_even_in_the_same_pass_as_an_answer_or_a_loss(arrives: str) -> None:
    async def main() -> None:
        connection, transport = opened()
        asking = asked(connection, registers())
        await asyncio.sleep(0)
        if arrives == "answer":
            connection.data_received(frame(1, ANSWER))
        elif arrives == "loss":
            connection.connection_lost(None)
        asking.cancel()
        with pytest.raises(asyncio.CancelledError):
            await asking
        assert transport.is_closing()
        assert asyncio.all_tasks() == {asyncio.current_task()}

    run_virtual(main())


def test_a_dropped_socket_throws_away_what_is_unsent_and_the_kernel_gives_up_with_us() -> None:
    """S8: what we have given up must not be delivered later."""

    async def main() -> None:
        connection, transport = opened()
        if hasattr(socket, "TCP_USER_TIMEOUT"):
            assert transport.socket.options[(socket.IPPROTO_TCP, socket.TCP_USER_TIMEOUT)] == 1000 * TIMEOUT_S
        connection.drop()
        connection.drop()
        assert transport.socket.options[(socket.SOL_SOCKET, socket.SO_LINGER)] == struct.pack("ii", 1, 0)
        assert transport.is_closing()

    run_virtual(main())


def test_a_connection_that_was_never_made_asks_nothing_and_can_be_dropped() -> None:
    async def main() -> None:
        connection = Connection("10.0.0.5:502 device id 17", 17, TIMEOUT_S)
        connection.drop()
        with pytest.raises(LinkClosed, match="nothing was sent"):
            await connection.ask(registers())

    run_virtual(main())
