"""All loops' settings as found and as left, as a workbook for a spreadsheet (Office Open XML, ISO/IEC 29500).

As found is what the first test of a loop met, as left the newest word about the controller.  The same archive
gives the same file, byte for byte.
"""

import io
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, tzinfo
from operator import itemgetter

import xlsxwriter

from autotune.paper.words import amount_of, instant
from autotune.sheet.schema import Change, Quantity, Samples, Sheet
from autotune.sheet.store import SheetStore, StoredSheet, newest_settings

Cell = str | float | None
LoopLine = tuple[str, str, str]
"""A loop's name, service and plant unit."""

_SETTINGS = ("loop", "service", "plant unit", "setting", "unit", "as found", "as left", "left by", "as found at",
             "as found on sheet", "as left at", "as left on sheet")  # fmt: skip
_TESTS = ("loop", "sheet", "started", "ended", "code", "tested by", "hash")
_WIDTHS = {"service": 44, "as found on sheet": 32, "as left on sheet": 32, "sheet": 32, "hash": 68, "tested by": 28}
_EXCEL_BEGINS = datetime(1980, 1, 1, tzinfo=UTC)


@dataclass(frozen=True, slots=True)
class _Kept:
    """What the workbook needs of a sheet: the sheet without its bulk, its hash, and its changes with their places."""

    sheet: Sheet
    hash: str
    newest: datetime
    entries: tuple[tuple[int, Sheet | Change], ...]


def to_workbook(store: SheetStore, loops: Sequence[LoopLine], zone: tzinfo = UTC) -> bytes:
    """The workbook's file; ``loops`` are those of the configuration, those in the archive alone come after them."""
    kept = [_without_bulk(store.get(line.sheet_id)) for line in store.list()]
    file = io.BytesIO()
    book = xlsxwriter.Workbook(
        file, {"in_memory": True, "strings_to_formulas": False, "strings_to_urls": False, "strings_to_numbers": False}
    )
    made = max((one.newest for one in kept), default=_EXCEL_BEGINS)
    book.set_properties({"title": "Loop settings", "created": made.astimezone(UTC).replace(tzinfo=None)})
    _write(book, "settings", _SETTINGS, _settings_rows(kept, loops, zone))
    _write(book, "tests", _TESTS, _test_rows(kept, zone))
    _write(book, "about", ("what", ""), _about_rows(store.head_hash()))
    book.close()
    return file.getvalue()


def _without_bulk(stored: StoredSheet) -> _Kept:
    """One sheet at a time: an archive of long tests would not fit into memory."""
    bare = stored.sheet.model_copy(update={"samples": Samples(), "writes": (), "events": ()})
    places = [link.n for link in stored.entries]
    changes = [(n, entry) for n, entry in zip(places[1:], stored.addenda, strict=True) if isinstance(entry, Change)]
    newest = max([bare.ended_utc, *(entry.utc for entry in stored.addenda)])
    return _Kept(bare, stored.hash, newest, ((places[0], bare), *changes))


def _settings_rows(kept: Sequence[_Kept], loops: Sequence[LoopLine], zone: tzinfo) -> Iterator[Sequence[Cell]]:
    for name, service, unit in _with_archived(loops, kept):
        own = sorted((entry for one in kept if one.sheet.loop == name for entry in one.entries), key=itemgetter(0))
        left = newest_settings((entry for _, entry in reversed(own)), None)
        found = next((one.sheet for one in kept if one.sheet.loop == name and _settings_found(one.sheet)), None)
        if found is None or left is None:
            yield (name, service, unit, "no settings in the archive")
            continue
        for field in _settings_found(found):
            yield (
                name,
                service,
                unit,
                field.label,
                field.unit,
                field.amount,
                amount_of(left.settings, field.name),
                "as a test found them" if left.origin == "AS_FOUND" else left.origin,
                instant(found.started_utc, zone),
                found.sheet_id,
                instant(left.utc, zone),
                left.sheet_id,
            )


def _settings_found(sheet: Sheet) -> tuple[Quantity, ...]:
    return () if sheet.as_found is None else sheet.as_found.settings


def _with_archived(loops: Sequence[LoopLine], kept: Sequence[_Kept]) -> list[LoopLine]:
    known = {name for name, _, _ in loops}
    archived = {
        one.sheet.loop: (one.sheet.loop, one.sheet.service, one.sheet.unit)
        for one in kept
        if one.sheet.loop not in known
    }
    return [*loops, *archived.values()]


def _test_rows(kept: Sequence[_Kept], zone: tzinfo) -> Iterator[Sequence[Cell]]:
    for one in kept:
        sheet = one.sheet
        yield (
            sheet.loop, sheet.sheet_id, instant(sheet.started_utc, zone), sheet.outcome.ended, sheet.outcome.code,
            sheet.person.name, one.hash,
        )  # fmt: skip


def _about_rows(head_hash: str) -> Iterator[Sequence[Cell]]:
    yield ("as found", "what the first test of the loop in this archive met")
    yield ("as left", "the newest read-back of a write or restore, or what the newest test met")
    yield ("UNVERIFIED", "the settings could not be read back: look at the controller's own panel")
    yield ("empty cell", "not known")
    yield ("head hash of the archive", head_hash)


def _write(book: xlsxwriter.Workbook, name: str, titles: Sequence[str], rows: Iterator[Sequence[Cell]]) -> None:
    page = book.add_worksheet(name)
    head = book.add_format({"bold": True, "bottom": 1, "text_wrap": True, "valign": "top"})
    loud = book.add_format({"bold": True, "font_color": "#8C000D"})
    page.write_row(0, 0, titles, head)
    page.freeze_panes(1, 1)
    page.set_landscape()
    page.set_paper(9)  # A4
    page.fit_to_pages(1, 0)
    page.repeat_rows(0)
    for column, title in enumerate(titles):
        page.set_column(column, column, _WIDTHS.get(title, 18))
    for number, row in enumerate(rows, start=1):
        for column, cell in enumerate(row):
            if isinstance(cell, str):
                page.write_string(number, column, cell, loud if cell in {"UNVERIFIED", "STRANDED"} else None)
            elif cell is not None:
                page.write_number(number, column, cell)
