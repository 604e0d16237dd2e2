"""The page's doors over HTTP, with a daemon that only watches behind them: cookies, tokens, names, guesses."""

import asyncio
import http.client
import json
import socket
from collections.abc import AsyncIterator, Mapping
from contextlib import asynccontextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest
import uvicorn

from autotune.console.page import COOKIE, Console
from tests.service.daemon_bench import NAME, SECRET, served

pytestmark = pytest.mark.socket


@dataclass(frozen=True, slots=True)
class Answered:
    """One HTTP answer."""

    status: int
    headers: Mapping[str, str]
    body: bytes

    @property
    def told(self) -> dict[str, Any]:
        """Its JSON."""
        told: dict[str, Any] = json.loads(self.body)
        return told


class Client:
    """A browser without any manners of its own: it sends exactly what it is given."""

    def __init__(self, port: int) -> None:
        self._port = port
        self.cookie = ""
        self.csrf = ""

    async def get(self, path: str, **headers: str) -> Answered:
        """GET with the cookie."""
        return await asyncio.to_thread(self._send, "GET", path, None, headers)

    async def post(self, path: str, fields: object, **headers: str) -> Answered:
        """POST with cookie and token, unless ``headers`` say otherwise."""
        return await asyncio.to_thread(self._send, "POST", path, json.dumps(fields), headers)

    async def sign_in(self, secret: str = SECRET) -> Answered:
        """Sign in and keep cookie and token."""
        answered = await self.post("/api/sign_in", {"name": NAME, "secret": secret})
        if answered.status == 200:
            self.cookie = answered.headers["set-cookie"].split(";")[0]
            self.csrf = answered.told["answer"]["csrf"]
        return answered

    def _send(self, method: str, path: str, body: str | None, headers: Mapping[str, str]) -> Answered:
        named = {"Cookie": self.cookie, "X-CSRF-Token": self.csrf}
        named |= {name.replace("_", "-"): told for name, told in headers.items()}
        connection = http.client.HTTPConnection("127.0.0.1", self._port, timeout=20.0)
        try:
            connection.request(method, path, body, named)
            got = connection.getresponse()
            return Answered(got.status, {name.lower(): told for name, told in got.getheaders()}, got.read())
        finally:
            connection.close()


@asynccontextmanager
async def page(folder: Path) -> AsyncIterator[Client]:
    """The console on a free port in this process."""
    async with served(folder, is_watch_only=True) as at:
        console = Console(at.console, hosts=frozenset({"127.0.0.1", "localhost"}), is_protected=False)
        listening = socket.create_server(("127.0.0.1", 0))
        config = uvicorn.Config(console.app, log_level="warning", lifespan="off", timeout_graceful_shutdown=1)
        server = uvicorn.Server(config)
        serving = asyncio.ensure_future(server._serve([listening]))  # noqa: SLF001 - without its signal handlers
        try:
            yield Client(listening.getsockname()[1])
        finally:
            server.should_exit = True
            await serving


async def test_who_is_not_signed_in_learns_nothing_and_does_nothing(tmp_path: Path) -> None:
    async with page(tmp_path) as client:
        assert (await client.get("/")).status == 200
        for act in ("list_loops", "list_sheets", "list_controllers", "who_am_i"):
            assert (await client.get(f"/api/{act}")).status == 401, act
        assert (await client.post("/api/look", {"loop": "TIC-1"})).status == 403
        assert b"SIGN_IN" in (await client.get("/events/watch_loops")).body
        assert (await client.get("/files/last/page")).status == 401


async def test_the_cookie_is_hidden_from_scripts_and_other_sites_and_never_told_in_a_body(tmp_path: Path) -> None:
    async with page(tmp_path) as client:
        answered = await client.sign_in()
        attributes = answered.headers["set-cookie"].lower()
        assert attributes.startswith(f"{COOKIE}=")
        assert "httponly" in attributes
        assert "samesite=strict" in attributes
        assert client.cookie.split("=")[1].encode() not in answered.body
        assert (await client.get("/api/who_am_i")).told["answer"]["name"] == NAME


async def test_an_act_without_the_pages_own_token_is_refused(tmp_path: Path) -> None:
    async with page(tmp_path) as client:
        await client.sign_in()
        for csrf in ("", "guessed", client.csrf[:-1]):
            assert (await client.post("/api/touch", {}, X_CSRF_Token=csrf)).told["refusal"]["code"] == "NOT_THIS_PAGE"
        assert (await client.post("/api/touch", {})).status == 200


async def test_a_foreign_origin_and_a_foreign_name_for_this_machine_are_turned_away(tmp_path: Path) -> None:
    async with page(tmp_path) as client:
        await client.sign_in()
        assert (await client.post("/api/touch", {}, Origin="http://elsewhere.example")).status == 421
        assert (await client.get("/", Host="elsewhere.example")).status == 421
        assert (await client.get("/", Host="localhost")).status == 200


async def test_guessing_comes_to_a_wait_also_for_the_right_secret(tmp_path: Path) -> None:
    async with page(tmp_path) as client:
        statuses = [(await client.sign_in("guess " * 2)).status for _ in range(6)]
        assert statuses == [401] * 5 + [429]
        assert (await client.sign_in()).told["refusal"]["code"] == "WAIT"


async def test_every_answer_forbids_what_comes_from_outside(tmp_path: Path) -> None:
    async with page(tmp_path) as client:
        for path in ("/", "/static/app.js", "/api/who_am_i", "/nowhere"):
            headers = (await client.get(path)).headers
            assert headers["content-security-policy"].startswith("default-src 'self'"), path
            assert "unsafe" not in headers["content-security-policy"]
            assert headers["x-content-type-options"] == "nosniff"
            assert headers["referrer-policy"] == "no-referrer"


async def test_questions_change_nothing_and_acts_are_no_questions(tmp_path: Path) -> None:
    async with page(tmp_path) as client:
        await client.sign_in()
        assert (await client.get("/api/look?loop=TIC-1")).status == 422
        assert (await client.get("/api/abort_test?loop=TIC-1")).status == 422
        assert (await client.post("/api/touch", ["no", "object"])).status == 422
        assert (await client.post("/api/start_test", {"loop": "TIC-1"})).status == 422
        assert (await client.get("/static/../page.py")).status == 404


async def test_a_daemon_that_is_gone_is_said(tmp_path: Path) -> None:
    console = Console(tmp_path / "nobody.sock", hosts=frozenset({"127.0.0.1"}), is_protected=False)
    listening = socket.create_server(("127.0.0.1", 0))
    server = uvicorn.Server(uvicorn.Config(console.app, log_level="warning", lifespan="off"))
    serving = asyncio.ensure_future(server._serve([listening]))  # noqa: SLF001 - without its signal handlers
    client = Client(listening.getsockname()[1])
    assert (await client.get("/api/list_loops")).status == 503
    assert b"NO_DAEMON" in (await client.get("/events/watch_loops")).body
    server.should_exit = True
    await serving
