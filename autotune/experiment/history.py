"""A sequence that grows by one at little cost and is never changed: what frozen state needs for an hour of samples."""

from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Generic, TypeVar

Entry = TypeVar("Entry")

CHUNK = 64
"""Entries per chunk: an append copies at most this many references, and every 64th one the list of chunks."""


@dataclass(frozen=True, slots=True)
class History(Generic[Entry]):
    """Entries in order of arrival; ``appended`` shares all full chunks with the history that it came from."""

    full: tuple[tuple[Entry, ...], ...] = field(default=())
    tail: tuple[Entry, ...] = field(default=())

    def appended(self, entry: Entry) -> "History[Entry]":
        """The history with one more entry at its end."""
        tail = (*self.tail, entry)
        return History((*self.full, tail), ()) if len(tail) == CHUNK else History(self.full, tail)

    @property
    def last(self) -> Entry | None:
        """The newest entry, ``None`` while there is none."""
        if self.tail:
            return self.tail[-1]
        return self.full[-1][-1] if self.full else None

    def __iter__(self) -> Iterator[Entry]:
        for chunk in self.full:
            yield from chunk
        yield from self.tail

    def __len__(self) -> int:
        return CHUNK * len(self.full) + len(self.tail)
