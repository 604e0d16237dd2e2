"""Application certificates for tests, right or with one fault."""

from collections.abc import Sequence
from datetime import UTC, datetime, timedelta

from cryptography import x509
from cryptography.hazmat.primitives import hashes
from cryptography.hazmat.primitives.asymmetric import rsa
from cryptography.x509.oid import ExtendedKeyUsageOID, NameOID

NOW = datetime(2026, 6, 1, 12, 0, tzinfo=UTC)
URI, HOST = "urn:skid:server", "skid-plc"
KEY = rsa.generate_private_key(public_exponent=65537, key_size=2048)
SIGN_AND_ENCIPHER = {"digital_signature": True, "key_encipherment": True}


def certificate(
    *,
    begins: datetime = NOW - timedelta(days=10),
    ends: datetime = NOW + timedelta(days=300),
    names: Sequence[x509.GeneralName] = (x509.UniformResourceIdentifier(URI), x509.DNSName(HOST)),
    usage: dict[str, bool] | None = SIGN_AND_ENCIPHER,
    purpose: x509.ObjectIdentifier | None = ExtendedKeyUsageOID.SERVER_AUTH,
) -> x509.Certificate:
    """An application certificate after OPC 10000-6, 6.2.2, or one with a fault."""
    subject = x509.Name([x509.NameAttribute(NameOID.COMMON_NAME, "server")])
    builder = x509.CertificateBuilder(subject, subject, KEY.public_key(), 4711, begins, ends)
    if names:
        builder = builder.add_extension(x509.SubjectAlternativeName(names), critical=False)
    if usage is not None:
        bits = dict.fromkeys(
            ("digital_signature", "content_commitment", "key_encipherment", "data_encipherment", "key_agreement",
             "key_cert_sign", "crl_sign", "encipher_only", "decipher_only"), False,
        ) | usage  # fmt: skip
        builder = builder.add_extension(x509.KeyUsage(**bits), critical=False)
    if purpose is not None:
        builder = builder.add_extension(x509.ExtendedKeyUsage([purpose]), critical=False)
    return builder.sign(KEY, hashes.SHA256())
