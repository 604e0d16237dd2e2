"""One TCP connection to a Modbus device: one question, one answer, or no connection any more.

pymodbus codes the messages; the conversation is ours, because a control tool can't leave retries,
reconnects and deadlines to a library.  There is no task in here: a request is one future that is
answered, missed or lost, so a cancelled request leaves nothing behind.  Whatever goes wrong, the
socket is dropped at once and what it still held unsent is thrown away, so that no write lands after
we have given it up.
"""

import asyncio
import socket
import struct
from dataclasses import dataclass
from typing import cast

from pymodbus.framer import FramerSocket
from pymodbus.pdu import DecodePDU, ModbusPDU

from autotune.errors import LinkClosed, LinkError, LinkTimeout
from autotune.loop.sample import Stamp

_MBAP = struct.Struct(">HHHB")  # transaction, protocol, length of what follows, device
_LONGEST_PDU = 253
_ABORT_ON_CLOSE = struct.pack("ii", 1, 0)  # SO_LINGER with no time: reset, and discard what is unsent


@dataclass(frozen=True, slots=True)
class Answer:
    """The device's answer, which fits the question, and the span from request to reply (s, loop's clock)."""

    pdu: ModbusPDU
    sent: Stamp


class Connection(asyncio.Protocol):
    """Use as the protocol of ``loop.create_connection``, once; a lost connection is never revived.

    ``device`` names the device in every error.  ``transaction`` is the number of the last question, asked or not:
    each question takes the next one.
    """

    def __init__(self, device: str, device_id: int, timeout_s: float, transaction: int = 0) -> None:
        self._device = device
        self._device_id = device_id
        self._timeout_s = timeout_s
        self._framer = FramerSocket(DecodePDU(False))
        self._transport: asyncio.Transport | None = None
        self._received = b""
        self.transaction = transaction
        self._question: ModbusPDU | None = None
        self._reply: asyncio.Future[tuple[ModbusPDU, float]] | None = None

    @property
    def is_open(self) -> bool:
        """Whether a question can be asked."""
        return self._transport is not None and not self._transport.is_closing()

    async def ask(self, question: ModbusPDU) -> Answer:
        """Send one request and wait for its answer, at most ``timeout_s``; the caller asks one at a time.

        Raises ``LinkClosed`` when the connection is or gets lost or the answer fits no question,
        ``LinkTimeout`` at the deadline; either way, and also when cancelled, the connection is gone.
        """
        if self._transport is None or not self.is_open:
            raise LinkClosed(f"{self._device} is not connected; nothing was sent")
        loop = asyncio.get_running_loop()
        self.transaction = next_transaction(self.transaction)
        question.transaction_id, question.dev_id = self.transaction, self._device_id
        frame = self._framer.buildFrame(question)
        self._question, self._reply = question, loop.create_future()
        sent_s = loop.time()
        self._transport.write(frame)
        deadline = loop.call_at(sent_s + self._timeout_s, self._miss)
        try:
            pdu, replied_s = await self._reply
        except BaseException:
            self.drop()
            if self._reply.done() and not self._reply.cancelled():
                self._reply.exception()  # heard, though a cancel in the same pass came first
            raise
        finally:
            deadline.cancel()
            self._question = self._reply = None
        return Answer(pdu, Stamp(sent_s, replied_s))

    def drop(self) -> None:
        """End the connection now and discard whatever is unsent; may be called again."""
        if self._transport is not None and not self._transport.is_closing():
            self._set_option(socket.SOL_SOCKET, socket.SO_LINGER, _ABORT_ON_CLOSE)
            self._transport.abort()

    def connection_made(self, transport: asyncio.BaseTransport) -> None:
        """Called by the event loop; lets the kernel give up a dead peer as soon as we do, where it can."""
        self._transport = cast("asyncio.Transport", transport)
        if hasattr(socket, "TCP_USER_TIMEOUT"):
            self._set_option(socket.IPPROTO_TCP, socket.TCP_USER_TIMEOUT, max(1, round(1000 * self._timeout_s)))

    def connection_lost(self, exc: Exception | None) -> None:
        """Called by the event loop; an open question fails at once."""
        reason = "reset" if exc is not None else "closed"
        self._fail(
            LinkClosed(f"{self._device} {reason} the connection; check power and its number of free connections")
        )

    def data_received(self, data: bytes) -> None:
        """Called by the event loop; an answer may come in parts, but only what was asked for."""
        self._received += data
        if len(self._received) < _MBAP.size:
            return
        transaction, protocol, length, device_id = _MBAP.unpack_from(self._received)
        if protocol != 0 or not 2 <= length <= 1 + _LONGEST_PDU:
            self._distrust("what came is no Modbus/TCP frame; check that the port speaks Modbus/TCP")
        elif len(self._received) > (end := _MBAP.size - 1 + length):
            self._distrust("more came than one answer; another master or a gateway may mix its answers with ours")
        elif len(self._received) == end:
            octets, self._received = self._received[_MBAP.size :], b""
            self._take(transaction, device_id, octets)

    def _take(self, transaction: int, device_id: int, octets: bytes) -> None:
        question, reply = self._question, self._reply
        if question is None or reply is None or (transaction, device_id) != (question.transaction_id, self._device_id):
            self._distrust("an answer came to no question of ours; a gateway may mix up its masters")
            return
        pdu = self._framer.decoder.decode(octets)
        if pdu is None or not _fits(question, pdu, octets):
            self._distrust(f"the answer {octets.hex(' ')} does not fit the question; check the device's Modbus server")
        elif not reply.done():
            reply.set_result((pdu, asyncio.get_running_loop().time()))

    def _miss(self) -> None:
        self._fail(
            LinkTimeout(
                f"no answer from {self._device} within {self._timeout_s:g} s, the connection was dropped; "
                "check the network, the device id and whether the controller runs"
            )
        )
        self.drop()

    def _distrust(self, why: str) -> None:
        self._received = b""
        self._fail(LinkClosed(f"{self._device}: {why}; the connection was dropped"))
        self.drop()

    def _fail(self, fault: LinkError) -> None:
        if self._reply is not None and not self._reply.done():
            self._reply.set_exception(fault)

    def _set_option(self, level: int, option: int, setting: int | bytes) -> None:
        if self._transport is not None:
            self._transport.get_extra_info("socket").setsockopt(level, option, setting)


def next_transaction(transaction: int) -> int:
    """The number of the next transaction: 1 .. 65535 and round again; 0 is left to those who don't number."""
    return transaction % 0xFFFF + 1


def _fits(question: ModbusPDU, pdu: ModbusPDU, octets: bytes) -> bool:
    """Whether ``pdu``, decoded from ``octets``, answers ``question`` to the last octet."""
    if pdu.isError():
        return pdu.function_code == question.function_code | 0x80 and len(octets) == 2
    if pdu.function_code != question.function_code or pdu.encode() != octets[1:]:
        return False
    if question.function_code in (1, 2):
        return len(pdu.bits) == -(-question.count // 8) * 8
    if question.function_code in (3, 4):
        return len(pdu.registers) == question.count
    return octets[1:] == question.encode()[: len(octets) - 1]  # a write is echoed, without what it wrote to several
