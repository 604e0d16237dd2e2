"""A plant behind its OPC UA server, and clients for it: shared by the tests of this folder."""

from collections.abc import AsyncIterator, Sequence
from contextlib import asynccontextmanager
from dataclasses import dataclass
from pathlib import Path

from asyncua import ua
from asyncua.client.client import Client
from asyncua.crypto.cert_gen import setup_self_signed_certificate
from asyncua.ua.attribute_ids import AttributeIds
from cryptography.x509.oid import ExtendedKeyUsageOID

from simulator.faults import WireFaults, clear_all, strike
from simulator.opc_ua_security import Access
from simulator.opc_ua_server import OpcUaServer
from simulator.opc_ua_tags import named
from simulator.plc import Plc
from simulator.rig import load_rig

NAMESPACE = 2
FLOAT, UINT16, UINT32, INT32 = (
    ua.VariantType.Float,
    ua.VariantType.UInt16,
    ua.VariantType.UInt32,
    ua.VariantType.Int32,
)


@dataclass(slots=True)
class Plant:
    """A juice skid whose scans the test does itself."""

    plc: Plc
    wire: WireFaults
    server: OpcUaServer

    async def scan(self, age_s: float = 0.0) -> None:
        """One more scan, and what it shows."""
        self.plc.scan(round(self.plc.t_s + self.plc.scan_s, 3))
        await self.server.show(age_s)

    async def fault(self, line: str) -> None:
        """Switch a fault on, as the panel does."""
        strike(self.wire, self.plc, line.split())
        await self.server.follow_faults()
        await self.server.show()

    async def heal(self) -> None:
        """All faults off."""
        clear_all(self.wire, self.plc)
        await self.server.follow_faults()
        await self.server.show()


@dataclass(frozen=True, slots=True)
class Identity:
    """A client's own key and certificate."""

    uri: str
    certificate: Path
    key: Path

    @classmethod
    async def make(cls, folder: Path, name: str) -> "Identity":
        """A new self-signed one."""
        identity = cls(f"urn:test:{name}", folder / f"{name}.der", folder / f"{name}.pem")
        usage = [ExtendedKeyUsageOID.CLIENT_AUTH]
        await setup_self_signed_certificate(identity.key, identity.certificate, identity.uri, "localhost", usage, {})
        return identity


@asynccontextmanager
async def serving(access: Access) -> AsyncIterator[Plant]:
    """A plant that is served until the end of the block."""
    plc, wire = load_rig("juice-skid").build(), WireFaults()
    server = OpcUaServer(plc, wire, access)
    await server.start()
    try:
        yield Plant(plc, wire, server)
    finally:
        await server.stop()


@asynccontextmanager
async def connected(
    plant: Plant, user: str | None = None, password: str = "", security: str | None = None, uri: str | None = None
) -> AsyncIterator[Client]:
    """A client with a session."""
    client = Client(plant.server.url, timeout=5.0, watchdog_intervall=60.0)
    client.session_timeout = 600_000
    if uri is not None:
        client.application_uri = uri
    if user is not None:
        client.set_user(user)
        client.set_password(password)
    if security is not None:
        await client.set_security_string(security)
    await client.connect()
    try:
        yield client
    finally:
        await client.disconnect()


async def read(client: Client, *names: str) -> list[ua.DataValue]:
    """All named tags in one request."""
    return await client.read_attributes([client.get_node(named(name, NAMESPACE)) for name in names])


async def write(client: Client, *writes: tuple[str, object, ua.VariantType]) -> list[int]:
    """Write bare values in one request; returns the status codes."""
    sent = [(name, ua.DataValue(ua.Variant(content, kind))) for name, content, kind in writes]
    return await write_data_values(client, sent)


async def write_data_values(client: Client, sent: Sequence[tuple[str, ua.DataValue]]) -> list[int]:
    """Write whole data values in one request; returns the status codes."""
    params = ua.WriteParameters()
    for name, data_value in sent:
        item = ua.WriteValue()
        item.NodeId = named(name, NAMESPACE)
        item.AttributeId = ua.UInt32(AttributeIds.Value)
        item.Value = data_value
        params.NodesToWrite.append(item)
    return [int(code.value) for code in await client.uaclient.write(params)]
