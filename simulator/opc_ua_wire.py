"""The connections of the plant's OPC UA server: asyncua's, with the doors closed that it leaves open, and with faults.

asyncua 2.1 lets a client without security in whatever the endpoints say (as long as it doesn't look at them),
judges the certificate that a client tells instead of the one it opened the channel with, and goes on serving
a session that the server has closed.  Here each is refused before the request is read.

asyncua names used beyond its public interface (each has a test): ``Server._setup_server_nodes``, ``Server._policies``,
``Server.limits``, ``BinaryServer._make_protocol``, ``OPCUAProtocol.processor``, ``UaProcessor._process_message``,
``UaProcessor._connection``, ``UaProcessor.open_secure_channel``, ``InternalServer._external_sessions``.
"""

import asyncio
from typing import cast

from asyncua import ua
from asyncua.common.utils import Buffer, ServiceError
from asyncua.server.binary_server_asyncio import BinaryServer, OPCUAProtocol
from asyncua.server.internal_server import InternalServer
from asyncua.server.internal_session import SessionState
from asyncua.server.server import Server
from asyncua.server.uaprocessor import UaProcessor
from asyncua.ua.object_ids import ObjectIds
from asyncua.ua.status_codes import StatusCodes
from asyncua.ua.ua_binary import struct_from_binary, struct_to_binary

from simulator.faults import WireFaults
from simulator.opc_ua_security import Access
from simulator.opc_ua_tags import numbered

CREATE_SESSION = numbered(ObjectIds.CreateSessionRequest_Encoding_DefaultBinary)
DISCOVERY = (
    numbered(ObjectIds.GetEndpointsRequest_Encoding_DefaultBinary),
    numbered(ObjectIds.FindServersRequest_Encoding_DefaultBinary),
    numbered(ObjectIds.CloseSecureChannelRequest_Encoding_DefaultBinary),
)


class GuardedServer(Server):
    """asyncua's server with our own connections, a listener that can be restarted, and a verified user certificate."""

    def __init__(self, internal: InternalServer, access: Access, wire: WireFaults) -> None:
        super().__init__(iserver=internal)
        self._access = access
        self._wire = wire

    async def start(self) -> None:
        """Listen at ``socket_address``.  Raises ``OSError`` when the address can't be had."""
        await self._setup_server_nodes()
        await self.iserver.start()
        try:
            await self.listen()
        except OSError:
            await self.iserver.stop()
            raise

    async def listen(self) -> None:
        """Open the listener; a port 0 becomes the one that was given."""
        host, port = cast("tuple[str, int]", self.socket_address)
        listener = _Listener(self.iserver, host, port, self.limits)
        listener.access, listener.wire = self._access, self._wire
        listener.set_policies(self._policies)
        await listener.start()
        self.socket_address = (host, listener.port)
        self.bserver = listener

    async def close_listener(self) -> None:
        """Close the listener and all connections, until ``listen``."""
        if self.bserver is not None:
            await self.bserver.stop()

    async def close_sessions(self) -> None:
        """Close all sessions of clients; their connections stay."""
        for session in tuple(self.iserver._external_sessions.values()):  # noqa: SLF001 - nothing public lists them
            await session.close_session()

    def reset_connections(self) -> None:
        """Reset all connections, without farewell."""
        for connection in tuple(self.bserver.clients) if self.bserver else ():
            if connection.transport is not None:
                connection.transport.abort()


class _Listener(BinaryServer):
    access: Access
    wire: WireFaults

    def _make_protocol(self) -> OPCUAProtocol:
        connection = _Connection(
            iserver=self.iserver,
            policies=self._policies,
            clients=self.clients,
            closing_tasks=self.closing_tasks,
            limits=self.limits,
        )
        connection.access, connection.wire = self.access, self.wire
        return connection


class _Connection(OPCUAProtocol):
    access: Access
    wire: WireFaults

    def connection_made(self, transport: asyncio.BaseTransport) -> None:
        super().connection_made(transport)
        if self.processor is not None:
            self.processor = _Processor(self.iserver, transport, self.limits)
            self.processor.access, self.processor.wire = self.access, self.wire
            self.processor.set_policies(self.policies)  # type: ignore[no-untyped-call]  # asyncua leaves it without annotations


class _Processor(UaProcessor):
    access: Access
    wire: WireFaults

    def open_secure_channel(
        self, algohdr: ua.AsymmetricAlgorithmHeader, seqhdr: ua.SequenceHeader, body: Buffer
    ) -> None:
        if self.wire.channel_lifetime_s > 0.0:
            request = struct_from_binary(ua.OpenSecureChannelRequest, body)
            longest_ms = round(1000.0 * self.wire.channel_lifetime_s)
            request.Parameters.RequestedLifetime = min(request.Parameters.RequestedLifetime, longest_ms)
            body = Buffer(struct_to_binary(request))
        super().open_secure_channel(algohdr, seqhdr, body)  # type: ignore[no-untyped-call]  # as above

    async def _process_message(
        self, typeid: ua.NodeId, requesthdr: ua.RequestHeader, seqhdr: ua.SequenceHeader, body: Buffer
    ) -> bool:
        policy = self._connection.security_policy
        is_unsecured = policy.Mode == ua.MessageSecurityMode.None_
        if is_unsecured and not self.access.is_none_offered and typeid not in DISCOVERY:
            raise ServiceError(StatusCodes.BadSecurityPolicyRejected)
        if typeid == CREATE_SESSION:
            asked = struct_from_binary(ua.CreateSessionParameters, body.copy())
            await self.access.admit(None if is_unsecured else policy.peer_certificate, asked)
        elif self.session is not None and self.session.state is SessionState.Closed and typeid not in DISCOVERY:
            raise ServiceError(StatusCodes.BadSessionClosed)
        return bool(await super()._process_message(typeid, requesthdr, seqhdr, body))  # type: ignore[no-untyped-call]  # as above
