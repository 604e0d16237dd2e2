"""The OPC UA server of the soft plant, on asyncua: the same loops from the same scan as the register map.

Values are shown after each scan with the instant of the scan as source timestamp: PV and the clock always, any other
tag when it has changed.  What a client writes acts at once, as in a PLC's memory, and is shown at once.
All nodes of one write request act within one pass of the event loop, so no scan falls between them.  A new ``sequence``
is written after the other nodes of its request, and not at all when one of its loop was refused: the guard
never sees a new number with an old output.
"""

import asyncio
from collections.abc import Sequence
from contextlib import suppress
from datetime import UTC, datetime, timedelta
from math import nan
from typing import cast

from asyncua import ua
from asyncua.common.callback import CallbackType, ServerItemCallback
from asyncua.common.utils import ServiceError
from asyncua.crypto.permission_rules import User
from asyncua.server.address_space import AddressSpace, AttributeService, NodeData
from asyncua.server.internal_server import InternalServer
from asyncua.server.internal_session import InternalSession
from asyncua.ua.attribute_ids import AttributeIds
from asyncua.ua.status_codes import StatusCodes

from simulator.faults import Quality, WireFaults
from simulator.loop import Loop, WriteRefused
from simulator.opc_ua_security import APPLICATION_URI, Access, Person, Persons, thumbprint
from simulator.opc_ua_tags import Tag, add_plant, to_status, to_variant
from simulator.opc_ua_wire import GuardedServer
from simulator.plc import Plc

ALWAYS_SHOWN = ("pv", "plc_clock_ms")
STATUS_CODES = {
    Quality.GOOD: to_status(StatusCodes.Good),
    Quality.BAD: to_status(StatusCodes.BadDeviceFailure),
    Quality.UNCERTAIN: to_status(StatusCodes.UncertainLastUsableValue),
    Quality.FORCED: to_status(StatusCodes.GoodLocalOverride),
    Quality.CLAMPED: to_status(StatusCodes.GoodClamped),
}
SENSOR_FAILED = to_status(StatusCodes.BadSensorFailure)
MISTYPES = {
    ua.VariantType.Float: ua.VariantType.Double,
    ua.VariantType.UInt16: ua.VariantType.Int32,
    ua.VariantType.UInt32: ua.VariantType.Int64,
    ua.VariantType.Int32: ua.VariantType.UInt32,
    ua.VariantType.Boolean: ua.VariantType.Byte,
}


