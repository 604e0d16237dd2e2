"""What every store of sheets does, and what only the one on a disk can suffer."""

import multiprocessing
import re
import sqlite3
from collections.abc import Callable
from contextlib import closing
from datetime import timedelta
from pathlib import Path

import pytest

from autotune.errors import SheetError
from autotune.sheet.chain import GENESIS, link_hash
from autotune.sheet.sqlite_store import SqliteStore
from autotune.sheet.store import MemoryStore, SheetStore, to_text
from tests.sheet.sheets import append_many, change, note, recovery, settings, sheet


@pytest.fixture(params=["memory", "file"])
def store(request: pytest.FixtureRequest, tmp_path: Path) -> SheetStore:
    return MemoryStore() if request.param == "memory" else SqliteStore.create(tmp_path / "kept" / "sheets.sqlite")


@pytest.fixture
def file(tmp_path: Path) -> Path:
    """A store with three tests of one loop."""
    file = tmp_path / "sheets.sqlite"
    store = SqliteStore.create(file)
    for minutes in range(3):
        store.append(sheet(minutes=minutes))
    return file


def _tampered(file: Path, *statements: str) -> None:
    """What somebody with the file and a database tool can do."""
    with closing(sqlite3.connect(file)) as connection, connection:
        for trigger in ("entry_never_changes", "entry_never_goes", "entry_continues"):
            sql = connection.execute("SELECT sql FROM sqlite_schema WHERE name = ?", (trigger,)).fetchone()[0]
            connection.execute(f"DROP TRIGGER {trigger}")
            connection.execute("CREATE TEMP TABLE IF NOT EXISTS dropped (sql TEXT)")
            connection.execute("INSERT INTO dropped VALUES (?)", (sql,))
        for statement in statements:
            connection.execute(statement)
        for (sql,) in connection.execute("SELECT sql FROM dropped").fetchall():
            connection.execute(sql)


def test_a_sheet_comes_back_as_it_was_kept(store: SheetStore) -> None:
    one = sheet()
    kept = store.append(one)
    stored = store.get(one.sheet_id)
    assert stored.sheet == one
    assert stored.hash == kept == link_hash(GENESIS, to_text(one)) == store.head_hash()


def test_an_empty_store_has_the_first_head_and_no_damage(store: SheetStore) -> None:
    assert store.head_hash() == GENESIS
    assert store.verify(GENESIS) == ()
    assert store.list() == ()


def test_what_is_added_later_stands_with_its_sheet_in_order(store: SheetStore) -> None:
    one, other = sheet(), sheet("FIC-101")
    store.append(one)
    store.append(other)
    added = (note(one), change(one), recovery(one))
    hashes = [store.append_addendum(addendum) for addendum in added]
    stored = store.get(one.sheet_id)
    assert stored.addenda == added
    assert [entry.hash for entry in stored.entries[1:]] == hashes
    assert store.get(other.sheet_id).addenda == ()
    assert store.verify(stored.hash) == ()


def test_nothing_is_added_to_a_sheet_that_is_not_kept(store: SheetStore) -> None:
    with pytest.raises(SheetError, match="no sheet TIC-204-20261201-094502-7f3a"):
        store.append_addendum(note(sheet()))
    assert store.head_hash() == GENESIS


def test_one_id_is_kept_once(store: SheetStore) -> None:
    store.append(sheet())
    with pytest.raises(SheetError, match="kept already"):
        store.append(sheet())
    assert len(store.list()) == 1


def test_an_unknown_sheet_is_told_with_the_way_to_the_known_ones(store: SheetStore) -> None:
    with pytest.raises(SheetError, match="no sheet TIC-9; `autotune sheet list`"):
        store.get("TIC-9")


def test_the_index_tells_loop_time_and_outcome_of_one_loop_or_all(store: SheetStore) -> None:
    store.append(sheet())
    store.append(sheet("FIC-101", 1, ended="ABORTED"))
    store.append_addendum(note(sheet()))
    store.append(sheet(minutes=2))
    assert [(line.loop, line.started_utc, line.ended) for line in store.list()] == [
        ("TIC-204", "2026-12-01T09:45:02Z", "COMPLETE"),
        ("FIC-101", "2026-12-01T09:46:02Z", "ABORTED"),
        ("TIC-204", "2026-12-01T09:47:02Z", "COMPLETE"),
    ]
    assert [line.loop for line in store.list("FIC-101")] == ["FIC-101"]
    assert store.list("LIC-102") == ()
    assert {store.get(line.sheet_id).hash for line in store.list()} == {line.hash for line in store.list()}


