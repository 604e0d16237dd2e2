"""The link against the soft plant, signed and encrypted: whom it believes, and whom the plant lets in.

What the plant holds is looked at through its other face, Modbus/TCP, so that nothing of OPC UA is checked by itself.
"""
# ruff: noqa: E501 - the table reads as rows

import asyncio
import json
import logging
import shutil
import socket
import subprocess
import sys
from collections import deque
from collections.abc import AsyncIterator, Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import pytest
from asyncua.crypto.cert_gen import (
    dump_private_key_as_pem,
    generate_private_key,
    generate_self_signed_app_certificate,
)
from cryptography import x509
from cryptography.hazmat.primitives.serialization import Encoding
from cryptography.x509.oid import ExtendedKeyUsageOID

from autotune.config.types import LoopConfig, MessageSecurity, OpcUaEndpoint, OpcUaTag, SecurityPolicy
from autotune.errors import LinkClosed
from autotune.experiment.commands import SetMode
from autotune.field import open_link
from autotune.field.facts import TellsFacts
from autotune.field.opc_ua.certificates import own_certificate
from autotune.field.translate import sample_tags, settings_tags, to_block_fields, to_raw, to_sample
from autotune.loop.mode import LoopMode
from autotune.loop.quality import Quality
from autotune.loop.sample import GuardState
from autotune.loop.settings import BlockFields
from autotune.loop.write import WriteOutcome
from tests.field.link_conformance import PROMPT_S, LinkConformance
from tests.field.test_modbus_simulator import IN_RIG
from tests.field.test_modbus_simulator import PlantBench as ModbusBench
from tests.field.ua_plant import Wire

pytestmark = pytest.mark.socket

LOOP = "TIC-1"  # of the rig fast-loop
USER, PASSWORD = "technician", "j4m & marmalade"


@dataclass(frozen=True, slots=True)
class SecurePlant:
    """A running soft plant with both faces, and the endpoint of somebody whom it lets in."""

    ready: dict[str, Any]
    folder: Path
    endpoint: OpcUaEndpoint

    @property
    def modbus_port(self) -> int:
        return int(self.ready["modbus_port"])


@pytest.fixture(scope="module")
def secure_plant(tmp_path_factory: pytest.TempPathFactory) -> Iterator[SecurePlant]:
    """A soft plant that trusts our certificate, and ends with its standard input."""
    folder = tmp_path_factory.mktemp("secure-plant")
    (folder / "plant" / "trusted").mkdir(parents=True)
    shutil.copy(own_certificate(folder / "pki").path, folder / "plant" / "trusted")
    (folder / "password.txt").write_text(f"{PASSWORD}\n")
    person = _person_with_certificate(folder)
    with subprocess.Popen(
        [
            sys.executable, "-m", "simulator", "fast-loop", "--modbus", "0", "--opc-ua", "0", "--until-eof",
            "--opc-ua-pki", str(folder / "plant"), "--opc-ua-user", f"{USER}:{PASSWORD}:operate",
            "--opc-ua-user", "visitor:visitor:read", "--opc-ua-anonymous", "none",
            "--opc-ua-user-certificate", f"{person}:operate",
        ],
        stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True,
    ) as plant:  # fmt: skip
        assert plant.stdin is not None
        assert plant.stdout is not None
        ready = json.loads(plant.stdout.readline())
        endpoint = OpcUaEndpoint(
            ready["opc_ua_url"],
            request_timeout_s=PROMPT_S,
            connect_gap_s=0.0,
            server_thumbprint=ready["opc_ua_thumbprint"],
            server_name=socket.gethostname(),
            user=USER,
            password_from="file:password.txt",
            folder=folder,
            pki_dir=folder / "pki",
        )
        yield SecurePlant(ready, folder, endpoint)
        plant.stdin.close()
        assert plant.wait(PROMPT_S) == 0


def _person_with_certificate(folder: Path) -> Path:
    key = generate_private_key()
    seen = generate_self_signed_app_certificate(
        key, "technician", {}, [x509.DNSName("technician")], extended=[ExtendedKeyUsageOID.CLIENT_AUTH]
    )
    (folder / "person-key.pem").write_bytes(dump_private_key_as_pem(key))
    (folder / "person.der").write_bytes(seen.public_bytes(Encoding.DER))
    return folder / "person.der"


def at(endpoint: OpcUaEndpoint) -> LoopConfig:
    """The rig's loop behind its OPC UA face."""
    tags = tuple((name, OpcUaTag(f"ns=2;s={LOOP}.{name}")) for name, _ in IN_RIG.tags)
    return replace(IN_RIG, controller=replace(IN_RIG.controller, endpoint=endpoint), tags=tags)


