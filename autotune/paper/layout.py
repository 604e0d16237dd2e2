"""The pieces that a printed sheet is laid out of: A4, black on white, one dark red for what needs a person.

Every cell is a paragraph that wraps, long words break, and columns share the room that there is: nothing can
run over the edge.  Dark red prints as a dark grey; nothing is told by colour alone.
"""

from collections.abc import Iterable, Sequence
from typing import Any
from xml.sax.saxutils import escape

from reportlab.lib.colors import Color, black, white
from reportlab.lib.enums import TA_RIGHT
from reportlab.lib.pagesizes import A4
from reportlab.lib.styles import ParagraphStyle
from reportlab.lib.units import mm
from reportlab.platypus import CondPageBreak, Flowable, KeepTogether, LongTable, Paragraph, Spacer, Table, TableStyle

from autotune.paper.fonts import BOLD, REGULAR, drawable, width_of

PAGE_WIDTH, PAGE_HEIGHT = A4
LEFT, RIGHT, TOP, BOTTOM = 22 * mm, 14 * mm, 17 * mm, 19 * mm
ROOM = PAGE_WIDTH - LEFT - RIGHT
ACCENT = Color(0.55, 0.0, 0.05)
GREY = Color(0.38, 0.38, 0.38)
RULE = Color(0.62, 0.62, 0.62)
SHADE = Color(0.86, 0.86, 0.86)

BODY = ParagraphStyle(
    "body", fontName=REGULAR, fontSize=9.2, leading=11.6, textColor=black, bulletFontName=REGULAR, splitLongWords=1
)
STRONG = ParagraphStyle("strong", parent=BODY, fontName=BOLD)
SMALL = ParagraphStyle("small", parent=BODY, fontSize=8, leading=10)
NOTE = ParagraphStyle("note", parent=SMALL, spaceBefore=3, spaceAfter=1)
OUTCOME = ParagraphStyle("outcome", parent=BODY, fontName=BOLD, fontSize=15, leading=19, alignment=TA_RIGHT)
LABEL = ParagraphStyle("label", parent=BODY, textColor=GREY)
STRONG_FIGURE = ParagraphStyle("strong figure", parent=STRONG, alignment=TA_RIGHT)
HEAD = ParagraphStyle("head", parent=BODY, fontName=BOLD, fontSize=8.2, leading=10)
HEAD_FIGURE = ParagraphStyle("head figure", parent=HEAD, alignment=TA_RIGHT)
SECTION = ParagraphStyle("section", parent=BODY, fontName=BOLD, fontSize=11, leading=14)
LOOP = ParagraphStyle("loop", parent=BODY, fontName=BOLD, fontSize=22, leading=26)
SERVICE = ParagraphStyle("service", parent=BODY, fontSize=11, leading=14)
LOUD = ParagraphStyle("loud", parent=BODY, fontName=BOLD, fontSize=12.5, leading=16, textColor=white)
WARNING = ParagraphStyle("warning", parent=STRONG, textColor=ACCENT)

_LABEL_WIDTH = 31 * mm
_PADDING = 3.0


def text(told: str, style: ParagraphStyle = BODY) -> Paragraph:
    """A paragraph of plain text; nothing in it is read as markup."""
    return Paragraph(escape(drawable(told)), style)


def looks(*commands: Any) -> TableStyle:
    """How a table is drawn; its own typeface is ours even where no cell is set in it, so that no other is named."""
    return TableStyle([("FONTNAME", (0, 0), (-1, -1), REGULAR), *commands])


def section(number: int, title: str, parts: Iterable[Flowable], needs: float = 32 * mm) -> list[Flowable]:
    """A numbered section, begun where its page has the points it ``needs``; one without content is left out."""
    body = list(parts)
    if not body:
        return []
    heading = Table([[text(f"{number}", SECTION), text(title, SECTION)]], colWidths=[8 * mm, ROOM - 8 * mm])
    heading.setStyle(
        looks(
            ("LINEABOVE", (0, 0), (-1, 0), 0.8, black),
            ("LEFTPADDING", (0, 0), (-1, -1), 0),
            ("TOPPADDING", (0, 0), (-1, -1), 2),
            ("BOTTOMPADDING", (0, 0), (-1, -1), 2),
        )
    )
    return [Spacer(1, 9), CondPageBreak(needs), heading, *body]


def rows(pairs: Iterable[tuple[str, str]], room: float = ROOM, label_width: float = _LABEL_WIDTH) -> list[Flowable]:
    """Labels with their texts beside them."""
    cells = [[text(label, LABEL), text(told)] for label, told in pairs]
    if not cells:
        return []
    table = LongTable(cells, colWidths=[label_width, room - label_width], splitInRow=1)
    table.setStyle(looks(*_TIGHT, ("LEFTPADDING", (0, 0), (0, -1), 0)))
    return [table]


def beside(left: Sequence[tuple[str, str]], right: Sequence[tuple[str, str]]) -> list[Flowable]:
    """Two lists of labels with their texts, side by side; row by row, so that long texts can go on overleaf."""
    gap, half = 6 * mm, (ROOM - 6 * mm) / 2.0
    label = 24 * mm
    filled = [[*pair, "", *other] for pair, other in _paired(left, right)]
    styles = (LABEL, BODY, BODY, LABEL, BODY)
    cells = [[text(told, style) for told, style in zip(row, styles, strict=True)] for row in filled]
    table = LongTable(cells, colWidths=[label, half - label, gap, label, half - label], splitInRow=1)
    table.setStyle(looks(*_TIGHT, ("LEFTPADDING", (0, 0), (0, -1), 0)))
    return [table]


