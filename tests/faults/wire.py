"""A recording proxy on the wire between the tool and the plant: Modbus/TCP, frame by frame.

It sees every write before the plant does, knows from the answers what the tool has been shown, and can spoil what
passes: late, in the wrong order, by halves, garbled, or refused.  It shares no code with the tool: addresses are those
of the plant's register map (``python -m simulator RIG --map``), framing is MBAP as in the standard.
"""

import asyncio
import struct
from collections.abc import Callable, Sequence
from contextlib import suppress
from dataclasses import dataclass, field

MBAP_BYTES = 7
REALS = {2: "sp", 4: "op", 34: "op_request", 40: "gain", 42: "integral", 44: "derivative"}
LONGS = {14: "holder", 30: "holder_request"}
WORDS = {6: "mode", 10: "boot_count", 12: "guard_state", 32: "heartbeat", 33: "sequence"}


@dataclass(frozen=True, slots=True)
class Write:
    """One write request of the tool: when, and the numbers by the tag's name; ``strange`` are other addresses."""

    t_s: float
    numbers: dict[str, float]
    strange: tuple[int, ...] = ()

    @property
    def is_release(self) -> bool:
        """Whether it only gives the token back."""
        return self.numbers == {"holder_request": 0.0} and not self.strange


@dataclass(frozen=True, slots=True)
class Shown:
    """What an answer to a reading has shown to the tool, by the tag's name."""

    t_s: float
    numbers: dict[str, float]


def numbers_of(first: int, words: Sequence[int]) -> tuple[dict[str, float], tuple[int, ...]]:
    """The tags that lie whole in ``words`` from address ``first`` on, and the addresses that belong to none of them."""
    numbers: dict[str, float] = {}
    taken: set[int] = set()
    held = {first + offset: word for offset, word in enumerate(words)}
    for address, name in WORDS.items():
        if address in held:
            numbers[name] = held[address]
            taken.add(address)
    for table, kind in ((REALS, ">f"), (LONGS, ">I")):
        for address, name in table.items():
            if address in held and address + 1 in held:
                (numbers[name],) = struct.unpack(kind, struct.pack(">HH", held[address], held[address + 1]))
                taken |= {address, address + 1}
    return numbers, tuple(sorted(held.keys() - taken))


def write_of(frame: bytes, t_s: float) -> Write | None:
    """The write request in a frame; ``None`` when it is none."""
    pdu = frame[MBAP_BYTES:]
    if pdu[0] == 16:
        first, count = struct.unpack(">HH", pdu[1:5])
        words = struct.unpack(f">{count}H", pdu[6 : 6 + 2 * count])
    elif pdu[0] == 6:
        first, word = struct.unpack(">HH", pdu[1:5])
        words = (word,)
    elif pdu[0] in (5, 15, 22, 23):
        return Write(t_s, {}, (struct.unpack(">H", pdu[1:3])[0],))
    else:
        return None
    return Write(t_s, *numbers_of(first, words))


def shown_by(request: bytes, answer: bytes, t_s: float) -> Shown | None:
    """What the answer to a reading of holding registers shows; ``None`` for anything else."""
    asked, pdu = request[MBAP_BYTES:], answer[MBAP_BYTES:]
    if asked[0] != 3 or pdu[0] != 3 or answer[:2] != request[:2]:
        return None
    first, count = struct.unpack(">HH", asked[1:5])
    return Shown(t_s, numbers_of(first, struct.unpack(f">{count}H", pdu[2 : 2 + 2 * count]))[0])


@dataclass(slots=True)
class Spoiling:
    """What happens to what passes; the fields that are ``None`` or empty do nothing.

    ``answers_left`` is how many answers are still spoiled, -1 all.  ``answer_delay_s`` holds them back; ``garble``
    makes others of them; ``refuse`` is answered to every write instead of passing it on; ``is_reordered`` sends an
    answer only after the next one was asked for, on whichever connection that is.  ``hold_write`` takes the first
    write that it is true of out of the stream, into ``held_writes``.
    """

    answers_left: int = 0
    answer_delay_s: float = 0.0
    garble: Callable[[bytes], bytes] | None = None
    refuse: int | None = None
    is_reordered: bool = False
    hold_write: Callable[[Write], bool] | None = None
    held_writes: list[bytes] = field(default_factory=list)
    late_answers: list[bytes] = field(default_factory=list)

    def takes_one(self) -> bool:
        """Whether this answer is spoiled; counts it."""
        if self.answers_left > 0:
            self.answers_left -= 1
            return True
        return self.answers_left < 0


