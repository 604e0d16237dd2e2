"""Printed sheets: one file that is signed, A4, with each sheet's id and hash on each of its pages.

The same sheets give the same file, byte for byte: its date is that of the newest entry on it.
"""

import io
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime, tzinfo
from typing import Any

from reportlab.lib.units import mm
from reportlab.pdfgen.canvas import Canvas
from reportlab.platypus import BaseDocTemplate, Flowable, Frame, NextPageTemplate, PageBreak, PageTemplate

from autotune.paper import closing, heading, measured
from autotune.paper.fonts import BOLD, REGULAR, cut_to, drawable
from autotune.paper.layout import (
    ACCENT,
    BOTTOM,
    GREY,
    LEFT,
    LOOP,
    PAGE_HEIGHT,
    PAGE_WIDTH,
    RIGHT,
    ROOM,
    RULE,
    SMALL,
    TOP,
    bullets,
    gap,
    grid,
    section,
    text,
)
from autotune.paper.trend import Trend
from autotune.paper.words import instant, newest_change
from autotune.sheet.store import StoredSheet

_FOOT_AT = 11 * mm
_NEEDS = 32 * mm
_ROOM_NEEDED = {"Trend": 102 * mm, "Closing list and signatures": 118 * mm}


def to_pdf(sheets: Sequence[StoredSheet], head_hash: str, zone: tzinfo = UTC) -> bytes:
    """The sheets as one PDF file; several get an index in front.

    ``head_hash`` is the archive's at the moment of printing; instants are told in ``zone``.
    """
    numbering = [_Numbering(stored) for stored in sheets]
    index = [_Numbering(None)] if len(sheets) > 1 else []
    story: list[Flowable] = []
    if index:
        story += [*_index(sheets, head_hash, zone), _LastOf(index[0]), NextPageTemplate("0"), PageBreak()]
    for n, (stored, numbers) in enumerate(zip(sheets, numbering, strict=True)):
        story += [_Bookmark(stored.sheet.sheet_id), *_sheet(stored, head_hash, zone), _LastOf(numbers)]
        if n + 1 < len(sheets):
            story += [NextPageTemplate(str(n + 1)), PageBreak()]
    file = io.BytesIO()
    document = BaseDocTemplate(
        file,
        pagesize=(PAGE_WIDTH, PAGE_HEIGHT),
        title=", ".join(stored.sheet.sheet_id for stored in sheets),
        author=sheets[0].sheet.person.name,
        subject=f"Test sheets, head hash {head_hash}",
        creator=f"autotune {sheets[0].sheet.versions.autotune}",
        invariant=1,
        initialFontName=REGULAR,
    )
    named = [("index", numbers) for numbers in index] + [(str(n), numbers) for n, numbers in enumerate(numbering)]
    document.addPageTemplates([_template(name, numbers) for name, numbers in named])
    made = max(utc for one in sheets for utc in (one.sheet.ended_utc, *(entry.utc for entry in one.addenda)))
    document.build(story, canvasmaker=_canvas_maker(made))
    return file.getvalue()


def _canvas_maker(made: datetime) -> Callable[..., Canvas]:
    stamp = f"D:{made.astimezone(UTC):%Y%m%d%H%M%S}Z"

    def make(*arguments: Any, **options: Any) -> Canvas:
        canvas = Canvas(*arguments, **options)
        canvas.setDateFormatter(lambda *_: stamp)
        return canvas

    return make


def _sheet(stored: StoredSheet, head_hash: str, zone: tzinfo) -> list[Flowable]:
    sheet = stored.sheet
    change = newest_change(stored)
    titled = "Outcome, as found and as left" if change is None else "Outcome, as found and as left (addendum)"
    parts = [
        ("Loop and instruments", heading.loop(stored, zone)),
        (titled, heading.as_found_as_left(stored, zone)),
        ("Trend", iter([gap(3), Trend(sheet, zone)] if sheet.samples.t_s else [text("No sample was taken.")])),
        ("Findings", measured.findings(sheet)),
        ("Cycles seen", measured.cycles(sheet)),
        ("Proposals", measured.proposals(stored)),
        ("What this test can't tell, and what that costs", bullets(sheet.costs or ("nothing is recorded here",))),
        ("Permission and cautions", heading.permission(sheet, zone)),
        ("The test as planned, and its limits", heading.planned(sheet)),
        ("What happened", measured.events(sheet, zone)),
        ("What was written during the test", measured.writes(sheet, zone)),
        ("Added later; the sheet above is unchanged", closing.addenda(stored, zone)),
        ("Record", closing.record(stored, head_hash)),
        ("Closing list and signatures", closing.closing(stored)),
    ]
    story: list[Flowable] = heading.title(stored)
    number = 0
    for title, body in parts:
        laid = section(number + 1, title, body, _ROOM_NEEDED.get(title, _NEEDS))
        number += bool(laid)
        story += laid
    return story


