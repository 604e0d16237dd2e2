"""The book of persons: who is in it, what it keeps of a secret, and what it refuses."""

import stat
from pathlib import Path

import pytest
from argon2 import PasswordHasher

from autotune.errors import ConfigError
from autotune.service.persons import PersonBook, Role
from tests.service.daemon_bench import NAME, SECRET, cheap_book

CHEAP = PasswordHasher(time_cost=1, memory_cost=1024, parallelism=1)
UTC = "2026-12-01T00:00:00+00:00"


def test_the_book_keeps_a_hash_and_is_for_its_owner_only(tmp_path: Path) -> None:
    book = cheap_book(tmp_path)
    text = book.file.read_text("utf-8")
    assert SECRET not in text
    assert "$argon2id$" in text
    assert stat.S_IMODE(book.file.stat().st_mode) == 0o600


def test_a_secret_proves_its_own_person_only(tmp_path: Path) -> None:
    book = cheap_book(tmp_path)
    assert book.proves(NAME, SECRET)
    assert not book.proves(NAME, SECRET.upper())
    assert not book.proves("R. Other", SECRET)
    assert not book.proves(NAME, "")
    assert not book.proves(NAME, "x" * 100_000)


def test_everybody_may_watch_and_other_roles_are_given_one_by_one(tmp_path: Path) -> None:
    book = PersonBook(tmp_path, CHEAP)
    book.add("V. Isitor", (), SECRET, UTC)
    book.add("T. Ester", (Role.TEST,), SECRET, UTC)
    visitor, tester = book.account("V. Isitor"), book.account("T. Ester")
    assert visitor is not None
    assert tester is not None
    assert [visitor.may(role) for role in Role] == [True, False, False, False]
    assert [tester.may(role) for role in Role] == [True, True, False, False]


@pytest.mark.parametrize(
    ("name", "secret", "complaint"),
    [
        ("", SECRET, "is no name"),
        ("a\nb", SECRET, "is no name"),
        ("x" * 61, SECRET, "is no name"),
        ("R. New", "short", "5 characters"),
        ("R. New", "x" * 201, "201 characters"),
        (NAME, SECRET, "in the book already"),
        (NAME.upper(), SECRET, "in the book already"),
    ],
)
def test_who_can_not_be_added_is_told_why(tmp_path: Path, name: str, secret: str, complaint: str) -> None:
    book = cheap_book(tmp_path)
    before = book.file.read_bytes()
    with pytest.raises(ConfigError, match=complaint):
        book.add(name, (), secret, UTC)
    assert book.file.read_bytes() == before


def test_a_removed_person_proves_nothing_and_an_unknown_one_is_named(tmp_path: Path) -> None:
    book = cheap_book(tmp_path)
    book.remove(NAME)
    assert not book.proves(NAME, SECRET)
    assert book.accounts() == ()
    with pytest.raises(ConfigError, match="there are: nobody"):
        book.remove(NAME)


@pytest.mark.parametrize("text", ["", "{}", "[1]", '{"persons": [{"name": "x"}]}', '{"persons": [{"roles": ["god"]}]}'])
def test_a_damaged_book_is_an_error_and_never_an_empty_one(tmp_path: Path, text: str) -> None:
    book = PersonBook(tmp_path, CHEAP)
    book.file.write_text(text, "utf-8")
    with pytest.raises(ConfigError, match="restore a backup"):
        book.accounts()


def test_an_account_with_a_damaged_hash_lets_nobody_in(tmp_path: Path) -> None:
    book = cheap_book(tmp_path)
    text = book.file.read_text("utf-8")
    book.file.write_text(text.replace("$argon2id$", "$argon9$"), "utf-8")
    assert not book.proves(NAME, SECRET)
