"""An OPC UA server of the library's own make, with the nodes of ``GUARDED``, whose answers can be troubled.

It runs in a thread with an event loop of its own, so that one serves all tests of a module: making its
address space takes seconds.  ``Wire`` lies between it and the link, in the test's own loop.
"""

import asyncio
import socket
import threading
from collections import deque
from collections.abc import Coroutine, Mapping
from contextlib import suppress
from dataclasses import replace
from types import TracebackType
from typing import Any, Self, TypeVar

from asyncua import ua
from asyncua.common.utils import ServiceError
from asyncua.crypto.permission_rules import User, UserRole
from asyncua.server.internal_server import InternalServer
from asyncua.server.internal_session import InternalSession
from asyncua.server.server import Server
from asyncua.server.user_managers import UserManager
from asyncua.ua.attribute_ids import AttributeIds
from asyncua.ua.status_codes import StatusCodes

from autotune.config.types import DataType, LoopConfig, MessageSecurity, OpcUaEndpoint, OpcUaTag
from autotune.field.link import RawValue
from tests.field.link_conformance import Trouble

NAMESPACE = "urn:skid:juice"
SERVER_URI = "urn:skid:server"
PATIENCE_S = 20.0
NOBODY = User(role=UserRole.Anonymous)

_Result = TypeVar("_Result")

_VARIANTS = {
    DataType.BOOL: ua.VariantType.Boolean,
    DataType.INT: ua.VariantType.Int16,
    DataType.UINT: ua.VariantType.UInt16,
    DataType.DINT: ua.VariantType.Int32,
    DataType.UDINT: ua.VariantType.UInt32,
    DataType.REAL: ua.VariantType.Float,
    DataType.LREAL: ua.VariantType.Double,
}


def node_text(name: str) -> str:
    """Where the plant keeps a tag of TIC-204."""
    return f"ns=2;s=TIC-204.{name}"


def in_the_plant(loop: LoopConfig, url: str, timeout_s: float = 2.0) -> LoopConfig:
    """The loop with every tag as a node of the plant, reached without security."""
    endpoint = OpcUaEndpoint(url, timeout_s, connect_gap_s=0.0, security=MessageSecurity.NONE)
    tags = tuple((name, OpcUaTag(node_text(name))) for name, _ in loop.tags)
    return replace(loop, controller=replace(loop.controller, endpoint=endpoint), tags=tags)


class UaPlant:
    """The server; every method may be called from the test's thread.

    ``script`` holds what becomes of the next requests that read or write tags.  ``requests`` counts them.
    """

    def __init__(self, held: Mapping[str, tuple[DataType, RawValue]]) -> None:
        self.held_at_rest = dict(held)
        self.script: deque[Trouble] = deque()
        self.refusal = StatusCodes.BadUserAccessDenied
        self.refused_nodes: dict[str, int] = {}
        self.write_fault: int | None = None
        self.reactions: deque[Trouble] = deque()
        self.requests: list[tuple[str, tuple[str, ...]]] = []
        self.server = Server(iserver=_TroubledServer(self))
        self.port = _free_port()
        self._nodes: dict[str, Any] = {}
        self._loop = asyncio.new_event_loop()
        self._thread = threading.Thread(target=self._loop.run_forever, daemon=True)

    @property
    def url(self) -> str:
        """Its address."""
        return f"opc.tcp://127.0.0.1:{self.port}/skid"

    def __enter__(self) -> Self:
        self._thread.start()
        self.call(self._build())
        self.call(self.server.start())
        return self

    def __exit__(
        self, _kind: type[BaseException] | None, _fault: BaseException | None, _trace: TracebackType | None
    ) -> None:
        self.call(self.server.stop())
        self._loop.call_soon_threadsafe(self._loop.stop)
        self._thread.join(PATIENCE_S)
        self._loop.close()

    def call(self, coroutine: Coroutine[Any, Any, _Result]) -> _Result:
        """Run something in the server's own loop."""
        return asyncio.run_coroutine_threadsafe(coroutine, self._loop).result(PATIENCE_S)

    def reset(self) -> None:
        """As at rest, without trouble."""
        for trouble in (self.script, self.reactions, self.requests, self.refused_nodes):
            trouble.clear()
        self.write_fault = None
        for name, (kind, raw) in self.held_at_rest.items():
            self.put(name, ua.DataValue(ua.Variant(raw, _VARIANTS[kind])))

    def put(self, name: str, answer: ua.DataValue) -> None:
        """What the node answers from now on, status and stamps included."""
        self.call(self._put(name, answer))

    def held(self, name: str) -> RawValue:
        """The number in the node."""
        raw: RawValue = self.call(self._held(name)).Value.Value
        return raw

    def place(self, name: str, node_id: str, kind: DataType = DataType.REAL, raw: RawValue = 1.0) -> None:
        """A node of that name in the skid, instead of the one there was."""
        self.call(self._place(name, node_id, kind, raw))

    async def _place(self, name: str, node_id: str, kind: DataType, raw: RawValue) -> None:
        if name in self._nodes:
            await self.server.delete_nodes([self._nodes[name]])
        skid = await self.server.nodes.objects.get_child(["2:Pasteuriser"])
        node = await skid.add_variable(
            ua.NodeId.from_string(node_id),
            ua.QualifiedName(name, 2),
            raw,
            _VARIANTS[kind],
        )
        await node.set_writable()
        self._nodes[name] = node

    async def _put(self, name: str, answer: ua.DataValue) -> None:
        await self.server.write_attribute_value(self._nodes[name].nodeid, answer)

    async def _held(self, name: str) -> Any:
        return self.server.read_attribute_value(self._nodes[name].nodeid)

    async def _build(self) -> None:
        server = self.server
        await server.init()
        server.iserver.disabled_clock = True
        server.set_endpoint(self.url)
        await server.set_application_uri(SERVER_URI)
        index = await server.register_namespace(NAMESPACE)
        skid = await server.nodes.objects.add_object(index, "Pasteuriser")
        loop = await skid.add_object(ua.NodeId.from_string("ns=2;s=TIC-204"), ua.QualifiedName("TIC-204", index))
        for name, (kind, raw) in self.held_at_rest.items():
            node = await loop.add_variable(
                ua.NodeId.from_string(node_text(name)), ua.QualifiedName(name, index), raw, _VARIANTS[kind]
            )
            await node.set_writable()
            self._nodes[name] = node