def _index(sheets: Sequence[StoredSheet], head_hash: str, zone: tzinfo) -> list[Flowable]:
    body = [
        (stored.sheet.loop, stored.sheet.service, instant(stored.sheet.started_utc, zone), stored.sheet.outcome.ended,
         stored.sheet.sheet_id)
        for stored in sheets
    ]  # fmt: skip
    return [
        text("Test sheets", LOOP),
        gap(),
        grid(("loop", "service", "started", "ended", "sheet"), body),
        gap(8),
        text(f"Head of the archive when this was printed: {head_hash}", SMALL),
    ]


@dataclass(slots=True)
class _Numbering:
    """The pages of one sheet as they come: a form each, which is drawn once the last page is known."""

    stored: StoredSheet | None
    forms: list[str] = field(default_factory=list)


def _template(name: str, numbers: _Numbering) -> PageTemplate:
    def begin(canvas: Canvas, document: BaseDocTemplate) -> None:
        form = f"foot-{document.page}"
        numbers.forms.append(form)
        _head(canvas, numbers)
        canvas.saveState()
        canvas.doForm(form)
        canvas.restoreState()

    frame = Frame(
        LEFT, BOTTOM, ROOM, PAGE_HEIGHT - TOP - BOTTOM, leftPadding=0, rightPadding=0, topPadding=0, bottomPadding=0
    )
    return PageTemplate(id=name, frames=[frame], onPage=begin)


def _head(canvas: Canvas, numbers: _Numbering) -> None:
    at = PAGE_HEIGHT - 11 * mm
    stored = numbers.stored
    canvas.setFont(BOLD, 8)
    canvas.setFillColor(GREY)
    canvas.drawString(LEFT, at, "TEST SHEET" if stored is not None else "INDEX OF TEST SHEETS")
    if stored is None:
        return
    canvas.setFont(REGULAR, 8)
    if len(numbers.forms) > 1:
        told = cut_to(drawable(f"{stored.sheet.loop}  {stored.sheet.service}"), ROOM - 170, REGULAR, 8)
        canvas.drawString(LEFT + 56, at, told)
    is_stranded = stored.sheet.outcome.ended == "STRANDED"
    canvas.setFillColor(ACCENT if is_stranded else GREY)
    canvas.setFont(BOLD, 11 if is_stranded else 8)
    canvas.drawRightString(PAGE_WIDTH - RIGHT, at, stored.sheet.outcome.ended)


class _LastOf(Flowable):
    """Stands after a sheet's last line, where the number of its pages is known, and draws all its feet."""

    def __init__(self, numbers: _Numbering) -> None:
        super().__init__()
        self._numbers = numbers

    def wrap(self, _width: float, _height: float) -> tuple[float, float]:
        """It takes no room."""
        return 0.0, 0.0

    def draw(self) -> None:
        """Draw the feet of all pages of the sheet."""
        canvas, forms = self.canv, self._numbers.forms
        for number, form in enumerate(forms, start=1):
            canvas.beginForm(form, 0, 0, PAGE_WIDTH, PAGE_HEIGHT)
            _foot(canvas, self._numbers.stored, f"page {number} of {len(forms)}")
            canvas.endForm()


def _foot(canvas: Canvas, stored: StoredSheet | None, page: str) -> None:
    canvas.setStrokeColor(RULE)
    canvas.setLineWidth(0.4)
    canvas.line(LEFT, _FOOT_AT + 9, PAGE_WIDTH - RIGHT, _FOOT_AT + 9)
    canvas.setFillColor(GREY)
    canvas.setFont(BOLD, 8)
    canvas.drawRightString(PAGE_WIDTH - RIGHT, _FOOT_AT, page)
    if stored is not None:
        canvas.drawString(LEFT, _FOOT_AT, cut_to(stored.sheet.sheet_id, ROOM - 70, BOLD, 8))
        canvas.setFont(REGULAR, 6.5)
        canvas.drawString(LEFT, _FOOT_AT - 9, f"hash {stored.hash}")


class _Bookmark(Flowable):
    """An entry of the file's outline."""

    def __init__(self, name: str) -> None:
        super().__init__()
        self._name = name

    def wrap(self, _width: float, _height: float) -> tuple[float, float]:
        """It takes no room."""
        return 0.0, 0.0

    def draw(self) -> None:
        """Mark the place."""
        self.canv.bookmarkPage(self._name)
        self.canv.addOutlineEntry(self._name, self._name)