def test_the_settings_as_left_are_the_newest_word_about_them(store: SheetStore) -> None:
    one = sheet()
    assert store.as_left("TIC-204") is None
    store.append(one)
    found = store.as_left("TIC-204")
    assert found is not None
    assert (found.origin, found.settings, found.is_verified) == ("AS_FOUND", settings(1.5, 0.8), True)
    store.append_addendum(change(one))
    store.append_addendum(note(one))
    written = store.as_left("TIC-204")
    assert written is not None
    assert (written.origin, written.settings, written.sheet_id) == ("WRITTEN", settings(2.1, 1.25), one.sheet_id)
    store.append(sheet(minutes=9, gain=3.3))  # somebody changed it at the panel, the next test found it
    later = store.as_left("TIC-204")
    assert later is not None
    assert (later.origin, later.settings) == ("AS_FOUND", settings(3.3, 0.8))
    assert store.as_left("FIC-101") is None


def test_settings_that_could_not_be_verified_are_said_to_be_so(store: SheetStore) -> None:
    one = sheet()
    store.append(one)
    store.append_addendum(change(one, "UNVERIFIED", gain=None))
    left = store.as_left("TIC-204")
    assert left is not None
    assert not left.is_verified
    assert left.settings[0].amount is None


def test_the_settings_of_an_earlier_date_can_be_asked_for(store: SheetStore) -> None:
    one = sheet()
    store.append(one)
    store.append_addendum(change(one, minutes=3))
    before = store.as_left("TIC-204", until=one.started_utc + timedelta(minutes=2))
    assert before is not None
    assert before.origin == "AS_FOUND"
    assert store.as_left("TIC-204", until=one.started_utc - timedelta(minutes=2)) is None


@pytest.mark.parametrize(
    "statement", ["UPDATE entry SET text = replace(text, 'COMPLETE', 'ABORTED')", "DELETE FROM entry WHERE n = 3"]
)
def test_the_file_itself_refuses_changes(file: Path, statement: str) -> None:
    with (
        closing(sqlite3.connect(file)) as connection,
        pytest.raises(sqlite3.IntegrityError, match=r"a sheet is never (changed|removed)"),
    ):
        connection.execute(statement)


def test_the_file_itself_refuses_what_does_not_continue_the_chain(file: Path) -> None:
    with closing(sqlite3.connect(file)) as connection:
        for n, previous in ((4, GENESIS), (2, SqliteStore(file).head_hash())):
            with pytest.raises(sqlite3.IntegrityError, match="continues the chain"):
                connection.execute(
                    "INSERT OR REPLACE INTO entry (n, previous, hash, text) VALUES (?, ?, 'x', '{}')", (n, previous)
                )


def test_a_changed_entry_is_named_and_no_longer_opened(file: Path) -> None:
    _tampered(file, "UPDATE entry SET text = replace(text, '\"amount\":1.5', '\"amount\":9.5') WHERE n = 2")
    store = SqliteStore(file)
    (damage,) = store.verify()
    assert (damage.n, damage.sheet_id) == (2, "TIC-204-20261201-094602-7f3a")
    assert "changed after it was written" in damage.fault
    with pytest.raises(SheetError, match="entry 2: was changed after it was written"):
        store.get("TIC-204-20261201-094602-7f3a")
    assert store.get("TIC-204-20261201-094502-7f3a").sheet == sheet()


def test_an_entry_taken_out_of_the_middle_is_noticed_at_the_next_one(file: Path) -> None:
    _tampered(file, "DELETE FROM entry WHERE n = 2")
    assert SqliteStore(file).verify()[0].n == 3


def test_a_cut_off_end_shows_against_a_hash_that_was_printed(file: Path) -> None:
    printed = SqliteStore(file).list()[-1].hash
    _tampered(file, "DELETE FROM entry WHERE n = 3")
    store = SqliteStore(file)
    assert store.verify() == ()
    (damage,) = store.verify(printed)
    assert "cut off" in str(damage)


def test_triggers_that_were_taken_away_are_damage_too(file: Path) -> None:
    with closing(sqlite3.connect(file)) as connection:
        connection.execute("DROP TRIGGER entry_never_changes")
    (damage,) = SqliteStore(file).verify()
    assert str(damage) == "the store: entry_never_changes, which guards the entries, is missing or was changed"


def test_an_index_that_was_edited_byte_by_byte_is_damage_too(file: Path) -> None:
    page = file.read_bytes()
    # The first COMPLETE of a row is the computed column, the later one stands in the entry's own text.
    file.write_bytes(page.replace(b"2026-12-01T09:45:02ZCOMPLETE", b"2026-12-01T09:45:02ZSTRANDED"))
    assert file.read_bytes() != page
    damage = SqliteStore(file).verify()
    assert (damage[0].n, damage[0].fault) == (1, "its line in the index says something else than the entry")