class SecureBench(ModbusBench):
    """Puts the plant at rest and looks at it over Modbus/TCP; the link speaks OPC UA."""

    def __init__(self, plant: SecurePlant) -> None:
        super().__init__(plant.modbus_port)
        self.ua_loop = at(plant.endpoint)
        self.link = open_link(self.ua_loop)


@pytest.fixture
async def bench(secure_plant: SecurePlant) -> AsyncIterator[SecureBench]:
    bench = SecureBench(secure_plant)
    yield bench
    await bench.link.close()


class TestOpcUaLinkToTheSoftPlant(LinkConformance):
    async def test_a_whole_sample_makes_sense(self, bench: SecureBench) -> None:
        await bench.link.connect()
        sample = to_sample(bench.ua_loop, await bench.link.read(sample_tags(bench.ua_loop)))
        assert sample.pv_quality is Quality.GOOD
        assert (sample.sp_pct, sample.mode) == (50.0, LoopMode.AUTO)
        assert sample.guard is not None
        assert (sample.guard.state, sample.guard.holder, sample.guard.timeout_s) == (GuardState.IDLE, 0, 1.0)

    async def test_settings_are_read_and_the_mode_is_changed_by_command(self, bench: SecureBench) -> None:
        await bench.link.connect()
        fields = to_block_fields(bench.ua_loop, await bench.link.read(settings_tags(bench.ua_loop)))
        assert fields == BlockFields(0.5, 1.5, 0.0)
        report = await bench.link.write(to_raw(bench.ua_loop, SetMode(LoopMode.MAN)))
        assert report.outcome is WriteOutcome.APPLIED
        assert bench.held("mode") == 0

    async def test_a_tag_that_this_user_may_not_write_is_refused_by_name(
        self, bench: SecureBench, secure_plant: SecurePlant
    ) -> None:
        (secure_plant.folder / "visitor.txt").write_text("visitor")
        link = open_link(at(replace(secure_plant.endpoint, user="visitor", password_from="file:visitor.txt")))
        await link.connect()
        report = await link.write({"sp": 61.0})
        assert report.outcome is WriteOutcome.REFUSED
        assert "sp (ns=2;s=TIC-1.sp): Bad" in report.detail
        assert bench.held("sp") == 50.0
        await link.close()

    async def test_the_plant_tells_ranges_units_and_words(self, bench: SecureBench) -> None:
        await bench.link.connect()
        assert isinstance(bench.link, TellsFacts)
        facts = await bench.link.facts()
        by_name = {fact.name: fact for fact in facts.nodes}
        pv, mode = by_name["pv"], by_name["mode"]
        assert (pv.low_eu, pv.high_eu, pv.unit, pv.is_writable) == (0.0, 100.0, "degC", False)
        assert mode.words == ((0, "MAN"), (1, "AUTO"), (2, "CAS"))
        assert [one.whose for one in facts.certificates] == ["our own", "the server's"]

    @pytest.mark.parametrize("policy", list(SecurityPolicy))
    @pytest.mark.parametrize("security", [MessageSecurity.SIGN, MessageSecurity.SIGN_AND_ENCRYPT])
    async def test_every_policy_serves_signed_and_encrypted(
        self, policy: SecurityPolicy, security: MessageSecurity, bench: SecureBench, secure_plant: SecurePlant
    ) -> None:
        link = open_link(at(replace(secure_plant.endpoint, policy=policy, security=security)))
        await link.connect()
        assert (await link.write({"sp": 61.5})).outcome is WriteOutcome.APPLIED
        assert bench.held("sp") == 61.5
        await link.close()

    async def test_a_user_s_certificate_serves_instead_of_a_password(
        self, bench: SecureBench, secure_plant: SecurePlant
    ) -> None:
        endpoint = replace(
            secure_plant.endpoint, user="", password_from="", user_certificate="person.der", user_key="person-key.pem"
        )
        link = open_link(at(endpoint))
        await link.connect()
        assert (await link.write({"sp": 61.5})).outcome is WriteOutcome.APPLIED
        assert bench.held("sp") == 61.5
        await link.close()

    async def test_keys_are_renewed_every_second_and_every_sample_comes(self, secure_plant: SecurePlant) -> None:
        port = int(secure_plant.endpoint.url.rpartition(":")[2].partition("/")[0])
        async with Wire(SimpleNamespace(port=port, reactions=deque())) as wire:  # type: ignore[arg-type]  # all it needs
            endpoint = replace(secure_plant.endpoint, url=wire.url, channel_lifetime_s=1.0)
            link = open_link(at(endpoint))
            await link.connect()
            samples = 0
            async with asyncio.timeout(PROMPT_S):
                while wire.octets_up.count(b"OPNF") < 5:  # one to look at the certificate, one to begin, three renewals
                    assert (await link.read(["pv"])).readings["pv"].quality is Quality.GOOD
                    samples += 1
                    await asyncio.sleep(0.02)
            assert (await link.read(["pv"])).readings["pv"].quality is Quality.GOOD  # under the renewed keys
            await link.close()
        assert samples > 30


