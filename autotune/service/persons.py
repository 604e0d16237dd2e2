"""Who acts, and who may: names, roles and secrets.

Without a daemon the name is the operating system's, typed and not authenticated.  The book of persons lies beside
the sheets; secrets are kept as argon2id hashes (RFC 9106) with the library's own parameters.
"""

import getpass
import json
import os
from collections.abc import Iterable
from contextlib import suppress
from dataclasses import dataclass
from enum import Enum
from pathlib import Path
from tempfile import NamedTemporaryFile

from argon2 import PasswordHasher
from argon2.exceptions import InvalidHashError, VerificationError

from autotune.errors import Complaint, ConfigError

SECRET_LENGTH_AT_LEAST = 10
SECRET_LENGTH_AT_MOST = 200
"""In characters; a longer one would only keep the machine busy."""


@dataclass(frozen=True, slots=True)
class Person:
    """A person as the sheet names them; ``is_authenticated`` is ``False`` for a name that was only typed."""

    name: str
    is_authenticated: bool = False

    def __str__(self) -> str:
        return self.name if self.is_authenticated else f"{self.name} (typed, not authenticated)"


class Role(Enum):
    """What a person may do; each is given by itself, ``WATCH`` comes with any of them."""

    WATCH = "watch"
    TEST = "test"
    WRITE = "write"
    CONFIGURE = "configure"


@dataclass(frozen=True, slots=True)
class Account:
    """A person in the book."""

    name: str
    roles: frozenset[Role]
    secret_hash: str
    added_utc: str

    def may(self, role: Role) -> bool:
        """Whether this person may do what needs ``role``."""
        return role in self.roles or role is Role.WATCH


class PersonBook:
    """The persons of one configuration, in ``persons.json`` of its data_dir, readable by its owner only.

    The file is read for each question, so that a removed person is out at once.  Calls block, and hashing takes
    long on purpose: a service makes them in a thread.  Raises ``ConfigError`` where the file can't be used.
    """

    def __init__(self, data_dir: Path, hasher: PasswordHasher | None = None) -> None:
        self.file = data_dir / "persons.json"
        self._hasher = hasher or PasswordHasher()

    def accounts(self) -> tuple[Account, ...]:
        """Everybody in the book, in order of names."""
        try:
            text = self.file.read_text(encoding="utf-8")
        except FileNotFoundError:
            return ()
        except OSError as fault:
            raise self._complaint("", f"can't be read: {fault.strerror}", "mend its rights") from fault
        try:
            persons = json.loads(text)["persons"]
            found = [
                Account(one["name"], frozenset(map(Role, one["roles"])), one["secret_hash"], one["added_utc"])
                for one in persons
            ]
        except (ValueError, KeyError, TypeError) as fault:
            raise self._complaint("persons", f"damaged: {fault}", "restore a backup, or add everybody anew") from fault
        return tuple(sorted(found, key=lambda account: account.name))

    def account(self, name: str) -> Account | None:
        """The person called ``name``, or ``None``."""
        return next((account for account in self.accounts() if account.name == name), None)

    def add(self, name: str, roles: Iterable[Role], secret: str, added_utc: str) -> None:
        """Add a person, who must not be in the book yet."""
        name = name.strip()
        if not name or len(name) > 60 or not name.isprintable():
            raise self._complaint("name", f"{name!r} is no name", "use 1 to 60 printable characters")
        if not SECRET_LENGTH_AT_LEAST <= len(secret) <= SECRET_LENGTH_AT_MOST:
            raise self._complaint(
                name,
                f"the secret has {len(secret)} characters",
                f"use {SECRET_LENGTH_AT_LEAST} to {SECRET_LENGTH_AT_MOST}; a few unrelated words are easy to remember",
            )
        everybody = self.accounts()
        if any(account.name.casefold() == name.casefold() for account in everybody):
            raise self._complaint(name, "is in the book already", "remove the person first to change roles or secret")
        self._keep((*everybody, Account(name, frozenset(roles), self._hasher.hash(secret), added_utc)))

    def remove(self, name: str) -> None:
        """Remove a person; their sheets keep their name."""
        everybody = self.accounts()
        left = [account for account in everybody if account.name != name]
        if len(left) == len(everybody):
            known = ", ".join(account.name for account in everybody) or "nobody"
            raise self._complaint(name, "is not in the book", f"there are: {known}")
        self._keep(left)

    def proves(self, name: str, secret: str) -> bool:
        """Whether ``secret`` is that of ``name``; an unknown name takes as long as a known one."""
        account = self.account(name)
        if len(secret) > SECRET_LENGTH_AT_MOST:
            return False
        if account is None:
            self._hasher.hash(secret)
            return False
        try:
            return self._hasher.verify(account.secret_hash, secret)
        except (VerificationError, InvalidHashError):
            return False

    def _keep(self, accounts: Iterable[Account]) -> None:
        persons = [
            {
                "name": account.name,
                "roles": sorted(role.value for role in account.roles),
                "secret_hash": account.secret_hash,
                "added_utc": account.added_utc,
            }
            for account in accounts
        ]
        text = json.dumps({"schema_version": 1, "persons": persons}, indent=1, ensure_ascii=False) + "\n"
        try:
            self.file.parent.mkdir(parents=True, exist_ok=True)
            with NamedTemporaryFile("w", dir=self.file.parent, encoding="utf-8", delete=False) as fresh:
                fresh.write(text)  # made with mode 0600
                fresh.flush()
                os.fsync(fresh.fileno())
            Path(fresh.name).replace(self.file)
        except OSError as fault:
            with suppress(OSError, NameError):
                Path(fresh.name).unlink()
            raise self._complaint("", f"can't be written: {fault.strerror}", "mend the rights of data_dir") from fault

    def _complaint(self, key: str, fault: str, remedy: str) -> ConfigError:
        return ConfigError((Complaint(str(self.file), key or "file", fault, remedy),))


def person_at_the_terminal(name: str | None = None) -> Person:
    """The person named, or the operating system's user."""
    return Person(name or getpass.getuser())
