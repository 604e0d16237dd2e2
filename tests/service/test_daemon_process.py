"""`autotune serve` as a process: asked to end in the middle of a test, killed in the middle of one, and over TLS."""

import asyncio
import datetime
import ipaddress
import json
import os
import signal
import ssl
import urllib.request
from collections.abc import Awaitable, Callable, Mapping
from pathlib import Path
from typing import Any

import pytest
from cryptography import x509
from cryptography.hazmat.primitives import hashes, serialization
from cryptography.hazmat.primitives.asymmetric import ec
from cryptography.x509.oid import NameOID

from autotune.config.load import load
from autotune.service.local_client import ask, listen
from autotune.service.serving import LOCAL_SOCKET
from tests.console.served_page import NAME, SECRET, add_person, served_page
from tests.service.daemon_bench import PERMISSION
from tests.system.bench import Change, write_bench
from tests.system.command import run
from tests.system.plant import LOOP, SoftPlant, State, soft_plant

pytestmark = pytest.mark.socket

LONG: Change = ("cycles_to_agree = 3", "cycles_to_agree = 12")
Seen = dict[str, Any]


async def begin_test(config: Path, plant: SoftPlant) -> State:
    """Start a test over the local socket and wait until its relay switches; the panel as it was before."""
    local = load(config).data_dir / LOCAL_SOCKET
    await plant.press(f"enable {LOOP}")
    before = await plant.state()
    looked = (await ask(local, {"act": "look", "loop": LOOP}))["answer"]
    asked = {"act": "start_test", "loop": LOOP, "typed_loop": LOOP, "accepted": looked["cautions"], **PERMISSION}
    assert "answer" in await ask(local, asked)
    async for told in listen(local, {"act": "watch_loop", "loop": LOOP}):
        if told["answer"]["test"]["cycles"]:
            return before
    raise AssertionError("the stream ended")


async def asked_to_end(folder: Path) -> Seen:
    async with soft_plant() as plant:
        config = write_bench(folder, plant.port, (LONG,))
        async with served_page(config) as service:
            before = await begin_test(config, plant)
            held = await run("test", config, LOOP, "--json")
            code = await service.stop()
            after = await plant.state()
        sheets = (await run("sheet", "list", config, "--json")).answer["sheets"]
        return {"before": before, "after": after, "code": code, "sheets": sheets, "held": held}


async def killed(folder: Path) -> Seen:
    async with soft_plant() as plant:
        config = write_bench(folder, plant.port, (LONG,))
        async with served_page(config) as service:
            before = await begin_test(config, plant)
            os.kill(service.process_id, signal.SIGKILL)
        async with served_page(config):
            after = await plant.state()
            local = load(config).data_dir / LOCAL_SOCKET
            line = (await ask(local, {"act": "list_loops"}))["answer"]["loops"][0]
        return {"before": before, "after": after, "line": line}


async def over_tls(folder: Path) -> Seen:
    async with soft_plant() as plant:
        config = write_bench(folder, plant.port)
        add_person(config)
        certificate, key = _certificate(folder)
        options = ("--certificate", str(certificate), "--key", str(key), "--name", "localhost", "--watch-only")
        async with served_page(config, *options) as service:
            trusting = ssl.create_default_context(cafile=str(certificate))
            return {"url": service.url, "headers": await asyncio.to_thread(_sign_in, service.url, trusting)}


async def persons_by_command(folder: Path) -> Seen:
    config = write_bench(folder, 1)
    added = await run("person", "add", config, NAME, "--role", "test", "--json", typed=f"{SECRET}\n")
    listed = await run("person", "list", config, "--json")
    removed = await run("person", "remove", config, NAME, "--json")
    short = await run("person", "add", config, NAME, typed="short\n")
    return {"added": added, "listed": listed, "removed": removed, "short": short}


def _sign_in(url: str, trusting: ssl.SSLContext) -> Mapping[str, str]:
    body = json.dumps({"name": NAME, "secret": SECRET}).encode()
    request = urllib.request.Request(f"{url}api/sign_in", body, method="POST")  # noqa: S310 - it is https
    with urllib.request.urlopen(request, context=trusting, timeout=30.0) as answered:  # noqa: S310
        return {name.lower(): told for name, told in answered.headers.items()}


