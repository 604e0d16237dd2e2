"""A ``LoopLink`` over Modbus/TCP.

Every request has its own deadline; after one miss the connection is gone and only ``connect`` opens a
new one.  Nothing is retried.
"""

import asyncio
from collections.abc import Mapping, Sequence

from pymodbus.pdu import ModbusPDU

from autotune.config.types import ModbusEndpoint, ModbusTag, RegisterTable
from autotune.errors import LinkClosed, LinkError, LinkRefused, LinkTimeout, WriteForbidden
from autotune.field.back_off import BackOff
from autotune.field.codec import from_words, to_reading, width
from autotune.field.link import RawValue, Reading, ReadReport
from autotune.field.modbus.connection import Answer, Connection
from autotune.field.modbus.exceptions import in_words, is_surely_undone
from autotune.field.modbus.messages import to_place, to_read_pdu, to_write_pdu
from autotune.field.modbus.requests import MaskRegister, ReadRequest, WriteRequest, plan_reads, plan_writes
from autotune.field.write_list import WriteList
from autotune.loop.sample import Stamp
from autotune.loop.write import WriteOutcome, WriteReport


class ModbusLink:
    """One connection to one Modbus/TCP device for the named ``tags``; writes what ``write_list`` permits.

    Links to the same device may share one ``back_off``, so that together they keep its gap.
    """

    def __init__(
        self,
        endpoint: ModbusEndpoint,
        tags: Sequence[tuple[str, ModbusTag]],
        write_list: WriteList,
        back_off: BackOff | None = None,
    ) -> None:
        self._endpoint = endpoint
        self._tags = dict(tags)
        self._write_list = write_list
        self._device = f"{endpoint.host}:{endpoint.port} device id {endpoint.device_id}"
        self._connection: Connection | None = None
        self._one_at_a_time = asyncio.Lock()
        self._plans: dict[tuple[str, ...], tuple[ReadRequest, ...]] = {}
        self._back_off = back_off or BackOff(endpoint.connect_gap_s)
        self._transaction = 0

    @property
    def is_connected(self) -> bool:
        """Whether requests can be sent now; after any missed answer it is ``False``."""
        return self._connection is not None and self._connection.is_open

    async def connect(self) -> None:
        """Open a fresh connection; a former one is dropped.

        Waits until the endpoint's gap since the last attempt has passed; the gap doubles with every
        connection that never answered a request, up to eightfold.  Raises ``LinkTimeout`` or ``LinkClosed``.
        """
        loop = asyncio.get_running_loop()
        async with self._one_at_a_time:
            self._drop()
            await asyncio.sleep(self._back_off.wait_s(loop.time()))
            self._back_off.attempted(loop.time())
            self._connection = await self._open()

    async def read(self, names: Sequence[str]) -> ReadReport:
        """Read the named tags; the stamp spans all requests that were needed.

        Raises ``LinkTimeout``, ``LinkClosed`` or ``LinkRefused``; after the first two the connection is gone.
        """
        async with self._one_at_a_time:
            readings: dict[str, Reading] = {}
            stamps: list[Stamp] = []
            for request in self._read_plan(tuple(names)):
                try:
                    answer = await self._ask(to_read_pdu(request))
                except LinkError as fault:
                    raise type(fault)(f"{fault} (reading {to_place(request)})") from fault
                if answer.pdu.isError():
                    raise LinkRefused(self._refusal(request, answer.pdu.exception_code))
                readings |= self._to_readings(request, answer.pdu)
                stamps.append(answer.sent)
        now_s = asyncio.get_running_loop().time()
        sent = Stamp(stamps[0].earliest_s, stamps[-1].latest_s) if stamps else Stamp.at(now_s)
        return ReadReport({name: readings[name] for name in names}, sent)

    async def write(self, values: Mapping[str, RawValue]) -> WriteReport:
        """Write the named tags, side by side in one request, in the given order otherwise.

        ``REFUSED`` only when surely nothing changed: once a part was applied, or the controller failed
        midway, what isn't ``APPLIED`` is ``NOT_HEARD``.  Raises ``WriteForbidden`` before anything is sent.
        A cancelled write may have landed; the connection is gone then.
        """
        requests = plan_writes(
            self._endpoint, [(name, self._permitted(name, raw), raw) for name, raw in values.items()]
        )
        async with self._one_at_a_time:
            started_s = asyncio.get_running_loop().time()
            stamps: list[Stamp] = []
            applied: list[str] = []
            for request in requests:
                try:
                    answer = await self._ask(to_write_pdu(request))
                except LinkError as fault:
                    sent = Stamp(stamps[0].earliest_s if stamps else started_s, asyncio.get_running_loop().time())
                    return WriteReport(WriteOutcome.NOT_HEARD, sent, f"{fault} (writing {to_place(request)})")
                stamps.append(answer.sent)
                sent = Stamp(stamps[0].earliest_s, answer.sent.latest_s)
                if answer.pdu.isError():
                    return self._unapplied(request, answer.pdu.exception_code, sent, applied)
                applied += request.names
        return WriteReport(WriteOutcome.APPLIED, sent if stamps else Stamp.at(started_s))

    async def close(self) -> None:
        """Drop the connection; never raises and may be called again."""
        self._drop()

    def _drop(self) -> None:
        if self._connection is not None:
            self._connection.drop()
            self._transaction = self._connection.transaction
            self._connection = None

    async def _open(self) -> Connection:
        endpoint = self._endpoint
        # Numbered on from the last connection, so that an answer which a gateway still owes to that one fits nothing.
        connection = Connection(self._device, endpoint.device_id, endpoint.request_timeout_s, self._transaction)
        try:
            async with asyncio.timeout(endpoint.request_timeout_s):
                await asyncio.get_running_loop().create_connection(lambda: connection, endpoint.host, endpoint.port)
        except TimeoutError as fault:
            raise LinkTimeout(
                f"no connection to {self._device} within {endpoint.request_timeout_s:g} s; "
                "check that the controller has power, the cable, and the address"
            ) from fault
        except OSError as fault:
            raise LinkClosed(
                f"no connection to {self._device}: {fault.strerror or fault}; check the address, the port, "
                "and whether the controller has a connection left"
            ) from fault
        return connection

    async def _ask(self, question: ModbusPDU) -> Answer:
        if self._connection is None:
            raise LinkClosed(f"{self._device} is not connected; nothing was sent")
        answer = await self._connection.ask(question)
        self._back_off.answered()
        return answer

    def _read_plan(self, names: tuple[str, ...]) -> tuple[ReadRequest, ...]:
        if names not in self._plans:
            self._plans[names] = plan_reads(self._endpoint, [(name, self._tags[name]) for name in dict.fromkeys(names)])
        return self._plans[names]

    def _to_readings(self, request: ReadRequest, pdu: ModbusPDU) -> dict[str, Reading]:
        readings = {}
        is_bit = request.table in (RegisterTable.COIL, RegisterTable.DISCRETE)
        for name in request.names:
            tag = self._tags[name]
            at = tag.address - request.first
            raw = pdu.bits[at] if is_bit else from_words(tag, pdu.registers[at : at + width(tag)])
            readings[name] = to_reading(tag, raw)
        return readings

    def _permitted(self, name: str, raw: RawValue) -> ModbusTag:
        tag = self._tags.get(name)
        if tag is None:
            raise WriteForbidden(f"{self._device}: {name!r} is no tag of this link")
        self._write_list.check(name, tag, raw)
        return tag

    def _unapplied(self, request: WriteRequest, code: int, sent: Stamp, applied: Sequence[str]) -> WriteReport:
        detail = f"{self._device} answered {in_words(code)} (writing {to_place(request)})"
        if isinstance(request, MaskRegister) and code == 1:
            detail += "; a bit of a register needs function 22: give the bit a register or coil of its own"
        if applied:
            detail += f"; {', '.join(applied)} had been applied before"
        is_refused = is_surely_undone(code) and not applied
        return WriteReport(WriteOutcome.REFUSED if is_refused else WriteOutcome.NOT_HEARD, sent, detail)

    def _refusal(self, request: ReadRequest, code: int) -> str:
        hint = "check the table, the address, and whether the file counts from 0 or from 1"
        if len(request.names) > 1:
            hint += "; set read_gap_registers = 0 if the controller has holes between its registers"
        return f"{self._device} answered {in_words(code)} (reading {to_place(request)}); {hint}"
