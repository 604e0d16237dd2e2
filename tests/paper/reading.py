"""Reads a PDF back as a printer would: pages, typefaces, and where each piece of text ends."""

import io
from collections.abc import Iterator
from typing import Any

from pypdf import PdfReader
from pypdf.generic import ContentStream

A4_WIDTH, A4_HEIGHT = 595.276, 841.890
"""In points of 1/72 inch: 210 mm by 297 mm (ISO 216)."""

Box = tuple[float, float, float]
Matrix = tuple[float, float, float, float, float, float]
_UNIT: Matrix = (1.0, 0.0, 0.0, 1.0, 0.0, 0.0)


def reader(pdf: bytes) -> PdfReader:
    """The file, opened."""
    return PdfReader(io.BytesIO(pdf), strict=True)


def pages(pdf: bytes) -> list[str]:
    """The text of each page, its white space evened out."""
    return [" ".join(page.extract_text().split()) for page in reader(pdf).pages]


def whole(pdf: bytes) -> str:
    """The text of all pages."""
    return " ".join(pages(pdf))


def fonts(pdf: bytes) -> dict[str, bool]:
    """Every typeface that a page or a form names, and whether its file is embedded."""
    found: dict[str, bool] = {}
    for resources in _resources(reader(pdf)):
        for font in resources.get("/Font", {}).values():
            described = font.get_object()
            found[described["/BaseFont"]] = "/FontFile2" in described.get("/FontDescriptor", {}).get_object()
    return found


def images(pdf: bytes) -> int:
    """How many raster images there are."""
    return sum(
        one.get_object()["/Subtype"] == "/Image"
        for resources in _resources(reader(pdf))
        for one in resources.get("/XObject", {}).values()
    )


def text_boxes(pdf: bytes) -> Iterator[tuple[int, float, float, float]]:
    """(page from 1, left, right, base line) of each piece of text, by the widths that the file itself declares."""
    opened = reader(pdf)
    for number, page in enumerate(opened.pages, start=1):
        contents = page.get_contents()
        if contents is not None:
            for box in _boxes(ContentStream(contents, opened), page["/Resources"], opened, _UNIT):
                yield (number, *box)


def _resources(opened: PdfReader) -> Iterator[Any]:
    for page in opened.pages:
        resources: Any = page["/Resources"]
        yield resources
        for one in resources.get("/XObject", {}).values():
            yield one.get_object().get("/Resources", {})


def _boxes(stream: ContentStream, resources: Any, opened: PdfReader, outer: Matrix) -> Iterator[Box]:
    pen = _Pen(outer)
    for operands, operator in stream.operations:
        if operator == b"Do":
            form = resources["/XObject"][operands[0]].get_object()
            yield from _boxes(ContentStream(form, opened), form["/Resources"], opened, pen.place)
        elif operator == b"Tj":
            yield pen.write(operands[0].original_bytes, resources["/Font"])
        elif operator in {b"TJ", b"'", b'"'}:
            raise AssertionError(f"the paper is not expected to use {operator!r}")
        else:
            pen.move(operator, operands)


class _Pen:
    """Where the next text stands (ISO 32000-1, 8.3 and 9.4)."""

    def __init__(self, outer: Matrix) -> None:
        self.place = outer
        self._kept: list[Matrix] = []
        self._line, self._along, self._lead = _UNIT, 0.0, 0.0
        self._font, self._size, self._spacing = "", 0.0, 0.0

    def move(self, operator: bytes, operands: list[Any]) -> None:
        """Carry out what changes the place or the kind of the text."""
        match operator:
            case b"q":
                self._kept.append(self.place)
            case b"Q":
                self.place = self._kept.pop()
            case b"cm":
                self.place = _times(_matrix(operands), self.place)
            case b"BT" | b"Tm" | b"Td" | b"T*":
                self._line, self._along = self._next_line(operator, operands), 0.0
            case b"TL":
                self._lead = float(operands[0])
            case b"Tw":
                self._spacing = float(operands[0])
            case b"Tf":
                self._font, self._size = operands[0], float(operands[1])
            case _:
                pass

    def write(self, raw: bytes, known: Any) -> Box:
        """Left, right and base line of a piece of text."""
        font = known[self._font].get_object()
        widths, first = font["/Widths"], int(font["/FirstChar"])
        width = sum(
            float(widths[sign - first]) * self._size / 1000.0 + (self._spacing if sign == 32 else 0.0) for sign in raw
        )
        upright, _, _, _, x, y = _times(self._line, self.place)
        assert upright == 1.0, "the paper is not expected to turn or to stretch text"
        left = x + self._along
        self._along += width
        return left, left + width, y

    def _next_line(self, operator: bytes, operands: list[Any]) -> Matrix:
        match operator:
            case b"BT":
                return _UNIT
            case b"Tm":
                return _matrix(operands)
            case b"Td":
                return _times((1, 0, 0, 1, float(operands[0]), float(operands[1])), self._line)
            case _:
                return _times((1, 0, 0, 1, 0, -self._lead), self._line)


def _matrix(operands: list[Any]) -> Matrix:
    a, b, c, d, e, f = (float(one) for one in operands)
    return a, b, c, d, e, f


def _times(first: Matrix, second: Matrix) -> Matrix:
    a, b, c, d, e, f = first
    g, h, i, j, k, m = second
    return (a * g + b * i, a * h + b * j, c * g + d * i, c * h + d * j, e * g + f * i + k, e * h + f * j + m)
