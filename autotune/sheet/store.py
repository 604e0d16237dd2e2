"""What a store of sheets offers, and the one in memory.  Nothing is ever changed or removed."""

import json
from collections.abc import Iterable
from dataclasses import dataclass
from datetime import datetime
from typing import Protocol

from pydantic import TypeAdapter, ValidationError

from autotune.errors import SheetError
from autotune.sheet.chain import (
    GENESIS,
    ChainEntry,
    Damage,
    inspect_chain,
    is_intact,
    next_entry,
    to_canonical,
)
from autotune.sheet.schema import SCHEMA_VERSION, Addendum, Change, Entry, Quantity, Sheet

_ENTRY: TypeAdapter[Sheet | Addendum] = TypeAdapter(Entry)


@dataclass(frozen=True, slots=True)
class SheetLine:
    """One line of the index of sheets."""

    sheet_id: str
    loop: str
    started_utc: str
    ended: str
    code: str | None
    hash: str


@dataclass(frozen=True, slots=True)
class StoredSheet:
    """A sheet with all that was added to it; ``entries`` are the links of the chain, the sheet's first."""

    sheet: Sheet
    addenda: tuple[Addendum, ...]
    entries: tuple[ChainEntry, ...]

    @property
    def hash(self) -> str:
        """The sheet's own hash, as printed on it."""
        return self.entries[0].hash


@dataclass(frozen=True, slots=True)
class AsLeft:
    """The settings last known to be in the controller: from which entry, and whether they were verified."""

    settings: tuple[Quantity, ...]
    utc: datetime
    sheet_id: str
    origin: str
    is_verified: bool


class SheetStore(Protocol):
    """An append-only chain of sheets and addenda.  Calls block; a service makes them in a thread.

    Every call may raise ``SheetError``, which names the store and the remedy.
    """

    def append(self, sheet: Sheet) -> str:
        """Keep a sheet and return its hash; it is on the disk when this returns."""
        ...

    def append_addendum(self, addendum: Addendum) -> str:
        """Add to the sheet that ``addendum.sheet_id`` names, and return the addendum's hash."""
        ...

    def get(self, sheet_id: str) -> StoredSheet:
        """The sheet with its addenda, in order."""
        ...

    def list(self, loop: str | None = None) -> tuple[SheetLine, ...]:
        """The index, oldest first, of one loop or of all."""
        ...

    def as_left(self, loop: str, until: datetime | None = None) -> AsLeft | None:
        """The settings last known up to ``until`` (``None``: now), or ``None`` where no entry tells any."""
        ...

    def head_hash(self) -> str:
        """The hash of the last entry; kept elsewhere, it shows later whether the end was cut off."""
        ...

    def verify(self, head: str | None = None) -> tuple[Damage, ...]:
        """All damage, the first damaged entry first; with ``head`` also whether the end was cut off."""
        ...


def to_text(entry: Sheet | Addendum) -> str:
    """The canonical JSON that is kept and hashed."""
    return to_canonical(entry.model_dump(mode="json"))


def from_text(text: str, where: str) -> Sheet | Addendum:
    """The entry that a kept text holds; raises ``SheetError`` naming ``where`` and the remedy."""
    try:
        entry = _ENTRY.validate_json(text)
        version: object = entry.schema_version
    except ValidationError as fault:
        first = fault.errors()[0]
        key = ".".join(str(part) for part in first["loc"])
        complaint = f"{where}: damaged at {key}: {first['msg']}; run `autotune sheet verify`"
        version = _version(text)
        if not _is_newer(version):
            raise SheetError(complaint) from fault
    if _is_newer(version):
        raise SheetError(
            f"{where}: written in version {version} of the sheet's shape, this program knows up to"
            f" {SCHEMA_VERSION}; open it with the newer autotune that wrote it"
        )
    return entry


def checked_from_text(entry: ChainEntry, store: str) -> Sheet | Addendum:
    """``from_text`` after the entry's own hash was checked."""
    where = f"{store}: entry {entry.n}"
    if not is_intact(entry):
        raise SheetError(f"{where}: was changed after it was written; run `autotune sheet verify`, restore a backup")
    return from_text(entry.text, where)