class OpcUaServer:
    """Serves a plant; ``port`` 0 takes a free one.  ``show`` is to be awaited after each scan."""

    def __init__(self, plc: Plc, wire: WireFaults, access: Access, *, host: str = "127.0.0.1", port: int = 0) -> None:
        self.access = access
        self._plc = plc
        self._wire = wire
        internal = _Internal(access)
        self._server = GuardedServer(internal, access, wire)
        self._server.socket_address = (host, port)
        self._tags: dict[ua.NodeId, Tag] = {}
        self._tags_of: list[tuple[Loop, list[Tag]]] = []
        self._readings: dict[ua.NodeId, float] = {}
        self._shown: dict[ua.NodeId, ua.DataValue] = {}
        self._shown_scan = -1
        self._is_stale = True
        self._followed = _counters(wire)
        self._restarting: asyncio.Task[None] | None = None
        internal.attribute_service = _TagService(internal.aspace, self)

    @property
    def url(self) -> str:
        """Where clients connect."""
        host, port = self._server.socket_address or ("", 0)
        return f"opc.tcp://{host}:{port}/soft-plant"

    @property
    def identity(self) -> dict[str, str]:
        """The server's own certificate: its file and its SHA-256 thumbprint."""
        file = self.access.certificate_file
        return {"opc_ua_certificate": str(file), "opc_ua_thumbprint": thumbprint(file)}

    async def wait_for_restart(self) -> None:
        """Return when no restart is under way any more."""
        if self._restarting is not None:
            await self._restarting

    async def start(self) -> None:
        """Make what is missing of the PKI, build the address space and listen.  Raises ``OSError``."""
        await self.access.make_own()
        server = self._server
        server.set_server_name("Soft plant")
        server.manufacturer_name = "none"
        server.product_uri = "urn:soft-plant:server"
        await server.init()
        await server.set_application_uri(APPLICATION_URI)
        await server.load_certificate(self.access.certificate_file)
        await server.load_private_key(self.access.key_file)
        server.set_security_policy(self.access.policies)
        server.set_identity_tokens(self.access.identity_tokens)
        server.set_endpoint(self.url)
        for tag in await add_plant(server, self._plc):
            self._tags[tag.node_id] = tag
            server.set_attribute_value_callback(tag.node_id, self._read)
            server.set_attribute_value_setter(tag.node_id, self._keep)
        for loop in self._plc.loops.values():
            self._tags_of.append((loop, [tag for tag in self._tags.values() if tag.loop is loop]))
        for event, listener in (
            (CallbackType.PreRead, self._hold_request),
            (CallbackType.PreWrite, self._hold_request),
            (CallbackType.PostRead, self._hold_answer),
            (CallbackType.PostWrite, self._hold_answer),
        ):
            server.subscribe_server_callback(event, listener)
        await self.show()
        await server.start()

    async def stop(self) -> None:
        """Close the listener and all connections."""
        if self._restarting is not None:
            self._restarting.cancel()
            with suppress(asyncio.CancelledError):
                await self._restarting
        await self._server.stop()

    async def show(self, age_s: float = 0.0) -> None:
        """Show what the plant is now; ``age_s`` tells how long ago its scan began."""
        stamp = datetime.now(UTC) - timedelta(seconds=age_s)
        is_new_scan, self._shown_scan = self._plc.scan_count != self._shown_scan, self._plc.scan_count
        is_stale, self._is_stale = self._is_stale, False
        common = {"plc_clock_ms": self._plc.clock_ms, "boot_count": self._plc.boot_count}
        for loop, tags in self._tags_of:
            readings = loop.readings() | common
            for tag in tags:
                reading = readings[tag.name]
                is_due = is_stale or (is_new_scan and tag.name in ALWAYS_SHOWN)
                if is_due or reading != self._readings[tag.node_id]:
                    self._readings[tag.node_id] = reading
                    await self._server.write_attribute_value(tag.node_id, self._to_data_value(tag, reading, stamp))

    async def follow_faults(self) -> None:
        """Do what faults have asked for since the last call."""
        self._is_stale = True
        closings, session_closings, restarts = _counters(self._wire)
        were, self._followed = self._followed, (closings, session_closings, restarts)
        if closings != were[0]:
            self._server.reset_connections()
        if session_closings != were[1]:
            await self._server.close_sessions()
        if restarts != were[2] and (self._restarting is None or self._restarting.done()):
            self._restarting = asyncio.create_task(self._restart(), name="opc ua restart")

    def take(self, writes: Sequence[ua.WriteValue], user: User) -> list[ua.StatusCode | None]:
        """Take or refuse what is written; ``None`` stands for nodes that are none of the plant's tags.

        Never waits, so that the next scan sees all of it.
        """
        outcomes: list[ua.StatusCode | None] = [None] * len(writes)
        tags = [self._tags.get(write.NodeId) for write in writes]
        refused: set[Loop] = set()
        # Sorting is stable: the order of the request, with sequence numbers last.
        for number in sorted(range(len(writes)), key=lambda number: _is_sequence(tags[number])):
            tag = tags[number]
            if tag is None:
                continue
            code = self._judge(tag, writes[number], user)
            if code == StatusCodes.Good and _is_sequence(tag) and tag.loop in refused:
                code = StatusCodes.BadInvalidState
            if code == StatusCodes.Good:
                code = _write(tag, writes[number].Value)
            if code != StatusCodes.Good:
                refused.add(tag.loop)
            outcomes[number] = to_status(code)
        return outcomes

    def _judge(self, tag: Tag, write: ua.WriteValue, user: User) -> int:
        sent = write.Value
        has_stamp = sent.SourceTimestamp is not None or sent.ServerTimestamp is not None
        is_good = sent.StatusCode is None or sent.StatusCode.value == StatusCodes.Good
        is_refused = str(tag.node_id.Identifier) in self._wire.refused_tags
        code = StatusCodes.Good
        if write.AttributeId != AttributeIds.Value or not tag.is_writable or is_refused:
            code = StatusCodes.BadNotWritable
        elif not (isinstance(user, Person) and user.may_operate):
            code = StatusCodes.BadUserAccessDenied
        elif write.IndexRange:
            code = StatusCodes.BadIndexRangeNoData
        elif not is_good or (has_stamp and self._wire.are_stamped_writes_refused):
            code = StatusCodes.BadWriteNotSupported
        elif sent.Value is None or sent.Value.is_array or sent.Value.VariantType is not self._type_of(tag):
            code = StatusCodes.BadTypeMismatch
        return code

    def _type_of(self, tag: Tag) -> ua.VariantType:
        return MISTYPES[tag.type] if str(tag.node_id.Identifier) in self._wire.mistyped_tags else tag.type

    def _to_data_value(self, tag: Tag, reading: float, stamp: datetime) -> ua.DataValue:
        name = str(tag.node_id.Identifier)
        status = STATUS_CODES[self._wire.tag_qualities.get(name, Quality.GOOD)]
        if tag.name == "pv" and tag.loop.transmitter.is_failed:
            status = SENSOR_FAILED
        if self._wire.are_stamps_frozen and tag.node_id in self._shown:
            stamp = self._shown[tag.node_id].SourceTimestamp or stamp
        return ua.DataValue(to_variant(reading, self._type_of(tag)), status, cast("ua.DateTime", stamp))

    def _read(self, node_id: ua.NodeId, _attribute: AttributeIds) -> ua.DataValue:
        shown = self._shown[node_id]
        return ua.DataValue(
            shown.Value, shown.StatusCode, shown.SourceTimestamp, cast("ua.DateTime", datetime.now(UTC))
        )

    def _keep(self, node: NodeData, _attribute: AttributeIds, shown: ua.DataValue) -> None:
        self._shown[node.nodeid] = shown

    async def _hold_request(self, event: ServerItemCallback, _service: object) -> None:
        if event.is_external:
            await self._hold(self._wire.request_delay_s, "drop_requests")

    async def _hold_answer(self, event: ServerItemCallback, _service: object) -> None:
        if event.is_external:
            await self._hold(self._wire.answer_delay_s, "drop_answers")

    async def _hold(self, delay_s: float, dropped: str) -> None:
        if delay_s > 0.0:
            await asyncio.sleep(delay_s)
        if self._wire.spend(dropped):
            await asyncio.get_running_loop().create_future()  # until the connection is left

    async def _restart(self) -> None:
        await self._server.close_sessions()
        await self._server.close_listener()
        await asyncio.sleep(self._wire.restart_pause_s)
        await self._server.listen()


