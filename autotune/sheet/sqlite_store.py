"""The store of sheets in one SQLite file.

One table, one row an entry; triggers refuse every change, the hash chain shows one that was made
all the same.  Each call opens its own connection, so that any thread may call; ``synchronous=FULL``
puts an entry on the disk before ``append`` returns.
"""

import json
import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from datetime import datetime
from pathlib import Path

from autotune.errors import SheetError
from autotune.sheet.chain import GENESIS, ChainEntry, Damage, inspect_chain, next_entry
from autotune.sheet.schema import Addendum, Sheet
from autotune.sheet.store import (
    AsLeft,
    SheetLine,
    StoredSheet,
    checked_from_text,
    newest_settings,
    stored_sheet,
    to_text,
)

_APPLICATION_ID = 0x41545348  # marks the file as a store of sheets
_LAYOUT_VERSION = 1

# The columns that queries need are computed by SQLite from the entry, so that no fact is kept twice.
_LAYOUT = {
    "entry": """
        CREATE TABLE entry (
            n INTEGER PRIMARY KEY,
            previous TEXT NOT NULL UNIQUE,
            hash TEXT NOT NULL UNIQUE,
            kind TEXT NOT NULL GENERATED ALWAYS AS (json_extract(text, '$.kind')) STORED,
            opens TEXT GENERATED ALWAYS AS
                (CASE json_extract(text, '$.kind') WHEN 'sheet' THEN json_extract(text, '$.sheet_id') END)
                STORED UNIQUE,
            adds_to TEXT GENERATED ALWAYS AS
                (CASE json_extract(text, '$.kind') WHEN 'sheet' THEN NULL ELSE json_extract(text, '$.sheet_id') END)
                STORED REFERENCES entry (opens),
            loop TEXT GENERATED ALWAYS AS (json_extract(text, '$.loop')) STORED,
            started_utc TEXT GENERATED ALWAYS AS (json_extract(text, '$.started_utc')) STORED,
            ended TEXT GENERATED ALWAYS AS (json_extract(text, '$.outcome.ended')) STORED,
            code TEXT GENERATED ALWAYS AS (json_extract(text, '$.outcome.code')) STORED,
            text TEXT NOT NULL
        ) STRICT""",
    "entry_by_loop": "CREATE INDEX entry_by_loop ON entry (loop)",
    "entry_by_sheet": "CREATE INDEX entry_by_sheet ON entry (adds_to)",
    "entry_never_changes": """
        CREATE TRIGGER entry_never_changes BEFORE UPDATE ON entry
        BEGIN SELECT RAISE(ABORT, 'a sheet is never changed'); END""",
    "entry_never_goes": """
        CREATE TRIGGER entry_never_goes BEFORE DELETE ON entry
        BEGIN SELECT RAISE(ABORT, 'a sheet is never removed'); END""",
    "entry_continues": """
        CREATE TRIGGER entry_continues BEFORE INSERT ON entry
        WHEN NEW.n IS NOT (SELECT coalesce(max(n), 0) + 1 FROM entry)
          OR NEW.previous IS NOT coalesce((SELECT hash FROM entry ORDER BY n DESC LIMIT 1), printf('%064d', 0))
        BEGIN SELECT RAISE(ABORT, 'an entry continues the chain'); END""",
}