PIN_OF_ANOTHER = "00" * 32

REFUSALS: tuple[tuple[str, dict[str, Any], str], ...] = (
    ("another server than the pinned one", {"server_thumbprint": PIN_OF_ANOTHER}, r"another certificate than the pinned one: .*somebody may be in between"),
    ("a certificate of another host", {"server_name": ""}, r'made for the host .*, not for 127\.0\.0\.1; .*server_name = "'),
    ("a client that the server doesn't trust", {"pki_dir": "other-pki"}, r"BadCertificateUntrusted .*let it trust .*autotune-certificate\.der with the SHA-256 thumbprint [0-9a-f]{64}"),
    ("a wrong password", {"password_from": "file:wrong.txt"}, r"does not let in user 'technician': check user, password_from"),
    ("an unknown user", {"user": "nobody"}, r"does not let in user 'nobody'"),
    ("somebody nameless", {"user": "", "password_from": ""}, r"does not let in an anonymous user"),
    ("a password that nobody set", {"password_from": "env:AUTOTUNE_TEST_UNSET"}, r"the environment variable AUTOTUNE_TEST_UNSET holds no password for 'technician'"),
    ("a file that isn't there", {"password_from": "file:gone.txt"}, r"gone\.txt with the password can't be read"),
    ("an empty file", {"password_from": "file:empty.txt"}, r"empty\.txt holds no password"),
    ("a user's certificate that isn't there", {"user": "", "user_certificate": "gone.der", "user_key": "gone.pem"}, r"the user's certificate .*gone\.der or its key .*gone\.pem can't be read"),
    ("no security where the server wants it", {"security": MessageSecurity.NONE, "user": ""}, r"opc\.tcp://"),
)  # fmt: skip


@pytest.mark.parametrize(("what", "changes", "words"), REFUSALS, ids=[row[0] for row in REFUSALS])
async def test_a_connection_is_refused_and_said_why(
    what: str, changes: dict[str, Any], words: str, secure_plant: SecurePlant, caplog: pytest.LogCaptureFixture
) -> None:
    caplog.set_level(logging.DEBUG)
    (secure_plant.folder / "wrong.txt").write_text("not the pa55word\n")
    (secure_plant.folder / "empty.txt").write_text("\n")
    if "pki_dir" in changes:
        changes = {"pki_dir": secure_plant.folder / changes["pki_dir"]}
    link = open_link(at(replace(secure_plant.endpoint, **changes)))
    with pytest.raises(LinkClosed, match=words) as caught:
        await link.connect()
    assert not link.is_connected
    told = f"{caught.value} {caught.value.__cause__} {caplog.text}"
    assert PASSWORD not in told, what
    assert "pa55word" not in told, what


async def test_an_unknown_server_is_refused_with_the_line_that_trusts_it(secure_plant: SecurePlant) -> None:
    seen = secure_plant.ready["opc_ua_thumbprint"]
    link = open_link(at(replace(secure_plant.endpoint, server_thumbprint="")))
    with pytest.raises(LinkClosed) as caught:
        await link.connect()
    assert f'add to the controller\'s table: server_thumbprint = "{seen}"' in str(caught.value)
    assert "autotune-certificate.der" in str(caught.value)  # which the server has to trust in turn
    pinned = open_link(at(replace(secure_plant.endpoint, server_thumbprint=seen.upper())))
    await pinned.connect()
    await pinned.close()


async def test_a_password_may_come_from_the_environment(
    secure_plant: SecurePlant, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("AUTOTUNE_TEST_PASSWORD", PASSWORD)
    link = open_link(at(replace(secure_plant.endpoint, password_from="env:AUTOTUNE_TEST_PASSWORD")))
    await link.connect()
    assert link.is_connected
    await link.close()


async def test_the_library_s_log_is_silent_even_at_its_most_talkative(
    secure_plant: SecurePlant, caplog: pytest.LogCaptureFixture
) -> None:
    caplog.set_level(logging.DEBUG)
    link = open_link(at(secure_plant.endpoint))
    await link.connect()
    await link.read(["pv"])
    await link.close()
    assert [record for record in caplog.records if record.name.startswith("asyncua")] == []
