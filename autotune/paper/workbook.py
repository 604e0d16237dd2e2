"""All loops' settings as found and as left, as a workbook for a spreadsheet (Office Open XML, ISO/IEC 29500).

As found is what the first test of a loop met, as left the newest word about the controller.  The same archive
gives the same file, byte for byte.
"""

import io
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, tzinfo

import xlsxwriter

from autotune.paper.words import amount_of, instant
from autotune.sheet.schema import Quantity
from autotune.sheet.store import AsLeft, SheetStore, StoredSheet

Cell = str | float | None
LoopLine = tuple[str, str, str]
"""A loop's name, service and plant unit."""

_SETTINGS = ("loop", "service", "plant unit", "setting", "unit", "as found", "as left", "left by", "as found at",
             "as found on sheet", "as left at", "as left on sheet")  # fmt: skip
_TESTS = ("loop", "sheet", "started", "ended", "code", "tested by", "hash")
_WIDTHS = {"service": 44, "as found on sheet": 32, "as left on sheet": 32, "sheet": 32, "hash": 68, "tested by": 28}
_EXCEL_BEGINS = datetime(1980, 1, 1, tzinfo=UTC)


@dataclass(frozen=True, slots=True)
class _Found:
    settings: tuple[Quantity, ...]
    utc: datetime
    sheet_id: str


def to_workbook(store: SheetStore, loops: Sequence[LoopLine], zone: tzinfo = UTC) -> bytes:
    """The workbook's file; ``loops`` are those of the configuration, those in the archive alone come after them."""
    stored = [store.get(line.sheet_id) for line in store.list()]
    file = io.BytesIO()
    book = xlsxwriter.Workbook(
        file, {"in_memory": True, "strings_to_formulas": False, "strings_to_urls": False, "strings_to_numbers": False}
    )
    made = max((_newest(one) for one in stored), default=_EXCEL_BEGINS)
    book.set_properties({"title": "Loop settings", "created": made.astimezone(UTC).replace(tzinfo=None)})
    _write(book, "settings", _SETTINGS, _settings_rows(store, stored, loops, zone))
    _write(book, "tests", _TESTS, _test_rows(stored, zone))
    _write(book, "about", ("what", ""), _about_rows(store))
    book.close()
    return file.getvalue()


def _newest(stored: StoredSheet) -> datetime:
    return max([stored.sheet.ended_utc, *(entry.utc for entry in stored.addenda)])


def _settings_rows(
    store: SheetStore, stored: Sequence[StoredSheet], loops: Sequence[LoopLine], zone: tzinfo
) -> Iterator[Sequence[Cell]]:
    for name, service, unit in _with_archived(loops, stored):
        found, left = _first_found(stored, name), store.as_left(name)
        if found is None and left is None:
            yield (name, service, unit, "no settings in the archive")
            continue
        for field in left.settings if left is not None and left.settings else () if found is None else found.settings:
            yield (
                name,
                service,
                unit,
                field.label,
                field.unit,
                None if found is None else amount_of(found.settings, field.name),
                None if left is None else amount_of(left.settings, field.name),
                _left_by(left),
                None if found is None else instant(found.utc, zone),
                None if found is None else found.sheet_id,
                None if left is None else instant(left.utc, zone),
                None if left is None else left.sheet_id,
            )


def _with_archived(loops: Sequence[LoopLine], stored: Sequence[StoredSheet]) -> list[LoopLine]:
    known = {name for name, _, _ in loops}
    archived = {
        one.sheet.loop: (one.sheet.loop, one.sheet.service, one.sheet.unit)
        for one in stored
        if one.sheet.loop not in known
    }
    return [*loops, *archived.values()]


def _first_found(stored: Sequence[StoredSheet], loop: str) -> _Found | None:
    for one in stored:
        found = one.sheet.as_found
        if one.sheet.loop == loop and found is not None and found.settings:
            return _Found(found.settings, one.sheet.started_utc, one.sheet.sheet_id)
    return None


def _left_by(left: AsLeft | None) -> str:
    if left is None:
        return "not known"
    return {"AS_FOUND": "as a test found them"}.get(left.origin, left.origin)


def _test_rows(stored: Sequence[StoredSheet], zone: tzinfo) -> Iterator[Sequence[Cell]]:
    for one in stored:
        sheet = one.sheet
        yield (
            sheet.loop, sheet.sheet_id, instant(sheet.started_utc, zone), sheet.outcome.ended, sheet.outcome.code,
            sheet.person.name, one.hash,
        )  # fmt: skip


def _about_rows(store: SheetStore) -> Iterator[Sequence[Cell]]:
    yield ("as found", "what the first test of the loop in this archive met")
    yield ("as left", "the newest read-back of a write or restore, or what the newest test met")
    yield ("UNVERIFIED", "the settings could not be read back: look at the controller's own panel")
    yield ("empty cell", "not known")
    yield ("head hash of the archive", store.head_hash())


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