class _Internal(InternalServer):
    """asyncua's inner server, which lets in only user certificates that are known."""

    def __init__(self, access: Access) -> None:
        super().__init__(user_manager=Persons(access))
        self._known = [certificate for certificate, _ in access.certificates]

    def verify_x509_token(
        self, isession: InternalSession, token: ua.X509IdentityToken, signature: ua.SignatureData
    ) -> bytes:
        certificate = super().verify_x509_token(isession, token, signature)
        if certificate not in self._known:
            raise ServiceError(StatusCodes.BadIdentityTokenRejected)
        return certificate


class _TagService(AttributeService):
    """asyncua's attribute service, which leaves writes of the plant's tags to the plant."""

    def __init__(self, aspace: AddressSpace, plant: OpcUaServer) -> None:
        super().__init__(aspace)
        self._plant = plant

    async def write(self, params: ua.WriteParameters, user: User = User()) -> list[ua.StatusCode]:  # noqa: B008
        """The outcome of each write, in order."""
        outcomes = self._plant.take(params.NodesToWrite, user)
        if any(outcomes):
            await self._plant.show()
        return [
            outcome if outcome is not None else await self._write_other(write, user)
            for write, outcome in zip(params.NodesToWrite, outcomes, strict=True)
        ]

    async def _write_other(self, write: ua.WriteValue, user: User) -> ua.StatusCode:
        if write.NodeId not in self._aspace:
            return to_status(StatusCodes.BadNodeIdUnknown)
        return (await super().write(ua.WriteParameters([write]), user))[0]


def _write(tag: Tag, sent: ua.DataValue) -> int:
    number = nan if sent.Value is None else float(sent.Value.Value)
    try:
        tag.loop.write(tag.name, number)
    except WriteRefused as refusal:
        return int(StatusCodes.BadNotWritable if refusal.is_read_only else StatusCodes.BadOutOfRange)
    return int(StatusCodes.Good)


def _is_sequence(tag: Tag | None) -> bool:
    return tag is not None and tag.name == "sequence"


def _counters(wire: WireFaults) -> tuple[int, int, int]:
    return wire.close_requests, wire.session_closings, wire.server_restarts
