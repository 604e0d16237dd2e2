"""The page over HTTP: files from this package, questions by GET, acts by POST, live readings as server-sent events.

It decides nothing and keeps nothing: who may do what is the daemon's to say, by the session in the cookie.
"""

import json
from base64 import b64decode
from collections.abc import AsyncIterator, Mapping
from contextlib import aclosing
from importlib.resources import as_file, files
from pathlib import Path
from secrets import compare_digest
from typing import Any

from starlette.applications import Starlette
from starlette.requests import Request
from starlette.responses import FileResponse, JSONResponse, Response, StreamingResponse
from starlette.routing import Mount, Route
from starlette.staticfiles import StaticFiles
from starlette.types import ASGIApp

from autotune.console.guard import Guard
from autotune.errors import LinkClosed
from autotune.service.local_client import Told, ask, listen
from autotune.service.local_requests import QUESTIONS, STREAMS

COOKIE = "autotune-session"
_BODY_BYTES_AT_MOST = 32 * 1024
_STATUS: Mapping[str, int] = {
    "SIGN_IN": 401,
    "WRONG_SECRET": 401,
    "REMOVED": 401,
    "LOCKED": 403,
    "NOT_ALLOWED": 403,
    "WAIT": 429,
    "NOT_UNDERSTOOD": 422,
    "NO_DAEMON": 503,
}
_NO_DAEMON: Told = {
    "refusal": {"code": "NO_DAEMON", "reason": "the service can't be reached from here", "remedy": "use the panel"}
}


class Console:
    """The page of the daemon behind ``local_socket``; ``hosts`` are the names that a browser may call it by."""

    def __init__(self, local_socket: Path, *, hosts: frozenset[str], is_protected: bool) -> None:
        self._socket = local_socket
        self._is_protected = is_protected
        with as_file(files("autotune.console") / "static") as folder:
            self._static = Path(folder)
        routes = [
            Route("/", self._index),
            Route("/api/{act}", self._question, methods=["GET"]),
            Route("/api/{act}", self._act, methods=["POST"]),
            Route("/events/{act}", self._events, methods=["GET"]),
            Route("/files/{sheet}/{what}", self._file, methods=["GET"]),
            Mount("/static", StaticFiles(directory=self._static)),
        ]
        self.app: ASGIApp = Guard(Starlette(routes=routes), hosts, is_protected=is_protected)

    async def _index(self, _: Request) -> Response:
        return FileResponse(self._static / "index.html", headers={"Cache-Control": "no-cache"})

    async def _question(self, request: Request) -> Response:
        act = request.path_params["act"]
        if act not in QUESTIONS:
            return _json({"refusal": {"code": "NOT_UNDERSTOOD", "reason": f"{act} is no question", "remedy": ""}})
        return _json(await self._ask({**request.query_params, "act": act, "session": _session(request)}))

    async def _act(self, request: Request) -> Response:
        """An act carries the page's own token beside the cookie, so that no other site's page can ask for it."""
        act, session = request.path_params["act"], _session(request)
        body = await request.body()
        try:
            fields = json.loads(body) if len(body) <= _BODY_BYTES_AT_MOST else None
        except ValueError:
            fields = None
        if not isinstance(fields, dict):
            return _json({"refusal": {"code": "NOT_UNDERSTOOD", "reason": "no JSON object", "remedy": ""}})
        if act != "sign_in" and not await self._is_own_page(session, request.headers.get("x-csrf-token", "")):
            refusal = {"code": "NOT_THIS_PAGE", "reason": "not asked for by this page", "remedy": "reload the page"}
            return JSONResponse({"refusal": refusal}, status_code=403)
        told = await self._ask({**fields, "act": act, "session": "" if act == "sign_in" else session})
        if act == "sign_in" and "answer" in told:
            return self._signed_in(told)
        response = _json(told)
        if act == "sign_out":
            response.delete_cookie(COOKIE)
        return response

    async def _events(self, request: Request) -> Response:
        act = request.path_params["act"]
        if act not in STREAMS:
            return _json({"refusal": {"code": "NOT_UNDERSTOOD", "reason": f"{act} is no stream", "remedy": ""}})
        asked = {**request.query_params, "act": act, "session": _session(request)}
        return StreamingResponse(self._told(asked), media_type="text/event-stream", headers={"X-Accel-Buffering": "no"})

    async def _told(self, asked: Mapping[str, object]) -> AsyncIterator[bytes]:
        """Each answer of the daemon as one event; a refusal as an event of its own, then the end."""
        try:
            async with aclosing(listen(self._socket, asked)) as stream:
                async for told in stream:
                    yield _event(told)
                    if "refusal" in told:
                        return
        except LinkClosed:
            yield _event(_NO_DAEMON)

    async def _file(self, request: Request) -> Response:
        told = await self._ask({"act": "export_sheet", "session": _session(request), **request.path_params})
        if "answer" not in told:
            return _json(told)
        kept = told["answer"]
        disposition = "inline" if request.path_params["what"] == "page" else "attachment"
        return Response(
            b64decode(kept["content"]) if kept["is_base64"] else kept["content"],
            media_type=kept["media_type"] if kept["is_base64"] else f"{kept['media_type']}; charset=utf-8",
            headers={"Content-Disposition": f'{disposition}; filename="{kept["file_name"]}"'},
        )

    def _signed_in(self, told: Told) -> Response:
        token = told["answer"].pop("session")
        response = _json(told)
        response.set_cookie(
            COOKIE, token, httponly=True, samesite="strict", secure=self._is_protected, path="/", max_age=24 * 3600
        )
        return response

    async def _is_own_page(self, session: str, csrf: str) -> bool:
        known = (await self._ask({"act": "who_am_i", "session": session})).get("answer")
        return known is not None and bool(csrf) and compare_digest(known["csrf"], csrf)

    async def _ask(self, request: Mapping[str, Any]) -> Told:
        try:
            return await ask(self._socket, request)
        except LinkClosed:
            return _NO_DAEMON


def _session(request: Request) -> str:
    return request.cookies.get(COOKIE, "")[:200]


def _event(told: Told) -> bytes:
    name = "message" if "answer" in told else "refusal"
    return f"event: {name}\ndata: {json.dumps(told.get('answer') or told['refusal'])}\n\n".encode()


def _json(told: Told) -> JSONResponse:
    status = 200 if "answer" in told else _STATUS.get(told["refusal"]["code"], 409)
    return JSONResponse(told, status_code=status)
