"""Our own certificate, and what speaks against a server's even when it is the pinned one."""

import ipaddress
import stat
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest
from cryptography import x509
from cryptography.x509.oid import ExtendedKeyUsageOID

from autotune.errors import LinkClosed
from autotune.field.opc_ua.certificates import (
    is_same_thumbprint,
    own_certificate,
    server_faults,
    thumbprint_of,
    time_faults,
)
from tests.field.certificates import HOST, NOW, URI, certificate


def faults(seen: x509.Certificate, host: str = HOST) -> list[str]:
    return list(server_faults(seen, URI, host, NOW))


def test_nothing_speaks_against_a_right_certificate() -> None:
    assert faults(certificate()) == []
    assert faults(certificate(), HOST.upper()) == []


def test_an_address_may_be_the_host() -> None:
    names = (x509.UniformResourceIdentifier(URI), x509.IPAddress(ipaddress.ip_address("192.168.10.30")))
    assert faults(certificate(names=names), "192.168.10.30") == []
    assert faults(certificate(names=names), "192.168.10.31") != []


@pytest.mark.parametrize(
    ("seen", "fault"),
    [
        (certificate(ends=NOW - timedelta(days=1)), "it expired on 2026-05-31"),
        (certificate(begins=NOW + timedelta(days=1)), "valid from 2026-06-02 on only; compare this machine's clock"),
        (
            certificate(names=(x509.UniformResourceIdentifier("urn:other"), x509.DNSName(HOST))),
            "made for the application urn:other, not for urn:skid:server",
        ),
        (certificate(names=(x509.DNSName(HOST),)), "made for the application (none)"),
        (
            certificate(names=(x509.UniformResourceIdentifier(URI), x509.DNSName("other"))),
            'made for the host other, not for skid-plc; if that is this server, add to the controller\'s table: '
            'server_name = "other"',
        ),
        (certificate(names=()), "made for the host (none)"),
        (certificate(usage={"digital_signature": True}), "key usage"),
        (certificate(usage={"key_encipherment": True}), "key usage"),
        (certificate(usage=None), "key usage"),
        (certificate(purpose=ExtendedKeyUsageOID.CLIENT_AUTH), "not made for servers"),
        (certificate(purpose=None), "not made for servers"),
    ],
)  # fmt: skip
def test_what_is_wrong_with_a_certificate_is_said(seen: x509.Certificate, fault: str) -> None:
    assert any(fault in one for one in faults(seen)), faults(seen)


def test_a_certificate_is_valid_to_its_last_moment_and_not_beyond() -> None:
    seen = certificate(ends=NOW)
    assert list(time_faults(seen, NOW)) == []
    assert list(time_faults(seen, NOW + timedelta(seconds=1))) != []


def test_a_thumbprint_is_the_sha_256_however_it_is_written() -> None:
    seen = thumbprint_of(certificate())
    assert len(seen) == 64
    pairs = [seen[at : at + 2] for at in range(0, 64, 2)]
    assert is_same_thumbprint(":".join(pairs).upper(), seen)
    assert is_same_thumbprint(" ".join(pairs), seen)
    assert not is_same_thumbprint(seen[:-1] + ("0" if seen[-1] != "0" else "1"), seen)
    assert not is_same_thumbprint("", seen)


def test_our_own_is_made_once_and_its_key_is_for_this_user_alone(tmp_path: Path) -> None:
    first = own_certificate(tmp_path / "data" / "pki")
    again = own_certificate(tmp_path / "data" / "pki")
    assert first.thumbprint == again.thumbprint
    assert first.path == tmp_path / "data" / "pki" / "autotune-certificate.der"
    (key,) = first.path.parent.glob("*key*")
    assert stat.S_IMODE(key.stat().st_mode) == 0o600
    assert first.application_uri.endswith(":autotune")


def test_our_own_is_what_the_standard_asks_of_a_client(tmp_path: Path) -> None:
    seen = own_certificate(tmp_path).certificate
    uris = seen.extensions.get_extension_for_class(x509.SubjectAlternativeName).value.get_values_for_type(
        x509.UniformResourceIdentifier
    )
    assert len(uris) == 1
    assert ExtendedKeyUsageOID.CLIENT_AUTH in seen.extensions.get_extension_for_class(x509.ExtendedKeyUsage).value
    usage = seen.extensions.get_extension_for_class(x509.KeyUsage).value
    assert all((usage.digital_signature, usage.content_commitment, usage.key_encipherment, usage.data_encipherment))
    assert list(time_faults(seen, datetime.now(UTC) + timedelta(days=365))) == []


def test_a_damaged_certificate_of_our_own_is_said_so(tmp_path: Path) -> None:
    own_certificate(tmp_path).path.write_bytes(b"nothing")
    with pytest.raises(LinkClosed, match=r"our own certificate in .* can't be used .*move both files away"):
        own_certificate(tmp_path)


def test_a_folder_that_cant_be_used_is_said_so(tmp_path: Path) -> None:
    (tmp_path / "pki").write_text("a file")
    with pytest.raises(LinkClosed, match="mend the folder's rights"):
        own_certificate(tmp_path / "pki")