def test_a_file_with_a_broken_page_is_told_and_not_a_crash(file: Path) -> None:
    content = bytearray(file.read_bytes())
    content[4096:] = b"\xff" * (len(content) - 4096)
    file.write_bytes(content)
    (damage,) = SqliteStore(file).verify()
    assert "can't be read to its end" in damage.fault
    with pytest.raises(SheetError, match="is damaged; keep a copy"):
        SqliteStore(file).list()


def test_a_missing_file_is_never_replaced_by_an_empty_one(tmp_path: Path) -> None:
    file = tmp_path / "gone.sqlite"
    for call in _calls(SqliteStore(file)):
        with pytest.raises(SheetError, match=rf"^{re.escape(str(file))}: can't be opened; correct `data_dir`"):
            call()
    assert not file.exists()


def _calls(store: SqliteStore) -> tuple[Callable[[], object], ...]:
    return (
        lambda: store.append(sheet()),
        lambda: store.append_addendum(note(sheet())),
        lambda: store.get("x"),
        store.list,
        lambda: store.as_left("x"),
        store.head_hash,
        store.verify,
    )


def test_a_file_that_is_no_database_is_told_with_the_remedy(tmp_path: Path) -> None:
    file = tmp_path / "notes.txt"
    file.write_text("remember the valve packing\n" * 100)
    for call in (lambda: SqliteStore.create(file), SqliteStore(file).list):
        with pytest.raises(SheetError, match=r"notes\.txt: is not a database; correct `data_dir`"):
            call()
    assert file.read_text().startswith("remember")


def test_another_programs_database_is_left_alone(tmp_path: Path) -> None:
    file = tmp_path / "other.sqlite"
    with closing(sqlite3.connect(file)) as connection:
        connection.execute("CREATE TABLE theirs (n)")
    with pytest.raises(SheetError, match="not a store of sheets"):
        SqliteStore.create(file)
    with closing(sqlite3.connect(file)) as connection:
        assert [name for (name,) in connection.execute("SELECT name FROM sqlite_schema")] == ["theirs"]


def test_a_store_of_a_newer_layout_says_what_to_open_it_with(file: Path) -> None:
    with closing(sqlite3.connect(file)) as connection:
        connection.execute("PRAGMA user_version = 2")
    with pytest.raises(SheetError, match=r"laid out in version 2.*newer autotune"):
        SqliteStore(file).list()


def test_a_store_that_another_program_locks_is_told_and_still_readable(file: Path) -> None:
    store = SqliteStore(file, busy_s=0.01)
    with closing(sqlite3.connect(file, isolation_level=None)) as other:
        other.execute("BEGIN IMMEDIATE")
        with pytest.raises(SheetError, match="is locked by another program"):
            store.append(sheet(minutes=9))
        assert len(store.list()) == 3
        other.execute("ROLLBACK")
    store.append(sheet(minutes=9))


def test_a_folder_that_can_not_be_made_is_told(tmp_path: Path) -> None:
    (tmp_path / "plant").write_text("a file")
    with pytest.raises(SheetError, match="make the folder or correct `data_dir`"):
        SqliteStore.create(tmp_path / "plant" / "sheets.sqlite")


def test_a_kept_entry_is_on_the_disk_before_append_returns(file: Path) -> None:
    with SqliteStore(file)._opened() as connection:  # noqa: SLF001 - what it asks of SQLite is the point
        assert connection.execute("PRAGMA synchronous").fetchone() == (2,)  # FULL, after SQLite's documentation
        assert connection.execute("PRAGMA journal_mode").fetchone() == ("wal",)
        assert connection.execute("PRAGMA foreign_keys").fetchone() == (1,)


def test_two_processes_keep_their_sheets_in_one_chain(tmp_path: Path) -> None:
    file, count = tmp_path / "sheets.sqlite", 15
    context = multiprocessing.get_context("spawn")
    both_ready = context.Barrier(2)
    writers = [
        context.Process(target=append_many, args=(file, loop, count, both_ready)) for loop in ("TIC-204", "FIC-101")
    ]
    for writer in writers:
        writer.start()
    for writer in writers:
        writer.join(60)
    assert [writer.exitcode for writer in writers] == [0, 0]
    store = SqliteStore(file)
    assert store.verify() == ()
    assert len(store.list("TIC-204")) == len(store.list("FIC-101")) == count
