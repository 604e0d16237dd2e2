"""One session with one OPC UA server: one question, one answer, or no connection any more.

asyncua codes, signs and encrypts the messages; deadlines, loss and renewal are ours, because a control tool
can't leave them to a library.  None of the library's own tasks runs: no supervisor, no watchdog, no
reconnect.  Whatever goes wrong, the socket is dropped at once with all that it still held unsent.
"""

import asyncio
import logging
import socket
import struct
from collections.abc import Coroutine
from typing import Any, TypeVar

from asyncua.client.client import Client
from asyncua.client.ua_client import UaClientState
from asyncua.ua.uaerrors import UaStatusCodeError

from autotune.config.types import OpcUaEndpoint
from autotune.errors import LinkClosed, LinkError, LinkRefused, LinkTimeout
from autotune.field.opc_ua.status import ends_the_session, in_words
from autotune.loop.sample import Stamp

logging.getLogger("asyncua").setLevel(logging.CRITICAL + 1)  # it prints what it sends; we tell faults ourselves

SESSION_TIMEOUT_MS = 60_000
"""A server keeps a session that was cut off no longer than this: it has few of them."""

_RENEW_AT_RATIO = 0.75  # OPC 10000-4, 5.5.2.1
_ABORT_ON_CLOSE = struct.pack("ii", 1, 0)  # SO_LINGER with no time: reset, and discard what is unsent
_Answer = TypeVar("_Answer")


class ServerRefused(LinkRefused):
    """Means: the server answered with a fault; ``code`` is its status.  Do: as the text says."""

    def __init__(self, text: str, code: int) -> None:
        super().__init__(text)
        self.code = code


class Session:
    """A connection from socket to activated session, opened step by step; a lost one is never revived.

    ``client`` is the library's, not yet connected; ``server`` names the server in every error.
    """

    def __init__(self, client: Client, endpoint: OpcUaEndpoint) -> None:
        self._client = client
        self._timeout_s = endpoint.request_timeout_s
        self._server = endpoint.url
        self._is_missed = False
        self._renew_at_s = float("inf")
        client.name = client.description = "Autotune"
        client.product_uri = "urn:autotune"
        client.session_timeout = SESSION_TIMEOUT_MS
        client.secure_channel_timeout = round(1000 * endpoint.channel_lifetime_s)

    @property
    def client(self) -> Client:
        """The library's client, for requests that ``ask`` sends."""
        return self._client

    @property
    def is_open(self) -> bool:
        """Whether a question can be asked."""
        protocol = self._client.uaclient.protocol
        transport = None if protocol is None else protocol.transport
        is_connected = self._client.uaclient.state is UaClientState.CONNECTED
        return is_connected and transport is not None and not transport.is_closing()

    async def open_channel(self) -> None:
        """Open socket and secure channel.  Raises ``LinkTimeout`` or ``LinkClosed``."""
        await self.ask(self._connect_socket())
        self._set_option(getattr(socket, "TCP_USER_TIMEOUT", None), max(1, round(1000 * self._timeout_s)))
        await self.ask(self._client.send_hello())
        await self._open_secure_channel(is_renewal=False)

    async def create(self) -> None:
        """Create a session in the open channel; nobody has said yet who he is.  Raises as ``open_channel``."""
        await self.ask(self._client.create_session())

    async def activate(self, user: str | None, password: str | None, certificate: Any = None) -> None:
        """Say who we are.  Raises as ``open_channel``."""
        await self.ask(self._client.activate_session(user, password, certificate))

    async def ask(self, request: Coroutine[Any, Any, _Answer]) -> _Answer:
        """Send one request and wait for its answer, at most the endpoint's ``request_timeout_s``.

        Raises ``ServerRefused`` for a fault that leaves the connection as it is, ``LinkClosed`` when it is or
        gets lost, ``LinkTimeout`` at the deadline; after the last two, and when cancelled, it is gone.
        """
        loop = asyncio.get_running_loop()
        deadline = loop.call_at(loop.time() + self._timeout_s, self._miss)
        try:
            return await request
        except UaStatusCodeError as fault:
            raise self._to_link_error(fault) from fault
        except Exception as fault:  # the library lets through whatever an answer that can't be decoded makes
            self.drop()
            raise self._lost(fault) from fault
        except BaseException:
            self.drop()
            raise
        finally:
            deadline.cancel()

    async def ask_timed(self, request: Coroutine[Any, Any, _Answer]) -> tuple[_Answer, Stamp]:
        """Like ``ask``, on a channel renewed before if it is due, with the span from request to reply."""
        loop = asyncio.get_running_loop()
        try:
            if loop.time() >= self._renew_at_s:
                await self._open_secure_channel(is_renewal=True)
        except BaseException:
            request.close()
            raise
        sent_s = loop.time()
        answer = await self.ask(request)
        return answer, Stamp(sent_s, loop.time())

    async def close(self) -> None:
        """Give session and channel back to the server, which has few, then close; raises only when cancelled."""
        try:
            if self.is_open:
                await self.ask(self._client.close_session())
                await self.ask(self._client.close_secure_channel())
                self._client.disconnect_socket()
        except LinkError:
            self.drop()

    def drop(self) -> None:
        """End the connection now and discard whatever is unsent; may be called again."""
        protocol = self._client.uaclient.protocol
        if protocol is not None and protocol.transport is not None and not protocol.transport.is_closing():
            self._set_option(socket.SO_LINGER, _ABORT_ON_CLOSE, level=socket.SOL_SOCKET)
            protocol.transport.abort()

    async def _connect_socket(self) -> None:
        """The library's way in, of which the old ``wait_for`` may swallow a cancel that comes with success."""
        task = asyncio.current_task()
        cancels_before = 0 if task is None else task.cancelling()
        await self._client.connect_socket()
        if task is not None and task.cancelling() > cancels_before:
            raise asyncio.CancelledError

    async def _open_secure_channel(self, *, is_renewal: bool) -> None:
        await self.ask(self._client.open_secure_channel(renew=is_renewal))
        lifetime_s = self._client.secure_channel_timeout / 1000
        self._renew_at_s = asyncio.get_running_loop().time() + _RENEW_AT_RATIO * lifetime_s

    def _to_link_error(self, fault: UaStatusCodeError) -> LinkError:
        if self._is_missed:
            return self._lost(fault)
        if ends_the_session(fault.code) or not self.is_open:
            self.drop()
            return LinkClosed(f"{self._server} answered {in_words(fault.code)}; the connection was dropped")
        return ServerRefused(f"{self._server} answered {in_words(fault.code)}", fault.code)

    def _lost(self, fault: Exception) -> LinkError:
        if self._is_missed or isinstance(fault, TimeoutError):
            return LinkTimeout(
                f"no answer from {self._server} within {self._timeout_s:g} s, the connection was dropped; "
                "check the network, and whether the controller runs"
            )
        words = getattr(fault, "strerror", None) or str(fault) or type(fault).__name__
        return LinkClosed(
            f"{self._server}: {words}; check the address, the port, and whether the server has a session left"
        )

    def _miss(self) -> None:
        self._is_missed = True
        self.drop()

    def _set_option(self, option: int | None, setting: int | bytes, level: int = socket.IPPROTO_TCP) -> None:
        protocol = self._client.uaclient.protocol
        if option is not None and protocol is not None and protocol.transport is not None:
            protocol.transport.get_extra_info("socket").setsockopt(level, option, setting)


def new_client(endpoint: OpcUaEndpoint) -> Client:
    """The library's client for one connection, with nothing of it running by itself."""
    return Client(endpoint.url, timeout=endpoint.request_timeout_s)