class Wire:
    """The proxy of one pair; ``writes`` and ``shown`` are in the order of time (s, the event loop's clock)."""

    def __init__(self, plant_port: int) -> None:
        self.writes: list[Write] = []
        self.shown: list[Shown] = []
        self.connections = 0
        self.spoiling = Spoiling()
        self._plant_port = plant_port
        self._server: asyncio.Server | None = None
        self._waiting: list[tuple[Callable[[], bool], asyncio.Future[None]]] = []
        self._carrying: set[asyncio.Task[None]] = set()
        self._now_s = asyncio.get_running_loop().time

    async def open(self, host: str) -> int:
        """Listen on a free port of ``host``; returns it."""
        self._server = await asyncio.start_server(self._connect, host, 0)
        return int(self._server.sockets[0].getsockname()[1])

    async def close(self) -> None:
        """End it with all connections."""
        if self._server is not None:
            self._server.close()
        for task in self._carrying:
            task.cancel()
        await asyncio.gather(*self._carrying, return_exceptions=True)

    def heal(self) -> None:
        """Spoil nothing any more; what is held stays held."""
        self.spoiling = Spoiling(held_writes=self.spoiling.held_writes)

    async def until(self, holds: Callable[[], bool]) -> None:
        """Wait until ``holds``, asked at each request of the tool, before it is passed on."""
        if not holds():
            waiting = asyncio.get_running_loop().create_future()
            entry = (holds, waiting)
            self._waiting.append(entry)
            try:
                await waiting
            finally:
                self._waiting.remove(entry)

    async def send_held(self) -> None:
        """Send the writes that were held back to the plant, late, as a gateway does with its queue."""
        reader, writer = await asyncio.open_connection("127.0.0.1", self._plant_port)
        for frame in self.spoiling.held_writes:
            writer.write(frame)
            await writer.drain()
            await _frame(reader)
        writer.close()

    async def _connect(self, reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        task = asyncio.current_task()
        assert task is not None
        self._carrying.add(task)
        task.add_done_callback(self._carrying.discard)
        self.connections += 1
        with suppress(OSError, asyncio.IncompleteReadError, asyncio.CancelledError):
            try:
                plant_reader, plant_writer = await asyncio.open_connection("127.0.0.1", self._plant_port)
                try:
                    await self._carry(reader, writer, plant_reader, plant_writer)
                finally:
                    plant_writer.transport.abort()
            finally:
                writer.transport.abort()

    async def _carry(
        self,
        reader: asyncio.StreamReader,
        writer: asyncio.StreamWriter,
        plant_reader: asyncio.StreamReader,
        plant_writer: asyncio.StreamWriter,
    ) -> None:
        """Both directions at once, until either end closes."""
        asked: asyncio.Queue[bytes] = asyncio.Queue()
        passed: list[Shown] = []  # taken in by the tool only if it goes on asking on this connection

        async def requests() -> None:
            while True:
                frame = await _frame(reader)
                self.shown.extend(passed)
                passed.clear()
                await self._pass_request(frame, asked, writer, plant_writer)

        async def answers() -> None:
            while True:
                answer = await _frame(plant_reader)
                if (shown := await self._pass_answer(await asked.get(), answer, writer)) is not None:
                    passed.append(shown)

        both = [asyncio.ensure_future(direction()) for direction in (requests, answers)]
        try:
            await asyncio.wait(both, return_when=asyncio.FIRST_COMPLETED)
        finally:
            for task in both:
                task.cancel()
            await asyncio.gather(*both, return_exceptions=True)

    async def _pass_request(
        self, frame: bytes, asked: "asyncio.Queue[bytes]", writer: asyncio.StreamWriter, plant: asyncio.StreamWriter
    ) -> None:
        write, spoiling = write_of(frame, self._now_s()), self.spoiling
        if write is not None:
            self.writes.append(write)
        self._told()
        if write is not None:
            await asyncio.sleep(0)  # whoever waited for this write acts before it is passed on
            if spoiling.hold_write is not None and spoiling.hold_write(write):
                spoiling.hold_write = None
                spoiling.held_writes.append(frame)
                return
            if spoiling.refuse is not None and spoiling.takes_one():
                await _send(writer, exception_to(frame, spoiling.refuse))
                return
        for late in spoiling.late_answers:
            await _send(writer, late)
        spoiling.late_answers.clear()
        asked.put_nowait(frame)
        await _send(plant, frame)

    async def _pass_answer(self, request: bytes, answer: bytes, writer: asyncio.StreamWriter) -> Shown | None:
        """What a good answer shows; a spoiled one shows nothing."""
        spoiling = self.spoiling
        if spoiling.refuse is None and spoiling.takes_one():
            if spoiling.is_reordered:
                spoiling.late_answers.append(answer)
                return None
            if spoiling.answer_delay_s:
                await asyncio.sleep(spoiling.answer_delay_s)
            if spoiling.garble is not None:
                await _send(writer, spoiling.garble(answer))
                return None
        await _send(writer, answer)
        return shown_by(request, answer, self._now_s())

    def _told(self) -> None:
        for holds, waiting in self._waiting:
            if not waiting.done() and holds():
                waiting.set_result(None)


def exception_to(request: bytes, code: int) -> bytes:
    """The exception answer to a request."""
    return request[:4] + b"\0\x03" + request[6:7] + bytes((request[7] | 0x80, code))


async def write_as_master(port: int, first: int, words: Sequence[int]) -> None:
    """A second master writes registers of the plant behind everybody's back; raises ``OSError`` when refused."""
    reader, writer = await asyncio.open_connection("127.0.0.1", port)
    pdu = struct.pack(f">BHHB{len(words)}H", 16, first, len(words), 2 * len(words), *words)
    writer.write(struct.pack(">HHHB", 1, 0, len(pdu) + 1, 1) + pdu)
    answer = await _frame(reader)
    writer.close()
    if answer[MBAP_BYTES] != 16:
        raise OSError(f"the plant refused the second master: {answer.hex(' ')}")


async def _frame(reader: asyncio.StreamReader) -> bytes:
    head = await reader.readexactly(MBAP_BYTES)
    return head + await reader.readexactly(int.from_bytes(head[4:6], "big") - 1)


async def _send(writer: asyncio.StreamWriter, octets: bytes) -> None:
    writer.write(octets)
    await writer.drain()
