"""The Modbus/TCP server of the soft plant, on pymodbus.

pymodbus 3.16 keeps one "last request" per connection, so that a request which arrives early is answered
under a foreign transaction number or not at all.  Here each connection is a queue: frames are cut from the byte
stream by their own length and answered one after the other, each under its own number, however they arrive.
The wire's faults live here too.

pymodbus names used beyond its public interface (each has a test): ``ModbusTcpServer.callback_new_connection``,
``ServerRequestHandler.callback_connected``, ``callback_disconnected``, ``callback_data``, ``max_buffer_size``;
``server.context``, ``server.decoder``, ``server.transport``, ``framer.buildFrame``, ``ModbusPDU.datastore_update``.
"""

import asyncio
import contextlib
from collections.abc import Sequence
from typing import cast

from pymodbus.constants import ExcCodes
from pymodbus.datastore import ModbusServerContext
from pymodbus.pdu import ExceptionResponse, ModbusPDU
from pymodbus.server import ModbusTcpServer
from pymodbus.server.requesthandler import ServerRequestHandler
from pymodbus.simulator import DataType, SimData, SimDevice

from simulator.faults import WireFaults
from simulator.loop import WriteRefused
from simulator.registers import AddressRefused, Registers

MBAP_SIZE = 7
LONGEST_PDU = 253
WRITING = (5, 6, 15, 16, 22, 23)
FUNCTIONS = (1, 2, 3, 4, *WRITING)
COILS_WRITTEN_AT_MOST = 1968
"""MODBUS Application Protocol V1.1b3, section 6.11 (7B0h)."""
RECEIVE_BUFFER_BYTES = 1 << 20


class PlantServer(ModbusTcpServer):
    """Serves ``registers`` under ``device_id``; any other device is answered by exception 0Bh."""

    def __init__(
        self, registers: Registers, wire: WireFaults, *, device_id: int, host: str = "127.0.0.1", port: int = 0
    ) -> None:
        unused = SimDevice(id=device_id, simdata=[SimData(0, count=1, datatype=DataType.REGISTERS)])
        super().__init__(unused, address=(host, port))
        self.wire = wire
        self.registers = registers
        self.device_id = device_id
        # The requests only ask the context to get and set; ours does that on the live plant.
        self.context: ModbusServerContext = cast("ModbusServerContext", _PlantContext(registers, wire))
        self.answering: set[asyncio.Task[None]] = set()
        self._closings = wire.close_requests

    @property
    def port(self) -> int:
        """The port that is listened on; raises ``RuntimeError`` before ``start``."""
        if self.transport is None:
            raise RuntimeError("the server isn't listening")
        return int(cast("asyncio.Server", self.transport).sockets[0].getsockname()[1])

    async def start(self) -> None:
        """Listen.  Raises ``RuntimeError`` when the address can't be had."""
        await self.serve_forever(background=True)

    async def stop(self) -> None:
        """Close the listener and all connections and wait for their tasks."""
        await self.shutdown()  # type: ignore[no-untyped-call]  # pymodbus leaves it without annotations
        for task in tuple(self.answering):
            task.cancel()
            with contextlib.suppress(asyncio.CancelledError):
                await task

    def connections(self) -> "list[PlantConnection]":
        """The open connections."""
        return [cast("PlantConnection", connection) for connection in self.active_connections.values()]

    def follow_closings(self) -> None:
        """Reset all connections if a fault asked for it since the last call."""
        if self._closings != self.wire.close_requests:
            self._closings = self.wire.close_requests
            for connection in self.connections():
                connection.reset()

    def callback_new_connection(self) -> "PlantConnection":
        """A client connects."""
        return PlantConnection(self)


