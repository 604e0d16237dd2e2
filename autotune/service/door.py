"""The daemon's door: who asks, whether they may, and who answers.

Two kinds of peers come here.  Behind the local socket is an operating-system user whom the kernel names; behind the
console's socket are persons at screens, and every request of theirs needs a session.  A test may be ended by whoever
has ever signed in at a screen, locked or not.
"""

from collections.abc import AsyncIterator
from dataclasses import dataclass
from types import MappingProxyType

import structlog
from pydantic import TypeAdapter, ValidationError

from autotune.errors import AutotuneError
from autotune.loop.outcome import Refusal
from autotune.service.acting import Actor
from autotune.service.daemon import Daemon
from autotune.service.local_api import Answer
from autotune.service.local_requests import (
    AbortTest,
    ActRequest,
    AnyRequest,
    ConfirmChange,
    DropPlan,
    FinishTest,
    PlanChange,
    PlanRestore,
    SignIn,
    SignOut,
    SmallerSteps,
    StartTest,
    Stream,
    Touch,
    Unlock,
    WatchRequest,
    WhoAmI,
)
from autotune.service.local_views import DoneAnswer, SessionAnswer
from autotune.service.persons import Account, Person, PersonBook, Role
from autotune.service.sessions import NOT_SIGNED_IN, Session, Sessions
from autotune.service.watching import Watcher

_LOG = structlog.get_logger("autotune.door")
_ACTS: TypeAdapter[AnyRequest] = TypeAdapter(AnyRequest)
_WATCHES: TypeAdapter[WatchRequest] = TypeAdapter(WatchRequest)
_NEEDS = MappingProxyType(
    {
        StartTest: Role.TEST,
        FinishTest: Role.TEST,
        SmallerSteps: Role.TEST,
        PlanChange: Role.WRITE,
        PlanRestore: Role.WRITE,
        ConfirmChange: Role.WRITE,
        DropPlan: Role.WRITE,
    }
)
_ONLY_SIGNED_IN = (PlanChange, PlanRestore, ConfirmChange)
_PERSONS = (SignIn, SignOut, Unlock, Touch, WhoAmI)


@dataclass(frozen=True, slots=True)
class Peer:
    """Who is behind a connection: the kernel's word for the user, and whether sessions speak for others there."""

    os_user: str
    needs_session: bool


class Door:
    """Answers requests as they come off a socket."""

    def __init__(self, daemon: Daemon, sessions: Sessions, book: PersonBook) -> None:
        self._daemon = daemon
        self._sessions = sessions
        self._book = book
        self._watcher = Watcher(daemon)
        self._actor = None if daemon.is_watch_only else Actor(daemon)
        self._shapes: TypeAdapter[AnyRequest] | TypeAdapter[WatchRequest] = _WATCHES if daemon.is_watch_only else _ACTS

    def read(self, line: bytes) -> AnyRequest | Refusal:
        """The request that a line holds; a daemon that only watches knows no other than watching ones."""
        try:
            return self._shapes.validate_json(line)
        except ValidationError as fault:
            first = fault.errors(include_input=False, include_url=False)[-1]
            return Refusal("NOT_UNDERSTOOD", f"{first['msg']}", "reload the page; this daemon may only watch")

    async def respond(self, request: AnyRequest, peer: Peer) -> Answer | Refusal:
        """The answer, or why there is none; everything that broke a contract is said too."""
        try:
            return await self._respond(request, peer)
        except AutotuneError as fault:
            return Refusal(_code(fault), str(fault), "")

    def stream(self, request: Stream) -> AsyncIterator[Answer]:
        """The answers to one who listens, once ``admits`` had nothing against it.  Raises ``AutotuneError``."""
        return self._watcher.stream(request)

    async def admits(self, request: AnyRequest, peer: Peer) -> Person | Refusal:
        """Who asks, or why they may not."""
        if isinstance(request, AbortTest) and (peer.needs_session or request.session):
            session = self._sessions.find(request.session)
            return NOT_SIGNED_IN if session is None else Person(session.name, is_authenticated=True)
        if not peer.needs_session and not request.session:
            if isinstance(request, _ONLY_SIGNED_IN):
                return Refusal("SIGN_IN", "settings are confirmed by a signed-in person", "use the page")
            return Person(peer.os_user, is_authenticated=True)
        account = await self._sessions.allows(request.session, _NEEDS.get(type(request), Role.WATCH))
        if isinstance(account, Refusal):
            return account
        if isinstance(request, StartTest | ConfirmChange):
            refusal = await self._sessions.proves(request.session, request.secret)
            if refusal is not None:
                return refusal
        return Person(account.name, is_authenticated=True)

    async def _respond(self, request: AnyRequest, peer: Peer) -> Answer | Refusal:
        if isinstance(request, _PERSONS):
            return await self._person(request)
        person = await self.admits(request, peer)
        if isinstance(person, Refusal):
            return person
        if not isinstance(request, ActRequest):
            if isinstance(request, Stream):
                return Refusal("NOT_UNDERSTOOD", "a stream is no question", "listen to it")
            return await self._watcher.answer(request, person.name)
        if self._actor is None:
            return Refusal("WATCH_ONLY", "this daemon only watches", "serve without --watch-only to act")
        ended = await self._actor.perform(request, person)
        told = f"{ended.code}: {ended.reason}" if isinstance(ended, Refusal) else type(ended).__name__
        _LOG.info("act", act=request.act, by=person.name, os_user=peer.os_user, answer=told)
        return ended

    async def _person(self, request: SignIn | SignOut | Unlock | Touch | WhoAmI) -> Answer | Refusal:
        match request:
            case SignIn(name=name, secret=secret):
                session = await self._sessions.sign_in(name, secret)
                _LOG.info("sign_in", name=name, answer=session.code if isinstance(session, Refusal) else "signed in")
                return await self._told(session, is_new=True)
            case Unlock(session=token, secret=secret):
                return await self._told(await self._sessions.unlock(token, secret))
            case WhoAmI(session=token):
                return await self._told(self._sessions.find(token) or NOT_SIGNED_IN)
            case SignOut(session=token):
                self._sessions.sign_out(token)
                return DoneAnswer(text="signed out")
            case Touch(session=token):
                self._sessions.touch(token)
                return await self._told(self._sessions.find(token) or NOT_SIGNED_IN)

    async def _told(self, session: Session | Refusal, *, is_new: bool = False) -> Answer | Refusal:
        if isinstance(session, Refusal):
            return session
        account: Account | None = await self._daemon.workplace.in_thread(self._book.account, session.name)
        if account is None:
            self._sessions.sign_out(session.token)
            return NOT_SIGNED_IN
        return SessionAnswer(
            session=session.token if is_new else "",
            csrf=session.csrf,
            name=session.name,
            roles=tuple(sorted(role.value for role in account.roles | {Role.WATCH})),
            is_locked=session.is_locked,
            is_watch_only=self._daemon.is_watch_only,
        )


def _code(fault: AutotuneError) -> str:
    """``LoopBusy`` as ``LOOP_BUSY``."""
    name = type(fault).__name__
    return "".join(f"_{letter}" if letter.isupper() and at else letter for at, letter in enumerate(name)).upper()
