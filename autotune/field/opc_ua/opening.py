"""From an endpoint to an activated session: whom we trust, how messages are protected, and as whom we come.

Nothing is sent to a server that isn't the pinned one: neither a user's name nor a password nor a question.
"""

import asyncio
import os
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from urllib.parse import urlsplit

from asyncua import ua
from asyncua.client.client import Client
from asyncua.crypto import security_policies
from asyncua.crypto.uacrypto import CertProperties, load_certificate, load_private_key
from cryptography import x509
from cryptography.hazmat.primitives.asymmetric.types import PrivateKeyTypes
from cryptography.hazmat.primitives.serialization import Encoding

from autotune.config.types import MessageSecurity, OpcUaEndpoint, SecurityPolicy
from autotune.errors import LinkClosed, LinkError
from autotune.field.facts import CertificateFact
from autotune.field.opc_ua.certificates import (
    OwnCertificate,
    is_same_thumbprint,
    own_certificate,
    server_faults,
    thumbprint_of,
    time_faults,
)
from autotune.field.opc_ua.session import Session, new_client

_POLICIES: dict[SecurityPolicy, type[security_policies.SecurityPolicy]] = {
    SecurityPolicy.BASIC256SHA256: security_policies.SecurityPolicyBasic256Sha256,
    SecurityPolicy.AES128_SHA256_RSA_OAEP: security_policies.SecurityPolicyAes128Sha256RsaOaep,
    SecurityPolicy.AES256_SHA256_RSA_PSS: security_policies.SecurityPolicyAes256Sha256RsaPss,
}
_MODES = {
    MessageSecurity.SIGN: ua.MessageSecurityMode.Sign,
    MessageSecurity.SIGN_AND_ENCRYPT: ua.MessageSecurityMode.SignAndEncrypt,
}
_MODE_WORDS = {
    ua.MessageSecurityMode.None_: "none",
    ua.MessageSecurityMode.Sign: "sign",
    ua.MessageSecurityMode.SignAndEncrypt: "sign and encrypt",
}


@dataclass(frozen=True, slots=True)
class _Person:
    """As whom a session is opened; nothing of it is ever printed."""

    user: str | None = None
    password: str | None = None
    certificate: x509.Certificate | None = None
    key: PrivateKeyTypes | None = None


class Opening:
    """Opens sessions to one endpoint, each with a fresh client; remembers the server's certificate."""

    def __init__(self, endpoint: OpcUaEndpoint) -> None:
        self._endpoint = endpoint
        self._own: OwnCertificate | None = None
        self._server: x509.Certificate | None = None

    @property
    def certificates(self) -> tuple[CertificateFact, ...]:
        """Those in use: ours once it was needed, the server's once it was found to be the pinned one."""
        facts = []
        if self._own is not None:
            own = self._own
            expires = own.certificate.not_valid_after_utc
            facts.append(CertificateFact("our own", own.thumbprint, expires, str(own.path)))
        if self._server is not None:
            server = self._server
            facts.append(CertificateFact("the server's", thumbprint_of(server), server.not_valid_after_utc))
        return tuple(facts)

    async def open(self) -> Session:
        """A fresh, activated session.  Raises ``LinkTimeout``, or ``LinkClosed`` with what to do."""
        endpoint = self._endpoint
        person = await _person(endpoint)
        client = new_client(endpoint)
        client.user_certificate, client.user_private_key = person.certificate, person.key
        if endpoint.security is not MessageSecurity.NONE:
            await self._secure(client)
        session = Session(client, endpoint)
        try:
            await session.open_channel()
            await session.create()
            if person.user is not None and is_readable_by_others(endpoint.security, _token_policy(client)):
                raise LinkClosed(
                    f"{endpoint.url} would have the password of {person.user!r} sent so that others can read it; "
                    'write security = "sign and encrypt", or have the server changed'
                )
            await session.activate(person.user, person.password, person.certificate)
        except LinkError as fault:
            session.drop()
            self._server = None  # it may have another one now, which has to be looked at before the next attempt
            raise type(fault)(f"{fault}{self._hint(str(fault))}") from fault
        except BaseException:
            session.drop()
            raise
        return session

    async def _secure(self, client: Client) -> None:
        endpoint = self._endpoint
        if self._own is None:
            self._own = await asyncio.to_thread(own_certificate, endpoint.pki_dir)
        own = self._own
        faults = list(time_faults(own.certificate, datetime.now(UTC)))
        if faults:
            raise LinkClosed(
                f"our own certificate {own.path} can't be used: {'; '.join(faults)}; move it and its key away, so "
                "that new ones are made, and let the server trust the new one"
            )
        if self._server is None:
            self._server = await self._look_at_server()
        client.application_uri = own.application_uri
        await client.set_security(
            _POLICIES[endpoint.policy],
            CertProperties(own.der, "der"),
            CertProperties(own.key_pem, "pem"),
            server_certificate=CertProperties(self._server.public_bytes(Encoding.DER), "der"),
            mode=_MODES[endpoint.security],
        )

    async def _look_at_server(self) -> x509.Certificate:
        """The certificate that the server shows to everybody, if it is the pinned one and nothing is wrong with it."""
        endpoint = self._endpoint
        offers = await offered_endpoints(endpoint)
        wanted = _POLICIES[endpoint.policy].URI, _MODES[endpoint.security]
        offer = next((one for one in offers if (one.SecurityPolicyUri, one.SecurityMode) == wanted), None)
        if offer is None:
            listed = "; ".join(dict.fromkeys(_offer_in_words(one) for one in offers)) or "nothing"
            raise LinkClosed(
                f"{endpoint.url} does not offer {endpoint.policy.value} with {endpoint.security.value}; "
                f"it offers: {listed}; change security and security_policy, or the server's settings"
            )
        certificate = _first_certificate(endpoint, offer.ServerCertificate)
        seen = thumbprint_of(certificate)
        if not is_same_thumbprint(endpoint.server_thumbprint, seen):
            raise LinkClosed(f"{_not_pinned(endpoint, seen)}{self._own_in_words()}")
        host = endpoint.server_name or urlsplit(endpoint.url).hostname or ""
        faults = list(server_faults(certificate, offer.Server.ApplicationUri, host, datetime.now(UTC)))
        if faults:
            raise LinkClosed(
                f"{endpoint.url}: the server's certificate is refused: {'; '.join(faults)}; "
                "have a right certificate installed in the server and its thumbprint put into the file"
            )
        return certificate

    def _own_in_words(self) -> str:
        own = self._own
        return "" if own is None else f"; let it trust ours in turn: {own.path}, SHA-256 thumbprint {own.thumbprint}"

    def _hint(self, fault: str) -> str:
        own = self._own
        if "UserAccessDenied" in fault or "IdentityToken" in fault:
            who = f"user {self._endpoint.user!r}" if self._endpoint.user else "an anonymous user or this certificate"
            return f"; the server does not let in {who}: check user, password_from and the server's list of users"
        if own is not None and (
            "SecurityChecks" in fault or "Certificate" in fault or "lost" in fault or "closed" in fault
        ):
            return (
                f"; the server may not trust our certificate yet: let it trust {own.path} "
                f"with the SHA-256 thumbprint {own.thumbprint}"
            )
        return ""


