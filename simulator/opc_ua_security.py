"""Who may enter the plant's OPC UA server: its own certificate, the clients it trusts, and persons with roles.

The PKI folder holds ``own/`` (certificate and key, made on first use), ``trusted/`` (certificates of clients, DER or
PEM; read again at every connection) and ``rejected/`` (clients that were turned away: a person who knows
one moves it to ``trusted/``).
"""

import argparse
import hashlib
import hmac
import socket
from contextlib import suppress
from dataclasses import dataclass, field
from enum import Enum
from pathlib import Path

from asyncua import ua
from asyncua.common.utils import ServiceError
from asyncua.crypto.cert_gen import setup_self_signed_certificate
from asyncua.crypto.permission_rules import User, UserRole
from asyncua.crypto.validator import CertificateValidator
from asyncua.server.internal_server import InternalServer
from asyncua.server.user_managers import UserManager
from asyncua.ua.status_codes import StatusCodes
from cryptography import x509
from cryptography.hazmat.primitives.serialization import Encoding
from cryptography.x509.oid import ExtendedKeyUsageOID

APPLICATION_URI = "urn:soft-plant"
SECURE_POLICIES = [
    ua.SecurityPolicyType.Basic256Sha256_Sign,
    ua.SecurityPolicyType.Basic256Sha256_SignAndEncrypt,
    ua.SecurityPolicyType.Aes128Sha256RsaOaep_Sign,
    ua.SecurityPolicyType.Aes128Sha256RsaOaep_SignAndEncrypt,
    ua.SecurityPolicyType.Aes256Sha256RsaPss_Sign,
    ua.SecurityPolicyType.Aes256Sha256RsaPss_SignAndEncrypt,
]


class Role(Enum):
    """What a person may do."""

    READ = "read"
    OPERATE = "operate"


@dataclass(frozen=True, slots=True)
class Account:
    """A person with a password."""

    name: str
    password: str = field(repr=False)
    role: Role


@dataclass
class Person(User):
    """Who a session belongs to."""

    role: UserRole = UserRole.User
    may_operate: bool = False


@dataclass(frozen=True, slots=True)
class Access:
    """How the server is guarded.  ``anonymous`` ``None`` turns nameless sessions away.

    ``certificates`` maps a person's own certificate (DER) to a role.
    """

    pki: Path
    accounts: tuple[Account, ...] = ()
    certificates: tuple[tuple[bytes, Role], ...] = ()
    anonymous: Role | None = Role.READ
    is_none_offered: bool = False
    is_every_client_trusted: bool = False

    @property
    def certificate_file(self) -> Path:
        """The server's own certificate, DER."""
        return self.pki / "own" / "certificate.der"

    @property
    def key_file(self) -> Path:
        """The server's own key, PEM."""
        return self.pki / "own" / "key.pem"

    @property
    def policies(self) -> list[ua.SecurityPolicyType]:
        """The endpoints that are offered."""
        return [ua.SecurityPolicyType.NoSecurity, *SECURE_POLICIES] if self.is_none_offered else SECURE_POLICIES

    @property
    def identity_tokens(self) -> list[type]:
        """The kinds of identity that are asked for."""
        tokens: list[type] = [ua.UserNameIdentityToken]
        if self.anonymous is not None:
            tokens.append(ua.AnonymousIdentityToken)
        if self.certificates:
            tokens.append(ua.X509IdentityToken)
        return tokens

    async def make_own(self) -> None:
        """Make the folders, and key and certificate where they are missing, expired or of another host."""
        for name in ("own", "trusted", "rejected"):
            (self.pki / name).mkdir(mode=0o700, parents=True, exist_ok=True)
        await setup_self_signed_certificate(
            self.key_file,
            self.certificate_file,
            APPLICATION_URI,
            socket.gethostname(),
            [ExtendedKeyUsageOID.SERVER_AUTH],
            {"organizationName": "soft plant"},
        )
        self.key_file.chmod(0o600)

    async def admit(self, channel_certificate: bytes | None, asked: ua.CreateSessionParameters) -> None:
        """Raise ``ServiceError`` unless the client on this channel may have a session."""
        if channel_certificate is None:
            return  # the channel has no security; whether that is offered was asked before
        if asked.ClientCertificate != channel_certificate:
            raise ServiceError(StatusCodes.BadCertificateInvalid)
        certificate = x509.load_der_x509_certificate(channel_certificate)
        await CertificateValidator()(certificate, asked.ClientDescription)
        if not self.is_every_client_trusted and channel_certificate not in self._trusted():
            rejected = self.pki / "rejected" / f"{hashlib.sha256(channel_certificate).hexdigest()}.der"
            rejected.write_bytes(channel_certificate)
            raise ServiceError(StatusCodes.BadCertificateUntrusted)

    def _trusted(self) -> set[bytes]:
        trusted = set()
        for file in (self.pki / "trusted").iterdir():
            with suppress(ValueError):  # a file that is no certificate trusts nobody
                trusted.add(read_certificate(file))
        return trusted