class PlantConnection(ServerRequestHandler):
    """One client: frames in, answers out, first come first served."""

    def __init__(self, server: PlantServer) -> None:
        super().__init__(  # type: ignore[no-untyped-call]  # pymodbus leaves it without annotations
            server, server.trace_packet, server.trace_pdu, server.trace_connect
        )
        self.plant_server = server
        self.max_buffer_size = RECEIVE_BUFFER_BYTES
        self._frames: asyncio.Queue[tuple[float, bytes] | None] = asyncio.Queue()

    def callback_connected(self) -> None:
        """The connection stands."""
        super().callback_connected()
        task = self.loop.create_task(self._answer_frames(), name="modbus answers")
        self.plant_server.answering.add(task)
        task.add_done_callback(self.plant_server.answering.discard)

    def callback_disconnected(self, exc: Exception | None) -> None:
        """The connection is gone; what has arrived is still executed, as a PLC or a gateway does."""
        super().callback_disconnected(exc)
        self._frames.put_nowait(None)

    def callback_data(self, data: bytes, addr: tuple[str, int] | None = None) -> int:
        """Cut whole frames off the front of ``data``; returns how many bytes were used."""
        used = 0
        while len(data) - used >= MBAP_SIZE:
            protocol = int.from_bytes(data[used + 2 : used + 4], "big")
            length = int.from_bytes(data[used + 4 : used + 6], "big")
            if protocol != 0 or not 2 <= length <= LONGEST_PDU + 1:
                self.reset()  # no frame boundary can be trusted any more
                return len(data)
            if len(data) - used < 6 + length:
                break
            self._frames.put_nowait((self.loop.time(), data[used : used + 6 + length]))
            used += 6 + length
        return used

    def reset(self) -> None:
        """Close at once, without farewell."""
        if self.transport is not None:
            cast("asyncio.Transport", self.transport).abort()

    async def _answer_frames(self) -> None:
        wire = self.plant_server.wire
        while (arrival := await self._frames.get()) is not None:
            arrival_s, frame = arrival
            await self._wait_until(arrival_s + wire.request_delay_s)
            if wire.spend("drop_requests"):
                continue
            answer = self.framer.buildFrame(await self._answer(frame))
            await self._wait_until(arrival_s + wire.request_delay_s + wire.answer_delay_s)
            if wire.spend("drop_answers"):
                continue
            if wire.spend("half_answers"):
                answer = answer[: len(answer) // 2]
            if self.transport is not None:
                cast("asyncio.Transport", self.transport).write(answer)

    async def _wait_until(self, t_s: float) -> None:
        wait_s = t_s - self.loop.time()
        if wait_s > 0.0:
            await asyncio.sleep(wait_s)

    async def _answer(self, frame: bytes) -> ModbusPDU:
        device_id, function = frame[6], frame[7]
        wire = self.plant_server.wire
        request = self.plant_server.decoder.decode(frame[MBAP_SIZE:]) if function in FUNCTIONS else None
        answer: ModbusPDU
        if device_id != self.plant_server.device_id:
            answer = ExceptionResponse(function, ExcCodes.GATEWAY_NO_RESPONSE)
        elif function not in FUNCTIONS:
            answer = ExceptionResponse(function & 0x7F, ExcCodes.ILLEGAL_FUNCTION)
        elif wire.exception_function in (None, function) and wire.spend("exceptions"):
            answer = ExceptionResponse(function, wire.exception_code)
        elif request is None or not _is_sound(frame[MBAP_SIZE:]):
            answer = ExceptionResponse(function, ExcCodes.ILLEGAL_VALUE)
        else:
            answer = await request.datastore_update(self.plant_server.context, device_id)
        answer.transaction_id = int.from_bytes(frame[0:2], "big")
        answer.dev_id = device_id
        return answer


def _is_sound(pdu: bytes) -> bool:
    """What the standard asks of a request and pymodbus doesn't check (V1.1b3, sections 6.1 to 6.17)."""
    function = pdu[0]
    if function == 5:
        return len(pdu) == 5 and pdu[3:5] in (b"\xff\x00", b"\x00\x00")
    if function in (1, 2, 3, 4, 6):
        return len(pdu) == 5 and (function == 6 or int.from_bytes(pdu[3:5], "big") >= 1)
    if function == 15:
        return 1 <= int.from_bytes(pdu[3:5], "big") <= COILS_WRITTEN_AT_MOST
    return function != 22 or len(pdu) == 7


class _PlantContext:
    """What pymodbus's requests ask of a context, answered by the live plant.  Nothing here ever waits."""

    def __init__(self, registers: Registers, wire: WireFaults) -> None:
        self._registers = registers
        self._wire = wire
        self._written: list[int] | list[bool] = []

    async def async_getValues(  # noqa: N802 - the name pymodbus calls
        self, _device_id: int, function: int, address: int, count: int
    ) -> list[int] | list[bool] | ExcCodes:
        if function in (5, 6):
            return self._written  # the answer to a single write is its echo (V1.1b3, sections 6.5 and 6.6)
        try:
            if function in (1, 2):
                return self._registers.read_bits(address, count)
            return self._registers.read(address, count)
        except AddressRefused:
            return ExcCodes.ILLEGAL_ADDRESS

    async def async_setValues(  # noqa: N802 - the name pymodbus calls
        self, _device_id: int, function: int, address: int, sent: Sequence[int] | Sequence[bool]
    ) -> ExcCodes | None:
        if not self._wire.refused_addresses.isdisjoint(range(address, address + len(sent))):
            return ExcCodes.ILLEGAL_ADDRESS
        try:
            if function in (5, 15):
                self._registers.write_bits(address, [bool(bit) for bit in sent])
            else:
                self._registers.write(address, [int(word) for word in sent])
        except AddressRefused:
            return ExcCodes.ILLEGAL_ADDRESS
        except WriteRefused as refusal:
            return ExcCodes.ILLEGAL_ADDRESS if refusal.is_read_only else ExcCodes.ILLEGAL_VALUE
        self._written = list(sent)
        return None