class SqliteStore:
    """A ``SheetStore`` in ``file``, which must exist; ``create`` makes it.

    ``busy_s`` is how long a call waits for another program that is writing.  An empty store is never
    made silently: on a disk that is not mounted that would look like a store whose sheets are gone.
    """

    def __init__(self, file: Path, busy_s: float = 5.0) -> None:
        self.file = file
        self._busy_s = busy_s

    @classmethod
    def create(cls, file: Path, busy_s: float = 5.0) -> "SqliteStore":
        """Open the store, making folder and file where there is none yet; raises ``SheetError``."""
        store = cls(file, busy_s)
        try:
            file.parent.mkdir(parents=True, exist_ok=True)
        except OSError as fault:
            raise SheetError(f"{file.parent}: {fault.strerror}; make the folder or correct `data_dir`") from fault
        with store._connected("rwc") as connection:
            with _transaction(connection):
                if not connection.execute("SELECT count(*) FROM sqlite_schema").fetchone()[0]:
                    for statement in _LAYOUT.values():
                        connection.execute(statement)
                    connection.execute(f"PRAGMA application_id={_APPLICATION_ID}")
                    connection.execute(f"PRAGMA user_version={_LAYOUT_VERSION}")
            store._check_layout(connection)
            with suppress(sqlite3.OperationalError):  # busy: whoever is busy there sets the same
                connection.execute("PRAGMA journal_mode=WAL")
        return store

    def append(self, sheet: Sheet) -> str:
        """See ``SheetStore``."""
        return self._append(sheet, f"a sheet {sheet.sheet_id} is kept already")

    def append_addendum(self, addendum: Addendum) -> str:
        """See ``SheetStore``."""
        return self._append(addendum, f"no sheet {addendum.sheet_id}; `autotune sheet list` shows those there are")

    def get(self, sheet_id: str) -> StoredSheet:
        """See ``SheetStore``."""
        query = "SELECT n, previous, hash, text FROM entry WHERE opens = :id OR adds_to = :id ORDER BY n"
        with self._opened() as connection:
            rows = connection.execute(query, {"id": sheet_id}).fetchall()
        return stored_sheet((ChainEntry(*row) for row in rows), sheet_id, str(self.file))

    def list(self, loop: str | None = None) -> tuple[SheetLine, ...]:
        """See ``SheetStore``."""
        query = (
            "SELECT opens, loop, started_utc, ended, code, hash FROM entry WHERE opens IS NOT NULL"
            " AND (:loop IS NULL OR loop = :loop) ORDER BY n"
        )
        with self._opened() as connection:
            return tuple(SheetLine(*row) for row in connection.execute(query, {"loop": loop}))

    def as_left(self, loop: str, until: datetime | None = None) -> AsLeft | None:
        """See ``SheetStore``."""
        query = (
            "SELECT n, previous, hash, text FROM entry WHERE kind IN ('sheet', 'write', 'restore')"
            " AND coalesce(opens, adds_to) IN (SELECT opens FROM entry WHERE loop = :loop) ORDER BY n DESC"
        )
        with self._opened() as connection:
            rows = connection.execute(query, {"loop": loop})
            return newest_settings((checked_from_text(ChainEntry(*row), str(self.file)) for row in rows), until)

    def head_hash(self) -> str:
        """See ``SheetStore``."""
        with self._opened() as connection:
            last = _last(connection)
        return GENESIS if last is None else last.hash

    def verify(self, head: str | None = None) -> tuple[Damage, ...]:
        """See ``SheetStore``; also SQLite's own check of the file and of what guards it against changes."""
        with self._opened() as connection:
            damage = list(_damaged_layout(connection))
            try:
                rows = connection.execute("SELECT n, previous, hash, text FROM entry ORDER BY n")
                damage += inspect_chain((ChainEntry(*row) for row in rows), head)
                damage += _damaged_summaries(connection)
                damage += [
                    Damage(None, None, f"SQLite says: {line}")
                    for (line,) in connection.execute("PRAGMA integrity_check")
                    if line != "ok"
                ]
            except sqlite3.DatabaseError as fault:
                damage.append(Damage(None, None, f"the file can't be read to its end: {fault}"))
        return tuple(damage)

    def _append(self, entry: Sheet | Addendum, refused: str) -> str:
        text = to_text(entry)
        with self._opened() as connection, _transaction(connection):
            link = next_entry(_last(connection), text)
            try:
                connection.execute(
                    "INSERT INTO entry (n, previous, hash, text) VALUES (?, ?, ?, ?)",
                    (link.n, link.previous, link.hash, link.text),
                )
            except sqlite3.IntegrityError as fault:
                raise SheetError(f"{self.file}: {refused}") from fault
        return link.hash

    @contextmanager
    def _opened(self) -> Iterator[sqlite3.Connection]:
        with self._connected("rw") as connection:
            self._check_layout(connection)
            yield connection

    def _check_layout(self, connection: sqlite3.Connection) -> None:
        (application,) = connection.execute("PRAGMA application_id").fetchone()
        if application != _APPLICATION_ID:
            raise SheetError(f"{self.file}: this database is not a store of sheets; correct `data_dir`")
        (version,) = connection.execute("PRAGMA user_version").fetchone()
        if version > _LAYOUT_VERSION:
            raise SheetError(
                f"{self.file}: laid out in version {version}, this program knows up to {_LAYOUT_VERSION};"
                " open it with the newer autotune that made it"
            )

    @contextmanager
    def _connected(self, mode: str) -> Iterator[sqlite3.Connection]:
        connection = None
        try:
            uri = f"{self.file.absolute().as_uri()}?mode={mode}"
            connection = sqlite3.connect(uri, uri=True, timeout=self._busy_s, isolation_level=None)
            connection.execute("PRAGMA foreign_keys=ON")
            connection.execute("PRAGMA synchronous=FULL")
            yield connection
        except sqlite3.Error as fault:
            raise SheetError(f"{self.file}: {_remedy(fault)}") from fault
        finally:
            if connection is not None:
                connection.close()


