import io
from datetime import UTC, timedelta, timezone

from openpyxl import load_workbook

from autotune.paper.workbook import to_workbook
from autotune.sheet.store import MemoryStore
from tests.sheet.sheets import change, sheet

LOOPS = (("TIC-204", "juice outlet temperature", "pasteuriser 1"), ("FIC-101", "juice flow", "pasteuriser 1"))


def _rows(store: MemoryStore, page: str, zone: timezone = UTC) -> list[tuple[object, ...]]:
    book = load_workbook(io.BytesIO(to_workbook(store, LOOPS, zone)))
    return list(book[page].iter_rows(min_row=2, values_only=True))


def _store(*results: str) -> MemoryStore:
    store = MemoryStore()
    first = sheet()
    store.append(first)
    for minutes, result in enumerate(results, start=3):
        store.append_addendum(change(first, result, None if result == "UNVERIFIED" else 2.1, minutes))
    return store


def test_a_row_for_each_setting_holds_it_as_found_and_as_left_with_unit_sheet_and_instant() -> None:
    gain, integral, *_ = _rows(_store("WRITTEN"), "settings")
    assert gain[:8] == (
        "TIC-204", "juice outlet temperature", "pasteuriser 1", "GAIN", "%OP/%PV", 1.5, 2.1, "WRITTEN",
    )  # fmt: skip
    assert gain[8:] == (
        "2026-12-01 09:45:02 +0000", "TIC-204-20261201-094502-7f3a", "2026-12-01 09:48:02 +0000",
        "TIC-204-20261201-094502-7f3a",
    )  # fmt: skip
    assert integral[3:7] == ("RESET", "repeats/min", 0.8, 1.25)


def test_without_a_change_as_left_is_what_the_test_found_and_says_so() -> None:
    gain = _rows(_store(), "settings")[0]
    assert gain[5:8] == (1.5, 1.5, "as a test found them")


def test_as_found_is_the_first_test_and_as_left_the_newest_word() -> None:
    store = _store("WRITTEN")
    store.append(sheet(minutes=60, gain=2.2))
    gain = _rows(store, "settings")[0]
    assert gain[5:8] == (1.5, 2.2, "as a test found them")
    assert gain[11] == "TIC-204-20261201-104502-7f3a"


def test_what_could_not_be_read_back_is_an_empty_cell_and_unverified() -> None:
    gain = _rows(_store("WRITTEN", "UNVERIFIED"), "settings")[0]
    assert gain[5:8] == (1.5, None, "UNVERIFIED")


def test_a_loop_without_a_test_is_listed_and_one_of_the_archive_alone_too() -> None:
    store = _store()
    store.append(sheet("LIC-102", minutes=9))
    rows = _rows(store, "settings")
    assert [row[:4] for row in rows if row[0] == "FIC-101"] == [
        ("FIC-101", "juice flow", "pasteuriser 1", "no settings in the archive")
    ]
    assert [row[0] for row in rows] == ["TIC-204", "TIC-204", "FIC-101", "LIC-102", "LIC-102"]


def test_tests_and_head_hash_are_told_in_local_time() -> None:
    store = _store()
    (line,) = _rows(store, "tests", timezone(timedelta(hours=1)))
    assert line[:4] == ("TIC-204", "TIC-204-20261201-094502-7f3a", "2026-12-01 10:45:02 +0100", "COMPLETE")
    assert line[6] == store.head_hash()
    assert ("head hash of the archive", store.head_hash()) in _rows(store, "about")


def test_a_text_that_looks_like_a_formula_stays_a_text() -> None:
    book = load_workbook(io.BytesIO(to_workbook(MemoryStore(), (("=1+1", "http://a", "12"),))))
    assert [(cell.value, cell.data_type) for cell in book["settings"][2][:3]] == [
        ("=1+1", "s"), ("http://a", "s"), ("12", "s"),
    ]  # fmt: skip


def test_the_same_archive_gives_the_same_file() -> None:
    assert to_workbook(_store("WRITTEN"), LOOPS) == to_workbook(_store("WRITTEN"), LOOPS)
