"""Who gets into the plant's OPC UA server, and what the server relies on in asyncua."""

import inspect
import shutil
import stat
from collections.abc import AsyncIterator
from dataclasses import dataclass
from pathlib import Path

import pytest
import pytest_asyncio
from asyncua import ua
from asyncua.client.client import Client
from asyncua.crypto.uacrypto import load_certificate, load_private_key
from asyncua.server.binary_server_asyncio import BinaryServer, OPCUAProtocol
from asyncua.server.internal_server import InternalServer
from asyncua.server.server import Server
from asyncua.server.uaprocessor import UaProcessor

from simulator.opc_ua_security import APPLICATION_URI, Access, Account, Role, read_certificate, thumbprint
from tests.simulator.opc_ua import UINT16, Identity, Plant, connected, read, serving, write

pytestmark = [pytest.mark.socket, pytest.mark.asyncio(loop_scope="module")]
GOOD, USER_ACCESS_DENIED = 0, 0x801F0000
BEAT = ("TIC-204.heartbeat", 5, UINT16)


@dataclass(frozen=True, slots=True)
class Site:
    """A plant without an open endpoint and without nameless sessions, a client it trusts, and one it doesn't."""

    plant: Plant
    trusted: Identity
    stranger: Identity
    foreman: Identity

    def security(self, identity: Identity, policy: str = "Basic256Sha256", mode: str = "SignAndEncrypt") -> str:
        """What a client needs to know; the server's certificate is pinned."""
        own = self.plant.server.access.certificate_file
        return f"{policy},{mode},{identity.certificate},{identity.key},{own}"


@pytest_asyncio.fixture(scope="module", loop_scope="module")
async def site(tmp_path_factory: pytest.TempPathFactory) -> AsyncIterator[Site]:
    folder = tmp_path_factory.mktemp("clients")
    trusted, stranger, foreman = [await Identity.make(folder, name) for name in ("trusted", "stranger", "foreman")]
    access = Access(
        pki=tmp_path_factory.mktemp("pki"),
        accounts=(Account("shift", "juice", Role.OPERATE), Account("visitor", "look", Role.READ)),
        certificates=((read_certificate(foreman.certificate), Role.OPERATE),),
        anonymous=None,
    )
    async with serving(access) as plant:
        shutil.copy(trusted.certificate, access.pki / "trusted")
        yield Site(plant, trusted, stranger, foreman)


@pytest.mark.parametrize("policy", ["Basic256Sha256", "Aes128Sha256RsaOaep", "Aes256Sha256RsaPss"])
@pytest.mark.parametrize("mode", ["Sign", "SignAndEncrypt"])
async def test_every_offered_endpoint_carries_reads_and_writes(site: Site, policy: str, mode: str) -> None:
    security = site.security(site.trusted, policy, mode)
    async with connected(site.plant, "shift", "juice", security, site.trusted.uri) as client:
        [heartbeat] = await read(client, "TIC-204.heartbeat")
        assert heartbeat.StatusCode == ua.StatusCode()
        assert await write(client, BEAT) == [GOOD]


async def test_only_secured_endpoints_are_offered_and_they_can_be_listed_without_security(site: Site) -> None:
    endpoints = await Client(site.plant.server.url).connect_and_get_server_endpoints()
    assert len(endpoints) == 6
    assert {endpoint.SecurityMode for endpoint in endpoints} == {
        ua.MessageSecurityMode.Sign,
        ua.MessageSecurityMode.SignAndEncrypt,
    }
    own = read_certificate(site.plant.server.access.certificate_file)
    assert {endpoint.ServerCertificate for endpoint in endpoints} == {own}
    tokens = {token.TokenType for endpoint in endpoints for token in endpoint.UserIdentityTokens}
    assert tokens == {ua.UserTokenType.UserName, ua.UserTokenType.Certificate}


async def test_a_client_without_security_is_refused_even_if_it_never_looks_at_the_endpoints(site: Site) -> None:
    client = Client(site.plant.server.url)
    await client.connect_socket()
    try:
        await client.send_hello()
        await client.open_secure_channel()
        with pytest.raises(ua.uaerrors.BadSecurityPolicyRejected):
            await client.uaclient.create_session(ua.CreateSessionParameters())
    finally:
        client.disconnect_socket()


@pytest.mark.parametrize(("user", "password"), [("shift", "wrong"), ("shift", ""), ("nobody", "juice")])
async def test_a_wrong_name_or_password_is_refused(site: Site, user: str, password: str) -> None:
    with pytest.raises(ua.uaerrors.BadUserAccessDenied):
        async with connected(site.plant, user, password, site.security(site.trusted), site.trusted.uri):
            pass