def stored_sheet(entries: Iterable[ChainEntry], sheet_id: str, store: str) -> StoredSheet:
    """The sheet made of its own entries in order of the chain."""
    kept = tuple(entries)
    opened = [checked_from_text(entry, store) for entry in kept]
    if not opened or not isinstance(opened[0], Sheet):
        raise SheetError(f"{store}: no sheet {sheet_id}; `autotune sheet list` shows those there are")
    addenda = tuple(entry for entry in opened[1:] if not isinstance(entry, Sheet))
    return StoredSheet(opened[0], addenda, kept)


def newest_settings(newest_first: Iterable[Sheet | Addendum], until: datetime | None) -> AsLeft | None:
    """The newest word about the settings in the controller: a change's read-back, or what a test found."""
    for entry in newest_first:
        if isinstance(entry, Change) and (until is None or entry.utc <= until):
            is_verified = entry.result != "UNVERIFIED"
            return AsLeft(entry.read_back, entry.utc, entry.sheet_id, entry.result, is_verified)
        if (
            isinstance(entry, Sheet)
            and entry.as_found is not None
            and entry.as_found.settings
            and (until is None or entry.started_utc <= until)
        ):
            return AsLeft(entry.as_found.settings, entry.started_utc, entry.sheet_id, "AS_FOUND", True)
    return None


def _version(text: str) -> object:
    try:
        return json.loads(text)["schema_version"]
    except (ValueError, KeyError, TypeError):
        return None


def _is_newer(version: object) -> bool:
    return isinstance(version, int) and version > SCHEMA_VERSION


class MemoryStore:
    """A store that lasts as long as its process, for rehearsals without a disk and tests in virtual time."""

    _NAME = "the store in memory"

    def __init__(self) -> None:
        self._entries: list[ChainEntry] = []

    def append(self, sheet: Sheet) -> str:
        """See ``SheetStore``."""
        if any(line.sheet_id == sheet.sheet_id for line in self.list()):
            raise SheetError(f"{self._NAME}: a sheet {sheet.sheet_id} is kept already")
        return self._add(sheet)

    def append_addendum(self, addendum: Addendum) -> str:
        """See ``SheetStore``."""
        self.get(addendum.sheet_id)
        return self._add(addendum)

    def get(self, sheet_id: str) -> StoredSheet:
        """See ``SheetStore``."""
        own = [link for link, entry in self._opened() if entry.sheet_id == sheet_id]
        return stored_sheet(own, sheet_id, self._NAME)

    def list(self, loop: str | None = None) -> tuple[SheetLine, ...]:
        """See ``SheetStore``."""
        return tuple(
            to_line(entry, link.hash)
            for link, entry in self._opened()
            if isinstance(entry, Sheet) and loop in {None, entry.loop}
        )

    def as_left(self, loop: str, until: datetime | None = None) -> AsLeft | None:
        """See ``SheetStore``."""
        ids = {line.sheet_id for line in self.list(loop)}
        return newest_settings((entry for _, entry in reversed(self._opened()) if entry.sheet_id in ids), until)

    def head_hash(self) -> str:
        """See ``SheetStore``."""
        return self._entries[-1].hash if self._entries else GENESIS

    def verify(self, head: str | None = None) -> tuple[Damage, ...]:
        """See ``SheetStore``."""
        return inspect_chain(self._entries, head)

    def _add(self, entry: Sheet | Addendum) -> str:
        self._entries.append(next_entry(self._entries[-1] if self._entries else None, to_text(entry)))
        return self._entries[-1].hash

    def _opened(self) -> tuple[tuple[ChainEntry, Sheet | Addendum], ...]:
        return tuple((link, checked_from_text(link, self._NAME)) for link in self._entries)


def to_line(sheet: Sheet, own_hash: str) -> SheetLine:
    """The sheet's line in the index."""
    started = sheet.model_dump(mode="json", include={"started_utc"})["started_utc"]
    return SheetLine(sheet.sheet_id, sheet.loop, started, sheet.outcome.ended, sheet.outcome.code, own_hash)
