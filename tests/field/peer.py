"""A Modbus/TCP device of plain sockets and struct, whose answers can be scripted.

It shares no code with the link nor with its library, so that both are checked against the standard
(MODBUS Application Protocol V1.1b3) and not against themselves.
"""

import asyncio
import struct
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass
from types import TracebackType
from typing import Self

ADDRESSES = 100
"""How many addresses each table has, from 0 on."""

Octets = bytes


@dataclass(frozen=True, slots=True)
class Reaction:
    """What the device does with one request: whether it carries it out, and the pieces that it sends.

    ``pieces`` gets the request and the proper answer, both as whole frames; ``None`` closes the connection.
    """

    pieces: Callable[[Octets, Octets], list[Octets] | None]
    is_carried_out: bool = True


PROPER = Reaction(lambda _request, answer: [answer])
SILENT = Reaction(lambda _request, _answer: [])
CLOSES = Reaction(lambda _request, _answer: None)
UNHEARD = Reaction(lambda _request, _answer: [], is_carried_out=False)


def refuses(code: int) -> Reaction:
    """Answers with an exception and changes nothing."""
    return Reaction(
        lambda request, _answer: [request[:4] + bytes((0, 3)) + request[6:7] + bytes((request[7] | 0x80, code))],
        is_carried_out=False,
    )


def sends(pdu: Octets) -> Reaction:
    """Answers with these octets behind a proper header, and changes nothing."""
    return Reaction(
        lambda request, _answer: [request[:4] + struct.pack(">H", 1 + len(pdu)) + request[6:7] + pdu],
        is_carried_out=False,
    )


def sends_raw(*pieces: Octets) -> Reaction:
    """Sends exactly these octets, and changes nothing."""
    return Reaction(lambda _request, _answer: list(pieces), is_carried_out=False)


class Peer:
    """The device, listening on a free port of this machine while the context lasts.

    ``frames`` are the requests as they came; ``script`` holds the reactions to the next ones, properly
    answered when it is empty.  ``heard`` is set by each request once it was dealt with.
    """

    def __init__(self) -> None:
        self.registers = [0] * ADDRESSES
        self.input_registers = [0] * ADDRESSES
        self.coils = [False] * ADDRESSES
        self.discretes = [False] * ADDRESSES
        self.frames: list[Octets] = []
        self.script: deque[Reaction] = deque()
        self.heard = asyncio.Event()
        self.connected_s: list[float] = []
        self.was_reset: asyncio.Queue[bool] = asyncio.Queue()
        self.port = 0
        self._server: asyncio.Server | None = None
        self._conversations: dict[asyncio.Task[None], asyncio.StreamWriter] = {}

    async def __aenter__(self) -> Self:
        self._server = await asyncio.start_server(self._converse, "127.0.0.1", 0)
        self.port = self._server.sockets[0].getsockname()[1]
        return self

    async def __aexit__(
        self, _kind: type[BaseException] | None, _fault: BaseException | None, _trace: TracebackType | None
    ) -> None:
        if self._server is not None:
            self._server.close()
        self.hang_up()
        await asyncio.gather(*self._conversations)

    def hang_up(self) -> None:
        """Close all connections, now."""
        for writer in self._conversations.values():
            writer.transport.abort()

    @property
    def pdus(self) -> list[Octets]:
        """The requests without their headers."""
        return [frame[7:] for frame in self.frames]

    async def _converse(self, reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        task = asyncio.current_task()
        assert task is not None
        self._conversations[task] = writer
        self.connected_s.append(asyncio.get_running_loop().time())
        try:
            while await self._deal_with_one(reader, writer):
                pass
        except asyncio.IncompleteReadError:
            self.was_reset.put_nowait(False)
        except ConnectionError:
            self.was_reset.put_nowait(True)
        finally:
            writer.transport.abort()
            del self._conversations[task]

    async def _deal_with_one(self, reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> bool:
        header = await reader.readexactly(7)
        frame = header + await reader.readexactly(struct.unpack(">H", header[4:6])[0] - 1)
        self.frames.append(frame)
        reaction = self.script.popleft() if self.script else PROPER
        pdu = self._carry_out(frame[7:]) if reaction.is_carried_out else b""
        pieces = reaction.pieces(frame, frame[:4] + struct.pack(">H", 1 + len(pdu)) + frame[6:7] + pdu)
        self.heard.set()
        if pieces is None:
            return False
        for piece in pieces:
            writer.write(piece)
            await writer.drain()
        return True

    def _carry_out(self, pdu: Octets) -> Octets:
        function, address = pdu[0], struct.unpack(">H", pdu[1:3])[0]
        count = 1 if function in (5, 6, 22) else struct.unpack(">H", pdu[3:5])[0]
        if address + count > ADDRESSES:
            return bytes((function | 0x80, 2))
        match function:
            case 1 | 2:
                bits = (self.coils if function == 1 else self.discretes)[address : address + count]
                packed = sum(1 << at for at, bit in enumerate(bits) if bit).to_bytes(-(-count // 8), "little")
                return bytes((function, len(packed))) + packed
            case 3 | 4:
                words = (self.registers if function == 3 else self.input_registers)[address : address + count]
                return bytes((function, 2 * count)) + struct.pack(f">{count}H", *words)
            case 5:
                self.coils[address] = pdu[3] == 0xFF
            case 6:
                self.registers[address] = struct.unpack(">H", pdu[3:5])[0]
            case 15:
                packed_bits = int.from_bytes(pdu[6:], "little")
                self.coils[address : address + count] = [bool(packed_bits >> at & 1) for at in range(count)]
            case 16:
                self.registers[address : address + count] = struct.unpack(f">{count}H", pdu[6:])
            case 22:
                and_mask, or_mask = struct.unpack(">HH", pdu[3:7])
                self.registers[address] = self.registers[address] & and_mask | or_mask & ~and_mask & 0xFFFF
            case _:
                return bytes((function | 0x80, 1))
        return pdu[:5] if function in (15, 16) else pdu