async def test_a_nameless_session_is_refused_even_if_the_client_asks_for_what_is_not_offered(site: Site) -> None:
    client = Client(site.plant.server.url)
    client.application_uri = site.trusted.uri
    await client.set_security_string(site.security(site.trusted))
    await client.connect_socket()
    try:
        await client.send_hello()
        await client.open_secure_channel()
        await client.create_session()
        nameless = ua.UserTokenPolicy(PolicyId=ua.String("anonymous"), TokenType=ua.UserTokenType.Anonymous)
        client._policy_ids.append(nameless)  # noqa: SLF001 - a client that doesn't keep to the endpoints
        with pytest.raises(ua.uaerrors.BadIdentityTokenRejected):
            await client.activate_session()
    finally:
        client.disconnect_socket()


async def test_a_visitor_reads_and_does_not_write(site: Site) -> None:
    async with connected(site.plant, "visitor", "look", site.security(site.trusted), site.trusted.uri) as client:
        assert len(await read(client, "TIC-204.pv")) == 1
        assert await write(client, BEAT) == [USER_ACCESS_DENIED]


async def test_a_stranger_is_refused_kept_aside_and_let_in_once_trusted(site: Site) -> None:
    pki = site.plant.server.access.pki
    (pki / "trusted" / "notes.txt").write_text("certificates of those whom we let in\n", encoding="utf-8")
    security = site.security(site.stranger)
    with pytest.raises(ua.uaerrors.BadCertificateUntrusted):
        async with connected(site.plant, "shift", "juice", security, site.stranger.uri):
            pass
    rejected = pki / "rejected" / f"{thumbprint(site.stranger.certificate)}.der"
    moved = rejected.rename(pki / "trusted" / rejected.name)
    async with connected(site.plant, "shift", "juice", security, site.stranger.uri) as client:
        assert await write(client, BEAT) == [GOOD]
    moved.unlink()


async def test_a_stranger_with_a_trusted_clients_certificate_in_hand_is_refused(site: Site) -> None:
    client = Client(site.plant.server.url)
    await client.set_security_string(site.security(site.stranger))
    await client.connect_socket()
    try:
        await client.send_hello()
        await client.open_secure_channel()
        asked = ua.CreateSessionParameters(ClientCertificate=ua.ByteString(read_certificate(site.trusted.certificate)))
        asked.ClientDescription.ApplicationUri = ua.String(site.trusted.uri)
        with pytest.raises(ua.uaerrors.BadCertificateInvalid):
            await client.uaclient.create_session(asked)
    finally:
        client.disconnect_socket()


async def test_a_client_whose_name_is_not_that_of_its_certificate_is_refused(site: Site) -> None:
    with pytest.raises(ua.uaerrors.BadCertificateUriInvalid):
        async with connected(site.plant, "shift", "juice", site.security(site.trusted), "urn:test:another"):
            pass


async def sign_in_by_certificate(site: Site, person: Identity) -> list[int]:
    client = Client(site.plant.server.url, watchdog_intervall=60.0)
    client.application_uri = site.trusted.uri
    await client.set_security_string(site.security(site.trusted))
    client.user_certificate = await load_certificate(person.certificate)
    client.user_private_key = await load_private_key(person.key)
    async with client:
        return await write(client, BEAT)


async def test_a_person_may_sign_in_by_a_certificate_that_is_known(site: Site) -> None:
    assert await sign_in_by_certificate(site, site.foreman) == [GOOD]
    with pytest.raises(ua.uaerrors.BadIdentityTokenRejected):
        await sign_in_by_certificate(site, site.stranger)


async def test_the_own_certificate_is_kept_and_its_key_is_nobody_elses_to_read(tmp_path: Path) -> None:
    access = Access(pki=tmp_path / "pki")
    await access.make_own()
    first = thumbprint(access.certificate_file)
    await access.make_own()
    assert thumbprint(access.certificate_file) == first
    assert stat.S_IMODE(access.key_file.stat().st_mode) == 0o600
    assert APPLICATION_URI.encode() in read_certificate(access.certificate_file)


@pytest.mark.parametrize(
    ("owner", "name"),
    [
        (Server, "_setup_server_nodes"),
        (BinaryServer, "_make_protocol"),
        (OPCUAProtocol, "connection_made"),
        (UaProcessor, "_process_message"),
        (UaProcessor, "open_secure_channel"),
        (InternalServer, "verify_x509_token"),
    ],
)
async def test_the_names_of_asyncua_that_are_built_on_exist(owner: type, name: str) -> None:
    assert inspect.isfunction(getattr(owner, name))


async def test_the_attributes_of_asyncua_that_are_built_on_exist() -> None:
    internal = InternalServer()
    server = Server(iserver=internal)
    assert internal._external_sessions == {}  # noqa: SLF001 - that is what is asked
    assert server._policies == []  # noqa: SLF001
    assert internal.attribute_service is not None
    assert server.limits.max_message_size > 0
    internal.method_service.stop()