@contextmanager
def _transaction(connection: sqlite3.Connection) -> Iterator[None]:
    connection.execute("BEGIN IMMEDIATE")
    try:
        yield
    except BaseException:
        with suppress(sqlite3.Error):  # the first fault is the one to tell
            connection.execute("ROLLBACK")
        raise
    connection.execute("COMMIT")


def _last(connection: sqlite3.Connection) -> ChainEntry | None:
    row = connection.execute("SELECT n, previous, hash, text FROM entry ORDER BY n DESC LIMIT 1").fetchone()
    return None if row is None else ChainEntry(*row)


def _damaged_layout(connection: sqlite3.Connection) -> Iterator[Damage]:
    present = dict(connection.execute("SELECT name, sql FROM sqlite_schema WHERE sql IS NOT NULL"))
    for name, statement in _LAYOUT.items():
        if present.get(name) != statement.strip():
            yield Damage(None, None, f"{name}, which guards the entries, is missing or was changed")


def _damaged_summaries(connection: sqlite3.Connection) -> Iterator[Damage]:
    """What the index tells must be what the entry tells."""
    for n, text, *summary in connection.execute("SELECT n, text, opens, loop, ended, code FROM entry ORDER BY n"):
        try:
            fields = json.loads(text)
        except ValueError:
            continue  # its hash told already
        outcome = fields.get("outcome", {})
        opens = fields.get("sheet_id") if fields.get("kind") == "sheet" else None
        if summary != [opens, fields.get("loop"), outcome.get("ended"), outcome.get("code")]:
            yield Damage(n, opens, "its line in the index says something else than the entry")


_REMEDIES = {
    "SQLITE_CANTOPEN": "can't be opened; correct `data_dir`, mount its disk or mend the rights of file and folder",
    "SQLITE_BUSY": "is locked by another program; end that program or wait, then try again",
    "SQLITE_NOTADB": "is not a database; correct `data_dir`, or put a backup in its place",
    "SQLITE_CORRUPT": "is damaged; keep a copy of it as it is, then put a backup in its place",
    "SQLITE_FULL": "the disk is full; free some space and try again",
    "SQLITE_READONLY": "can't be written; mend the rights of file and folder",
    "SQLITE_IOERR": "the disk failed; check it before anything else",
}


def _remedy(fault: sqlite3.Error) -> str:
    name = getattr(fault, "sqlite_errorname", "")
    for code, remedy in _REMEDIES.items():
        if name.startswith(code):
            return f"{remedy} ({fault})"
    return f"{fault}; run `autotune sheet verify`"