def _paired(
    left: Sequence[tuple[str, str]], right: Sequence[tuple[str, str]]
) -> Iterable[tuple[tuple[str, str], tuple[str, str]]]:
    empty = ("", "")
    for n in range(max(len(left), len(right))):
        yield (left[n] if n < len(left) else empty, right[n] if n < len(right) else empty)


def bullets(texts: Iterable[str], style: ParagraphStyle = BODY) -> list[Flowable]:
    """A list; later lines stand under the first one's text."""
    hanging = ParagraphStyle(f"{style.name} bullet", parent=style, leftIndent=9, bulletIndent=1, spaceBefore=1)
    return [Paragraph(escape(drawable(told)), hanging, bulletText="–") for told in texts]


def grid(
    titles: Sequence[str],
    body: Sequence[Sequence[str]],
    figures: Iterable[int] = (),
    strong: Iterable[int] = (),
    style: ParagraphStyle = BODY,
    room: float = ROOM,
) -> Flowable:
    """A table under its titles, which come again on every page.

    ``figures`` are the columns that stand at the right edge, ``strong`` the rows in bold, ``style`` that of the rest.
    """
    right, bold = set(figures), set(strong)
    plain = ParagraphStyle(f"{style.name} figure", parent=style, alignment=TA_RIGHT)
    styles = {(False, False): style, (False, True): STRONG, (True, False): plain, (True, True): STRONG_FIGURE}
    table = LongTable(
        [
            [text(cell, HEAD_FIGURE if n in right else HEAD) for n, cell in enumerate(titles)],
            *(
                [text(cell, styles[n in right, row in bold]) for n, cell in enumerate(cells)]
                for row, cells in enumerate(body)
            ),
        ],
        colWidths=column_widths([titles, *body], room),
        repeatRows=1,
        splitInRow=1,
        hAlign="LEFT",
    )
    table.setStyle(
        looks(
            *_TIGHT,
            ("LINEBELOW", (0, 0), (-1, 0), 0.6, black),
            ("LINEBELOW", (0, 1), (-1, -1), 0.25, RULE),
            ("VALIGN", (0, 0), (-1, 0), "BOTTOM"),
        )
    )
    return table


def column_widths(cells: Sequence[Sequence[str]], room: float) -> list[float]:
    """Natural widths where they fit; otherwise each column gets its longest word, and the rest is shared out."""
    columns = range(len(cells[0]))
    padding = 2.0 * _PADDING + 0.5
    natural = [max(_width(row[n]) for row in cells) + padding for n in columns]
    if sum(natural) <= room:
        return natural
    share = room / len(natural)
    words = [max(_width(word) for row in cells for word in row[n].split() or [""]) + padding for n in columns]
    least = [min(word, share) for word in words]
    wanting = [max(0.0, whole - small) for whole, small in zip(natural, least, strict=True)]
    spare_ratio = (room - sum(least)) / sum(wanting)
    return [small + spare_ratio * want for small, want in zip(least, wanting, strict=True)]


def _width(told: str) -> float:
    return width_of(drawable(told), BOLD, BODY.fontSize)


def band(lines: Sequence[str]) -> Flowable:
    """White on dark: what nobody may miss, also on a monochrome printer."""
    table = Table([[text(line, LOUD)] for line in lines], colWidths=[ROOM], splitInRow=1)
    table.setStyle(
        looks(
            ("BACKGROUND", (0, 0), (-1, -1), ACCENT),
            ("LEFTPADDING", (0, 0), (-1, -1), 8),
            ("RIGHTPADDING", (0, 0), (-1, -1), 8),
            ("TOPPADDING", (0, 0), (-1, 0), 6),
            ("BOTTOMPADDING", (0, -1), (-1, -1), 8),
        )
    )
    return table


def side_by_side(left: Sequence[Flowable], right: Sequence[Flowable]) -> Flowable:
    """Two small things beside each other; both must fit on one page."""
    table = Table([[list(left), list(right)]], colWidths=[ROOM * 0.62, ROOM * 0.38])
    table.setStyle(
        looks(
            ("VALIGN", (0, 0), (-1, -1), "TOP"),
            ("LEFTPADDING", (0, 0), (-1, -1), 0),
            ("RIGHTPADDING", (0, 0), (-1, -1), 0),
            ("TOPPADDING", (0, 0), (-1, -1), 0),
        )
    )
    return table


def together(parts: Iterable[Flowable]) -> Flowable:
    """Parts on one page where a page has room for them."""
    return KeepTogether(list(parts))


class TickBox(Flowable):
    """An empty square, to be ticked by hand."""

    _EDGE = 3.4 * mm

    def wrap(self, _width: float, _height: float) -> tuple[float, float]:
        """Its size."""
        return self._EDGE, self._EDGE

    def draw(self) -> None:
        """Draw it onto the page."""
        self.canv.setStrokeColor(black)
        self.canv.setLineWidth(0.8)
        self.canv.rect(0, 0, self._EDGE, self._EDGE)


def gap(points: float = 4.0) -> Flowable:
    """Some air."""
    return Spacer(1, points)


_TIGHT = [
    ("VALIGN", (0, 0), (-1, -1), "TOP"),
    ("LEFTPADDING", (0, 0), (-1, -1), _PADDING),
    ("RIGHTPADDING", (0, 0), (-1, -1), _PADDING),
    ("TOPPADDING", (0, 0), (-1, -1), 1.2),
    ("BOTTOMPADDING", (0, 0), (-1, -1), 1.6),
]