class _TroubledServer(InternalServer):
    def __init__(self, plant: UaPlant) -> None:
        super().__init__(user_manager=_Anybody())
        self.plant = plant

    def create_session(
        self,
        name: str,
        user: User = NOBODY,
        external: bool = False,
    ) -> InternalSession:
        session = _TroubledSession(self, self.aspace, self.subscription_service, name, user=user, external=external)
        session.plant = self.plant if external else None
        return session


class _TroubledSession(InternalSession):
    plant: UaPlant | None = None

    async def read(self, params: ua.ReadParameters) -> list[ua.DataValue]:
        tags = [str(one.NodeId.Identifier) for one in params.NodesToRead if one.NodeId.NamespaceIndex]
        is_of_tags = all(one.AttributeId == AttributeIds.Value for one in params.NodesToRead)
        if self.plant is None or not tags or not is_of_tags:
            return await super().read(params)
        trouble = self.plant.script.popleft() if self.plant.script else Trouble.NONE
        self.plant.requests.append(("read", tuple(tags)))
        if trouble is Trouble.REFUSED:
            raise ServiceError(StatusCodes.BadTooManyOperations)
        answers = await super().read(params)
        self.plant.reactions.append(trouble)
        return answers

    async def write(self, params: ua.WriteParameters) -> list[ua.StatusCode]:
        if self.plant is None:
            return await super().write(params)
        plant = self.plant
        if plant.write_fault is not None:
            raise ServiceError(plant.write_fault)
        trouble = plant.script.popleft() if plant.script else Trouble.NONE
        names = [str(one.NodeId.Identifier) for one in params.NodesToWrite]
        plant.requests.append(("write", tuple(names)))
        refused = dict.fromkeys(names, plant.refusal) if trouble is Trouble.REFUSED else plant.refused_nodes
        allowed = [one for one in params.NodesToWrite if str(one.NodeId.Identifier) not in refused]
        codes = iter(await super().write(ua.WriteParameters(NodesToWrite=allowed)) if allowed else ())
        answered = [ua.StatusCode(refused[name]) if name in refused else next(codes) for name in names]  # type: ignore[arg-type]  # UInt32 is an int
        plant.reactions.append(trouble)
        return answered


class _Anybody(UserManager):
    def get_user(
        self, iserver: Any, username: str | None = None, password: str | None = None, certificate: Any = None
    ) -> User | None:
        del iserver, certificate
        if username is None:
            return User(role=UserRole.User)
        return User(role=UserRole.User, name=username) if (username, password) == ("technician", "juice 4!") else None


class Wire:
    """The connection between link and plant, which can swallow an answer or be cut."""

    def __init__(self, plant: UaPlant) -> None:
        self.heard = asyncio.Event()
        self.left = asyncio.Event()
        """Set when the link has closed, and all that it sent was seen."""
        self.port = 0
        self.octets_up = bytearray()
        self._plant = plant
        self._server: asyncio.Server | None = None
        self._ends: set[asyncio.StreamWriter] = set()
        self._tasks: set[asyncio.Task[None]] = set()

    async def __aenter__(self) -> Self:
        self._server = await asyncio.start_server(self._connect, "127.0.0.1", 0)
        self.port = self._server.sockets[0].getsockname()[1]
        return self

    async def __aexit__(
        self, _kind: type[BaseException] | None, _fault: BaseException | None, _trace: TracebackType | None
    ) -> None:
        if self._server is not None:
            self._server.close()
        self.hang_up()
        await asyncio.gather(*self._tasks, return_exceptions=True)

    @property
    def url(self) -> str:
        """Where the link finds the plant."""
        return f"opc.tcp://127.0.0.1:{self.port}/skid"

    def hang_up(self) -> None:
        """Cut every connection, now."""
        for end in list(self._ends):
            end.transport.abort()

    async def _connect(self, reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        task = asyncio.current_task()
        assert task is not None
        self._tasks.add(task)
        plant_reader, plant_writer = await asyncio.open_connection("127.0.0.1", self._plant.port)
        self._ends |= {writer, plant_writer}
        try:
            await asyncio.gather(self._up(reader, plant_writer), self._down(plant_reader, writer))
        finally:
            for end in (writer, plant_writer):
                end.transport.abort()
                self._ends.discard(end)
            self._tasks.discard(task)

    async def _up(self, reader: asyncio.StreamReader, plant: asyncio.StreamWriter) -> None:
        with suppress(OSError):
            while octets := await reader.read(65536):
                self.octets_up += octets
                plant.write(octets)
                await plant.drain()
        self.left.set()
        plant.transport.abort()

    async def _down(self, plant: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        with suppress(OSError):
            while octets := await plant.read(65536):
                reaction = self._plant.reactions.popleft() if self._plant.reactions else Trouble.NONE
                if reaction is Trouble.CLOSED:
                    break
                if reaction is not Trouble.SILENT:
                    writer.write(octets)
                    await writer.drain()
                self.heard.set()
        writer.transport.abort()


def _free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port: int = probe.getsockname()[1]
        return port
