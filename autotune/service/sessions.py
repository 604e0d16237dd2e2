"""Who is signed in at which screen: idle lock, the secret once more, and an end to guessing."""

import asyncio
import secrets
import time
from collections.abc import Callable
from dataclasses import dataclass

from autotune.loop.outcome import Refusal
from autotune.service.persons import Account, PersonBook, Role
from autotune.service.workplace import InThread

LOCK_AFTER_S = 900.0
SESSION_AT_MOST_S = 12 * 3600.0
SESSIONS_AT_MOST = 200
GUESSES_FREE = 5
"""Wrong secrets for one name before it has to wait."""
FIRST_WAIT_S = 60.0
WAIT_AT_MOST_S = 900.0
_NAMES_REMEMBERED = 1000

NOT_SIGNED_IN = Refusal("SIGN_IN", "nobody is signed in at this screen", "sign in")
LOCKED = Refusal(
    "LOCKED", "this screen was left alone for a while and is locked", "enter your secret; abort needs none"
)
WRONG_SECRET = Refusal("WRONG_SECRET", "name or secret is wrong", "try again; after a few wrong ones you have to wait")


@dataclass(slots=True)
class Session:
    """One screen at which a person signed in; instants are seconds of our monotonic clock."""

    token: str
    csrf: str
    name: str
    begun_s: float
    touched_s: float
    is_locked: bool = False


@dataclass(slots=True)
class _Guesses:
    wrong: int = 0
    wait_until_s: float = 0.0


class Sessions:
    """All screens.  They live as long as the daemon: a page that comes back finds its session again.

    A session that is locked, or older than ``SESSION_AT_MOST_S``, still shows what is going on and may abort.
    """

    def __init__(
        self,
        book: PersonBook,
        in_thread: InThread,
        now_s: Callable[[], float] = time.monotonic,
        lock_after_s: float = LOCK_AFTER_S,
        first_wait_s: float = FIRST_WAIT_S,
    ) -> None:
        self._book = book
        self._in_thread = in_thread
        self._now_s = now_s
        self._lock_after_s = lock_after_s
        self._first_wait_s = first_wait_s
        self._sessions: dict[str, Session] = {}
        self._guesses: dict[str, _Guesses] = {}
        self._one_at_a_time = asyncio.Semaphore(1)  # a hash takes memory and a core on purpose

    async def sign_in(self, name: str, secret: str) -> Session | Refusal:
        """A new session for who knows the secret."""
        refusal = await self._check(name, secret)
        if refusal is not None:
            return refusal
        now_s = self._now_s()
        session = Session(secrets.token_urlsafe(32), secrets.token_urlsafe(32), name, now_s, now_s)
        while len(self._sessions) >= SESSIONS_AT_MOST:
            del self._sessions[next(iter(self._sessions))]
        self._sessions[session.token] = session
        return session

    def sign_out(self, token: str) -> None:
        """Forget a session."""
        self._sessions.pop(token, None)

    def find(self, token: str) -> Session | None:
        """The session, locked meanwhile where nobody has touched its screen for too long."""
        session = self._sessions.get(token)
        if session is not None:
            now_s = self._now_s()
            is_idle = now_s - session.touched_s > self._lock_after_s
            session.is_locked = session.is_locked or is_idle or now_s - session.begun_s > SESSION_AT_MOST_S
        return session

    def touch(self, token: str) -> None:
        """Somebody is at this screen; a locked one stays locked."""
        session = self.find(token)
        if session is not None and not session.is_locked:
            session.touched_s = self._now_s()

    async def unlock(self, token: str, secret: str) -> Session | Refusal:
        """The same person is back."""
        session = self.find(token)
        if session is None:
            return NOT_SIGNED_IN
        refusal = await self._check(session.name, secret)
        if refusal is not None:
            return refusal
        session.is_locked = False
        session.begun_s = session.touched_s = self._now_s()
        return session

    async def allows(self, token: str, role: Role) -> Account | Refusal:
        """The person behind a session that is open and may do what needs ``role``."""
        session = self.find(token)
        if session is None:
            return NOT_SIGNED_IN
        if session.is_locked and role is not Role.WATCH:
            return LOCKED
        account = await self._in_thread(self._book.account, session.name)
        if account is None:
            self.sign_out(token)
            return Refusal("REMOVED", f"{session.name} is no longer in the book of persons", "ask who keeps it")
        if not account.may(role):
            return Refusal("NOT_ALLOWED", f"{account.name} may not {role.value} here", f"ask for the role {role.value}")
        if role is not Role.WATCH:
            self.touch(token)
        return account

    async def proves(self, token: str, secret: str) -> Refusal | None:
        """The secret once more, before an output moves or a setting is written; ``None`` is yes."""
        session = self.find(token)
        return NOT_SIGNED_IN if session is None else await self._check(session.name, secret)

    async def _check(self, name: str, secret: str) -> Refusal | None:
        async with self._one_at_a_time:
            guesses = self._guesses.get(name, _Guesses())
            wait_s = guesses.wait_until_s - self._now_s()
            if wait_s > 0.0:
                return Refusal("WAIT", f"too many wrong secrets for {name}", f"wait {wait_s:.0f} s, then try again")
            if await self._in_thread(self._book.proves, name, secret):
                self._guesses.pop(name, None)
                return None
            self._count(name, guesses)
            return WRONG_SECRET

    def _count(self, name: str, guesses: _Guesses) -> None:
        guesses.wrong += 1
        if guesses.wrong >= GUESSES_FREE:
            wait_s = min(self._first_wait_s * 2 ** (guesses.wrong - GUESSES_FREE), WAIT_AT_MOST_S)
            guesses.wait_until_s = self._now_s() + wait_s
        while len(self._guesses) >= _NAMES_REMEMBERED and name not in self._guesses:
            del self._guesses[next(iter(self._guesses))]
        self._guesses[name] = guesses
