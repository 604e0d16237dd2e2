"""What holds for each request and answer: by which name the page was asked, and what a browser may do with it."""

from urllib.parse import urlsplit

from starlette.datastructures import Headers, MutableHeaders
from starlette.responses import PlainTextResponse
from starlette.types import ASGIApp, Message, Receive, Scope, Send

POLICY = "default-src 'self'; base-uri 'none'; form-action 'self'; frame-ancestors 'none'; object-src 'none'"


class Guard:
    """Turns away foreign host names (a name that was pointed here) and foreign origins; adds the browser's orders."""

    def __init__(self, app: ASGIApp, hosts: frozenset[str], *, is_protected: bool) -> None:
        self._app = app
        self._hosts = hosts
        self._is_protected = is_protected

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """One request."""
        if scope["type"] != "http":
            await self._app(scope, receive, send)
            return

        async def send_guarded(message: Message) -> None:
            if message["type"] == "http.response.start":
                self._order(scope["path"], MutableHeaders(scope=message))
            await send(message)

        if self._is_known(Headers(scope=scope)):
            await self._app(scope, receive, send_guarded)
        else:
            await PlainTextResponse("not asked by a name of this machine", 421)(scope, receive, send_guarded)

    def _is_known(self, headers: Headers) -> bool:
        asked = urlsplit(f"//{headers.get('host', '')}")
        origin = headers.get("origin")
        return asked.hostname in self._hosts and (origin is None or urlsplit(origin).netloc == asked.netloc)

    def _order(self, path: str, headers: MutableHeaders) -> None:
        headers["Content-Security-Policy"] = POLICY
        headers["X-Content-Type-Options"] = "nosniff"
        headers["Referrer-Policy"] = "no-referrer"
        headers["Cross-Origin-Opener-Policy"] = "same-origin"
        headers["Cross-Origin-Resource-Policy"] = "same-origin"
        if not path.startswith("/static/") and path != "/":
            headers["Cache-Control"] = "no-store"
        elif path != "/":
            headers["Cache-Control"] = "no-cache"
        if self._is_protected:
            headers["Strict-Transport-Security"] = "max-age=31536000"
