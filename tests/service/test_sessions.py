"""Screens, idle lock and the end of guessing, by a clock that the test moves."""

from collections.abc import Awaitable, Callable
from pathlib import Path
from typing import Any, TypeVar

import pytest

from autotune.loop.outcome import Refusal
from autotune.service.persons import Account, PersonBook, Role
from autotune.service.sessions import GUESSES_FREE, SESSION_AT_MOST_S, WAIT_AT_MOST_S, Session, Sessions
from tests.service.daemon_bench import NAME, SECRET, cheap_book

T = TypeVar("T")
LOCK_AFTER_S = 900.0
WRONG = "some other words"


async def at_once(work: Callable[..., T], /, *args: Any) -> T:
    """What a thread would do, here and now."""
    return work(*args)


class Clock:
    """Seconds that pass when the test says so."""

    def __init__(self) -> None:
        self.now_s = 1000.0

    def __call__(self) -> float:
        return self.now_s


class Bench:
    """Sessions over a book with one person who may test."""

    def __init__(self, folder: Path) -> None:
        self.clock = Clock()
        self.book: PersonBook = cheap_book(folder, frozenset({Role.TEST}))
        self.sessions = Sessions(self.book, at_once, self.clock, LOCK_AFTER_S)

    async def signed_in(self) -> Session:
        session = await self.sessions.sign_in(NAME, SECRET)
        assert isinstance(session, Session)
        return session

    async def allows(self, session: Session, role: Role) -> str:
        """The person's name, or the refusal's code."""
        answer = await self.sessions.allows(session.token, role)
        return answer.name if isinstance(answer, Account) else answer.code


@pytest.fixture
def bench(tmp_path: Path) -> Bench:
    return Bench(tmp_path)


def code(answer: object) -> str:
    return answer.code if isinstance(answer, Refusal) else type(answer).__name__


async def test_a_screen_left_alone_locks_all_but_watching(bench: Bench) -> None:
    session = await bench.signed_in()
    bench.clock.now_s += LOCK_AFTER_S
    assert await bench.allows(session, Role.TEST) == NAME
    bench.clock.now_s += LOCK_AFTER_S + 1.0
    assert await bench.allows(session, Role.TEST) == "LOCKED"
    assert await bench.allows(session, Role.WATCH) == NAME


async def test_watching_keeps_no_screen_open_and_touching_does(bench: Bench) -> None:
    session = await bench.signed_in()
    for _ in range(4):
        bench.clock.now_s += 0.4 * LOCK_AFTER_S
        bench.sessions.touch(session.token)
    assert await bench.allows(session, Role.TEST) == NAME
    for _ in range(4):
        bench.clock.now_s += 0.4 * LOCK_AFTER_S
        await bench.allows(session, Role.WATCH)
    assert await bench.allows(session, Role.TEST) == "LOCKED"


async def test_a_locked_screen_opens_by_its_own_persons_secret_only(bench: Bench) -> None:
    session = await bench.signed_in()
    bench.clock.now_s += 2.0 * LOCK_AFTER_S
    bench.sessions.touch(session.token)
    assert await bench.allows(session, Role.TEST) == "LOCKED"
    assert code(await bench.sessions.unlock(session.token, WRONG)) == "WRONG_SECRET"
    assert code(await bench.sessions.unlock(session.token, SECRET)) == "Session"
    assert await bench.allows(session, Role.TEST) == NAME


async def test_a_long_day_ends_locked_however_busy_the_screen(bench: Bench) -> None:
    session = await bench.signed_in()
    while bench.clock.now_s < 1000.0 + SESSION_AT_MOST_S:
        bench.clock.now_s += 0.9 * LOCK_AFTER_S
        bench.sessions.touch(session.token)
    assert await bench.allows(session, Role.TEST) == "LOCKED"
    assert bench.sessions.find(session.token) is not None, "abort needs to know the screen"


async def test_roles_are_what_the_book_says_now(bench: Bench) -> None:
    session = await bench.signed_in()
    assert await bench.allows(session, Role.WRITE) == "NOT_ALLOWED"
    bench.book.remove(NAME)
    assert await bench.allows(session, Role.TEST) == "REMOVED"
    assert await bench.allows(session, Role.WATCH) == "SIGN_IN"


@pytest.mark.parametrize("name", [NAME, "nobody in the book"])
async def test_wrong_secrets_make_a_name_wait_longer_and_longer(bench: Bench, name: str) -> None:
    answers = [code(await bench.sessions.sign_in(name, WRONG)) for _ in range(GUESSES_FREE + 1)]
    assert answers == ["WRONG_SECRET"] * GUESSES_FREE + ["WAIT"]
    waits = []
    for _ in range(6):
        begun_s = bench.clock.now_s
        while code(await bench.sessions.sign_in(name, WRONG)) == "WAIT":
            bench.clock.now_s += 1.0
        waits.append(bench.clock.now_s - begun_s)
    assert waits == pytest.approx([60.0, 120.0, 240.0, 480.0, WAIT_AT_MOST_S, WAIT_AT_MOST_S], abs=2.0)


async def test_the_right_secret_after_the_wait_ends_the_count(bench: Bench) -> None:
    for _ in range(GUESSES_FREE):
        await bench.sessions.sign_in(NAME, WRONG)
    assert code(await bench.sessions.sign_in(NAME, SECRET)) == "WAIT"
    bench.clock.now_s += 61.0
    await bench.signed_in()
    assert code(await bench.sessions.sign_in(NAME, WRONG)) == "WRONG_SECRET"
    assert code(await bench.sessions.sign_in(NAME, SECRET)) == "Session"


async def test_guesses_for_one_name_leave_the_others_alone(bench: Bench) -> None:
    for _ in range(GUESSES_FREE):
        await bench.sessions.sign_in("R. Other", WRONG)
    assert code(await bench.sessions.sign_in(NAME, SECRET)) == "Session"


async def test_the_secret_once_more_counts_as_a_guess_too(bench: Bench) -> None:
    session = await bench.signed_in()
    answers = [await bench.sessions.proves(session.token, WRONG) for _ in range(GUESSES_FREE)]
    assert {code(answer) for answer in answers} == {"WRONG_SECRET"}
    assert code(await bench.sessions.proves(session.token, SECRET)) == "WAIT"


async def test_an_unknown_screen_is_nobodys(bench: Bench) -> None:
    asked: list[Awaitable[object]] = [
        bench.sessions.allows("made up", Role.WATCH),
        bench.sessions.proves("made up", SECRET),
        bench.sessions.unlock("", SECRET),
    ]
    assert [code(await answer) for answer in asked] == ["SIGN_IN"] * 3
