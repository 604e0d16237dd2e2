"""The hash chain that shows whether a kept entry was changed.  Pure functions, no file.

Each entry is canonical JSON; its hash covers the hash before it, so that changing, removing or
inserting an entry breaks every later link.  Only cutting off the end leaves the rest intact: that
shows against a head hash that was kept elsewhere (it is printed on every sheet).
SHA-256 is FIPS 180-4.
"""

import hashlib
import json
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Any

GENESIS = "0" * 64
"""The hash before the first entry."""


@dataclass(frozen=True, slots=True)
class ChainEntry:
    """One link of the chain: its place from 1, the hash before it, its own hash, and its canonical JSON."""

    n: int
    previous: str
    hash: str
    text: str


@dataclass(frozen=True, slots=True)
class Damage:
    """What is wrong with the chain and from which entry on; ``n`` is ``None`` for what no entry shows."""

    n: int | None
    sheet_id: str | None
    fault: str

    def __str__(self) -> str:
        where = "the store" if self.n is None else f"entry {self.n}"
        return f"{where}{f' ({self.sheet_id})' if self.sheet_id else ''}: {self.fault}"


def to_canonical(fields: Any) -> str:
    """JSON with sorted keys, no spaces, real UTF-8; raises ``ValueError`` for NaN and infinity."""
    return json.dumps(fields, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)


def link_hash(previous: str, text: str) -> str:
    """Hex SHA-256 of the previous hash (64 ASCII characters) followed by the entry's UTF-8 text."""
    return hashlib.sha256(previous.encode("ascii") + text.encode("utf-8")).hexdigest()


def next_entry(last: ChainEntry | None, text: str) -> ChainEntry:
    """The entry that continues the chain after ``last`` (``None``: the first one)."""
    previous = GENESIS if last is None else last.hash
    return ChainEntry(1 if last is None else last.n + 1, previous, link_hash(previous, text), text)


def is_intact(entry: ChainEntry) -> bool:
    """Whether the entry's text is what its own hash was made of."""
    try:
        return entry.hash == link_hash(entry.previous, entry.text)
    except UnicodeEncodeError:
        return False


def inspect_chain(entries: Iterable[ChainEntry], head: str | None) -> tuple[Damage, ...]:
    """All damage in order, the first damaged entry first; empty when the chain holds.

    ``head`` is a hash kept elsewhere: the chain must contain it, as its end or further back.
    """
    damage: list[Damage] = []
    previous, n, is_head_seen = GENESIS, 0, head in {None, GENESIS}
    for entry in entries:
        damage += [Damage(entry.n, _sheet_id(entry.text), fault) for fault in _faults(entry, previous, n + 1)]
        previous, n, is_head_seen = entry.hash, entry.n, is_head_seen or entry.hash == head
    if not is_head_seen:
        fault = f"no entry has the hash {head}: the end was cut off or rewritten after it was noted (last entry: {n})"
        damage.append(Damage(None, None, fault))
    return tuple(damage)


def _faults(entry: ChainEntry, previous: str, n: int) -> Iterator[str]:
    if entry.n != n:
        yield f"entry {n} should stand here: one was removed or renumbered"
    if entry.previous != previous:
        yield "does not continue the entry before it: one was removed, added or changed"
    if not is_intact(entry):
        yield "was changed after it was written: text and hash do not agree"


def _sheet_id(text: str) -> str | None:
    try:
        found = json.loads(text)["sheet_id"]
    except (ValueError, KeyError, TypeError, RecursionError):
        return None
    return found if isinstance(found, str) else None
