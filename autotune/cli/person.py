"""``person add, list, remove``: who may sign in at the page."""

import getpass
import sys
from collections.abc import Sequence

from autotune.cli.exit_codes import ExitCode
from autotune.cli.printing import Voice
from autotune.service.clock import utc_now
from autotune.service.local_views import PersonAnswer, PersonsAnswer
from autotune.service.persons import PersonBook, Role
from autotune.service.workplace import Workplace


def add(voice: Voice, workplace: Workplace, name: str, roles: Sequence[Role]) -> ExitCode:
    """Ask for the secret twice at a terminal, or read one line that a program feeds in."""
    secret = _asked_secret()
    if secret is None:
        voice.say("The two secrets differ; nobody was added.", style="stop")
        return ExitCode.NO
    book = PersonBook(workplace.data_dir)
    book.add(name, roles, secret, utc_now().isoformat(timespec="seconds"))
    granted = ", ".join(sorted({role.value for role in roles} | {Role.WATCH.value}))
    voice.say(f"{name.strip()} is in the book and may: {granted}. Everybody who signs in may abort a test.", "good")
    voice.answer(_persons(book))
    return ExitCode.DONE


def list_persons(voice: Voice, workplace: Workplace) -> ExitCode:
    """Everybody with their roles."""
    told = _persons(PersonBook(workplace.data_dir))
    for person in told.persons:
        voice.say(f"{person.name:30}  {', '.join(person.roles):36}  since {person.added_utc}")
    if not told.persons:
        voice.say("nobody is in the book yet")
    voice.answer(told)
    return ExitCode.DONE


def remove(voice: Voice, workplace: Workplace, name: str) -> ExitCode:
    """Take a person out; open screens of theirs are out at once."""
    book = PersonBook(workplace.data_dir)
    book.remove(name)
    voice.say(f"{name} is no longer in the book; sheets keep the name.", style="good")
    voice.answer(_persons(book))
    return ExitCode.DONE


def _persons(book: PersonBook) -> PersonsAnswer:
    return PersonsAnswer(
        persons=tuple(
            PersonAnswer(
                name=account.name,
                roles=tuple(sorted({role.value for role in account.roles} | {Role.WATCH.value})),
                added_utc=account.added_utc,
            )
            for account in book.accounts()
        )
    )


def _asked_secret() -> str | None:
    if not sys.stdin.isatty():
        return sys.stdin.readline().rstrip("\r\n")
    first = getpass.getpass("Secret: ")
    return first if getpass.getpass("Once more: ") == first else None
