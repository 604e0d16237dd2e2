"""Who acts.  Without a daemon the name is the operating system's, typed and not authenticated."""

import getpass
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Person:
    """A person as the sheet names them; ``is_authenticated`` is ``False`` for a name that was only typed."""

    name: str
    is_authenticated: bool = False

    def __str__(self) -> str:
        return self.name if self.is_authenticated else f"{self.name} (typed, not authenticated)"


def person_at_the_terminal(name: str | None = None) -> Person:
    """The person named, or the operating system's user."""
    return Person(name or getpass.getuser())