class Persons(UserManager):
    """Finds the person of a session."""

    def __init__(self, access: Access) -> None:
        self._access = access

    def get_user(
        self,
        iserver: InternalServer,
        username: str | None = None,
        password: str | None = None,
        certificate: bytes | None = None,
    ) -> Person | None:
        """The person, or ``None`` to turn the session away."""
        if username is not None:
            for account in self._access.accounts:
                is_right = hmac.compare_digest(account.password.encode(), (password or "").encode())
                if account.name == username and is_right:
                    return Person(name=username, may_operate=account.role is Role.OPERATE)
            return None
        for known, role in self._access.certificates:
            if known == certificate:
                return Person(name="certificate", may_operate=role is Role.OPERATE)
        if self._access.anonymous is None:
            return None
        return Person(may_operate=self._access.anonymous is Role.OPERATE)


def access_from(options: argparse.Namespace, pki: Path) -> Access:
    """What the command line says, with the folder ``pki``.  Raises ``ValueError`` with the remedy, or ``OSError``."""
    lines = options.opc_ua_users.read_text(encoding="utf-8").splitlines() if options.opc_ua_users else []
    lines = [line for line in lines if line.strip() and not line.startswith("#")]
    return Access(
        pki=pki,
        accounts=tuple(_to_account(line) for line in [*lines, *options.opc_ua_user]),
        certificates=tuple(_to_certificate(word) for word in options.opc_ua_user_certificate),
        anonymous=None if options.opc_ua_anonymous == "none" else Role(options.opc_ua_anonymous),
        is_none_offered=options.opc_ua_none,
        is_every_client_trusted=options.opc_ua_trust_all,
    )


def read_certificate(file: Path) -> bytes:
    """A certificate as DER, from a DER or PEM file.  Raises ``ValueError`` when it is none, or ``OSError``."""
    content = file.read_bytes()
    load = x509.load_pem_x509_certificate if file.suffix == ".pem" else x509.load_der_x509_certificate
    try:
        return load(content).public_bytes(Encoding.DER)
    except ValueError as reason:
        raise ValueError(f"{file} is no certificate; give it as DER, or as PEM in a file named .pem") from reason


def thumbprint(file: Path) -> str:
    """SHA-256 over the DER certificate, in hexadecimal."""
    return hashlib.sha256(read_certificate(file)).hexdigest()


def _to_account(line: str) -> Account:
    name, _, rest = line.strip().partition(":")
    password, _, role = rest.rpartition(":")
    if not (name and password and role in [known.value for known in Role]):
        raise ValueError(f"{name or 'an account'}: write NAME:PASSWORD:ROLE with the role read or operate")
    return Account(name, password, Role(role))


def _to_certificate(word: str) -> tuple[bytes, Role]:
    file, _, role = word.rpartition(":")
    if role not in [known.value for known in Role]:
        raise ValueError(f"{word}: write FILE:ROLE with the role read or operate")
    return read_certificate(Path(file)), Role(role)
