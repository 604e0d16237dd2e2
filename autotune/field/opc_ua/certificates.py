"""Application certificates: our own, made once and kept, and what speaks against a server's.

After OPC 10000-6, 6.2.2 (what an application certificate holds).
"""

import os
import re
import socket
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path

from asyncua.crypto.cert_gen import (
    dump_private_key_as_pem,
    generate_private_key,
    generate_self_signed_app_certificate,
)
from cryptography import x509
from cryptography.hazmat.primitives.hashes import SHA256
from cryptography.hazmat.primitives.serialization import Encoding
from cryptography.x509.oid import ExtendedKeyUsageOID

from autotune.errors import LinkClosed

_CERTIFICATE, _KEY = "autotune-certificate.der", "autotune-key.pem"
_VALID_DAYS = 5 * 365


@dataclass(frozen=True, slots=True)
class OwnCertificate:
    """Our certificate and its key, as bytes for the library, and where they lie."""

    certificate: x509.Certificate
    der: bytes
    key_pem: bytes
    path: Path

    @property
    def application_uri(self) -> str:
        """The URI in the certificate, under which we have to appear."""
        return next(iter(_names(self.certificate, x509.UniformResourceIdentifier)), "")

    @property
    def thumbprint(self) -> str:
        """SHA-256 of the certificate, for the person who lets the server trust it."""
        return thumbprint_of(self.certificate)


def own_certificate(pki_dir: Path) -> OwnCertificate:
    """Our certificate from ``pki_dir``; made there on first use, its key readable for this user alone.

    Blocks for the time that a new key takes.  Raises ``LinkClosed`` where the folder can't be used.
    """
    path, key_path = pki_dir / _CERTIFICATE, pki_dir / _KEY
    try:
        if not (path.exists() and key_path.exists()):
            _make(path, key_path)
        der = path.read_bytes()
        return OwnCertificate(x509.load_der_x509_certificate(der), der, key_path.read_bytes(), path)
    except (OSError, ValueError) as fault:
        raise LinkClosed(
            f"our own certificate in {pki_dir} can't be used ({fault}); mend the folder's rights, or move both "
            "files away so that new ones are made (the server has to trust the new one then)"
        ) from fault


def thumbprint_of(certificate: x509.Certificate) -> str:
    """SHA-256 over the certificate, as 64 hex digits."""
    return certificate.fingerprint(SHA256()).hex()


def is_same_thumbprint(told: str, seen: str) -> bool:
    """Whether both are the same, however they are written: colons, spaces and capitals don't count."""
    return bool(told) and re.sub(r"[:\s]", "", told).lower() == seen


def server_faults(certificate: x509.Certificate, application_uri: str, host: str, now: datetime) -> Iterator[str]:
    """What speaks against a server's certificate although it is the pinned one."""
    yield from time_faults(certificate, now)
    if application_uri not in (uris := _names(certificate, x509.UniformResourceIdentifier)):
        yield f"it was made for the application {', '.join(uris) or '(none)'}, not for {application_uri}"
    hosts = [*_names(certificate, x509.DNSName), *_addresses(certificate)]
    if host.lower() not in (name.lower() for name in hosts):
        listed = ", ".join(hosts) or "(none)"
        hint = f'; if that is this server, add to the controller\'s table: server_name = "{hosts[0]}"' if hosts else ""
        yield f"it was made for the host {listed}, not for {host}{hint}"
    usage = _extension(certificate, x509.KeyUsage)
    if not isinstance(usage, x509.KeyUsage) or not (usage.digital_signature and usage.key_encipherment):
        yield "its key usage does not allow to sign and to encipher keys"
    extended = _extension(certificate, x509.ExtendedKeyUsage)
    if not isinstance(extended, x509.ExtendedKeyUsage) or ExtendedKeyUsageOID.SERVER_AUTH not in extended:
        yield "it was not made for servers (extended key usage)"


def time_faults(certificate: x509.Certificate, now: datetime) -> Iterator[str]:
    """Whether it is expired or not valid yet."""
    if certificate.not_valid_after_utc < now:
        yield f"it expired on {certificate.not_valid_after_utc:%Y-%m-%d}"
    if certificate.not_valid_before_utc > now:
        yield f"it is valid from {certificate.not_valid_before_utc:%Y-%m-%d} on only; compare this machine's clock"


def _make(path: Path, key_path: Path) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    key = generate_private_key()
    host = socket.gethostname()
    names: list[x509.GeneralName] = [x509.UniformResourceIdentifier(f"urn:{host}:autotune"), x509.DNSName(host)]
    certificate = generate_self_signed_app_certificate(
        key, "Autotune", {}, names, extended=[ExtendedKeyUsageOID.CLIENT_AUTH], days=_VALID_DAYS
    )
    key_path.unlink(missing_ok=True)
    opened = os.open(key_path, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600)
    with os.fdopen(opened, "wb") as file:
        file.write(dump_private_key_as_pem(key))
    path.write_bytes(certificate.public_bytes(Encoding.DER))


def _names(certificate: x509.Certificate, kind: type[x509.DNSName] | type[x509.UniformResourceIdentifier]) -> list[str]:
    names = _extension(certificate, x509.SubjectAlternativeName)
    return list(names.get_values_for_type(kind)) if isinstance(names, x509.SubjectAlternativeName) else []


def _addresses(certificate: x509.Certificate) -> list[str]:
    names = _extension(certificate, x509.SubjectAlternativeName)
    if not isinstance(names, x509.SubjectAlternativeName):
        return []
    return [str(address) for address in names.get_values_for_type(x509.IPAddress)]


def _extension(certificate: x509.Certificate, kind: type[x509.ExtensionType]) -> x509.ExtensionType | None:
    try:
        return certificate.extensions.get_extension_for_class(kind).value
    except (x509.ExtensionNotFound, ValueError):
        return None