def is_readable_by_others(security: MessageSecurity, token_policy_uri: str | None) -> bool:
    """Whether a password would cross the wire unencrypted: neither as a message nor by itself."""
    is_bare = not token_policy_uri or token_policy_uri == security_policies.SecurityPolicyNone.URI
    return security is MessageSecurity.NONE or (is_bare and security is not MessageSecurity.SIGN_AND_ENCRYPT)


def _token_policy(client: Client) -> str | None:
    uri: str | None = client.server_policy(ua.UserTokenType.UserName).SecurityPolicyUri
    return uri


async def offered_endpoints(endpoint: OpcUaEndpoint) -> list[ua.EndpointDescription]:
    """What the server offers to everybody; asked over a connection of its own.  Raises as ``Opening.open``."""
    session = Session(new_client(endpoint), endpoint)
    try:
        await session.open_channel()
        return await session.ask(session.client.get_endpoints())
    finally:
        session.drop()


async def _person(endpoint: OpcUaEndpoint) -> _Person:
    if endpoint.user_certificate:
        certificate, key = (endpoint.folder / name for name in (endpoint.user_certificate, endpoint.user_key))
        try:
            return _Person(certificate=await load_certificate(certificate), key=await load_private_key(key))
        except (OSError, ValueError, TypeError) as fault:
            raise LinkClosed(
                f"the user's certificate {certificate} or its key {key} can't be read; both are PEM or DER, the key "
                "without a password"
            ) from fault
    if not endpoint.user:
        return _Person()
    return _Person(endpoint.user, _password(endpoint))


def _password(endpoint: OpcUaEndpoint) -> str:
    """The password from where the file says it lies; it is put into no text."""
    kind, _, name = endpoint.password_from.partition(":")
    if kind == "env":
        password = os.environ.get(name, "")
        where = f"the environment variable {name}"
    else:
        where = f"the file {endpoint.folder / name}"
        password = _first_line(endpoint.folder / name)
    if not password:
        raise LinkClosed(f"{where} holds no password for {endpoint.user!r} of {endpoint.url}; set it, then try again")
    return password


def _first_line(path: Path) -> str:
    try:
        return path.read_text("utf-8").partition("\n")[0].rstrip("\r")
    except (OSError, UnicodeDecodeError) as fault:
        raise LinkClosed(f"the file {path} with the password can't be read; check its name and rights") from fault


def _first_certificate(endpoint: OpcUaEndpoint, chain: bytes | None) -> x509.Certificate:
    """The server's own certificate; others of its chain may follow it."""
    try:
        der = chain or b""
        return x509.load_der_x509_certificate(der[: int.from_bytes(der[2:4], "big") + 4])
    except ValueError as fault:
        raise LinkClosed(
            f"{endpoint.url} shows no certificate that can be read; check the server's settings"
        ) from fault


def _not_pinned(endpoint: OpcUaEndpoint, seen: str) -> str:
    line = f'server_thumbprint = "{seen}"'
    if not endpoint.server_thumbprint:
        return (
            f"{endpoint.url} is not trusted yet: its certificate has the SHA-256 thumbprint {seen}; compare it at "
            f"the server itself, and if it is the same, add to the controller's table: {line}"
        )
    return (
        f"{endpoint.url} shows another certificate than the pinned one: SHA-256 thumbprint {seen}; if the server got "
        f"a new certificate, compare it at the server itself, then write: {line}; if not, somebody may be in between"
    )


def _offer_in_words(offer: ua.EndpointDescription) -> str:
    policy = (offer.SecurityPolicyUri or "").rpartition("#")[2]
    return "none" if policy == "None" else f"{policy} with {_MODE_WORDS.get(offer.SecurityMode, '(nothing)')}"