def _certificate(folder: Path) -> tuple[Path, Path]:
    """A certificate of our own for this machine."""
    key = ec.generate_private_key(ec.SECP256R1())
    name = x509.Name([x509.NameAttribute(NameOID.COMMON_NAME, "localhost")])
    now = datetime.datetime.now(datetime.UTC)
    alternatives = [x509.DNSName("localhost"), x509.IPAddress(ipaddress.ip_address("127.0.0.1"))]
    certificate = (
        x509.CertificateBuilder()
        .subject_name(name)
        .issuer_name(name)
        .public_key(key.public_key())
        .serial_number(x509.random_serial_number())
        .not_valid_before(now - datetime.timedelta(hours=1))
        .not_valid_after(now + datetime.timedelta(days=1))
        .add_extension(x509.SubjectAlternativeName(alternatives), critical=False)
        .sign(key, hashes.SHA256())
    )
    pem, secret = folder / "page.pem", folder / "page.key"
    pem.write_bytes(certificate.public_bytes(serialization.Encoding.PEM))
    secret.write_bytes(
        key.private_bytes(serialization.Encoding.PEM, serialization.PrivateFormat.PKCS8, serialization.NoEncryption())
    )
    return pem, secret


STORIES: Mapping[str, Callable[[Path], Awaitable[Seen]]] = {
    "asked to end": asked_to_end,
    "killed": killed,
    "over TLS": over_tls,
    "persons": persons_by_command,
}


@pytest.fixture(scope="module")
def stories(tmp_path_factory: pytest.TempPathFactory) -> Mapping[str, Seen | BaseException]:
    """All of them at once: most of their time is waiting for a plant and a process."""
    folder = tmp_path_factory.mktemp("served")

    async def at_once() -> list[Seen | BaseException]:
        works = (story(folder / name.replace(" ", "-")) for name, story in STORIES.items())
        return await asyncio.gather(*works, return_exceptions=True)

    return dict(zip(STORIES, asyncio.run(at_once()), strict=True))


def _of(stories: Mapping[str, Seen | BaseException], name: str) -> Seen:
    ended = stories[name]
    if isinstance(ended, BaseException):
        raise ended
    return ended


def test_sigterm_in_the_middle_of_a_test_hands_back_keeps_the_sheet_and_ends_well(
    stories: Mapping[str, Seen | BaseException],
) -> None:
    seen = _of(stories, "asked to end")
    assert (seen["after"]["mode"], seen["after"]["holder"]) == (seen["before"]["mode"], 0)
    assert seen["after"]["op"] == pytest.approx(seen["before"]["op"], abs=3.0)
    assert [line["outcome"] for line in seen["sheets"]] == ["ABORTED"]
    assert seen["code"] == 0


def test_the_command_line_says_who_holds_a_served_loop(stories: Mapping[str, Seen | BaseException]) -> None:
    held = _of(stories, "asked to end")["held"]
    assert held.code == 1
    assert "use its page http://127.0.0.1:" in held.err.replace("\n", "")


def test_a_daemon_that_starts_after_it_was_killed_settles_the_loop_first(
    stories: Mapping[str, Seen | BaseException],
) -> None:
    seen = _of(stories, "killed")
    assert (seen["after"]["mode"], seen["after"]["holder"]) == (seen["before"]["mode"], 0)
    assert seen["line"]["is_settled"]
    assert "broke off" in " ".join(seen["line"]["notes"])


def test_persons_are_added_listed_and_removed_by_command(stories: Mapping[str, Seen | BaseException]) -> None:
    seen = _of(stories, "persons")
    assert [one["roles"] for one in seen["added"].answer["persons"]] == [["test", "watch"]]
    assert SECRET not in seen["added"].out + seen["added"].err
    assert [one["name"] for one in seen["listed"].answer["persons"]] == [NAME]
    assert seen["removed"].answer == {"persons": []}
    assert seen["short"].code == 2
    assert "5 characters" in seen["short"].err


def test_over_tls_the_cookie_travels_protected_only(stories: Mapping[str, Seen | BaseException]) -> None:
    seen = _of(stories, "over TLS")
    assert seen["url"].startswith("https://localhost:")
    assert "secure" in seen["headers"]["set-cookie"].lower()
    assert "max-age" in seen["headers"]["strict-transport-security"]
