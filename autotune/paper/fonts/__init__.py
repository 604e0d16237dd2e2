"""The two typefaces of the paper, bundled and embedded: Roboto Condensed, Apache-2.0 (see ORIGIN.txt)."""

from importlib.resources import files

from reportlab.pdfbase.pdfmetrics import registerFont, stringWidth
from reportlab.pdfbase.ttfonts import TTFont

REGULAR = "RobotoCondensed-Regular"
BOLD = "RobotoCondensed-Bold"
UNKNOWN_SIGN = "\N{REPLACEMENT CHARACTER}"


def _registered(name: str) -> TTFont:
    with (files(__name__) / f"{name}.ttf").open("rb") as file:
        font = TTFont(name, file)
    registerFont(font)
    return font


_SIGNS = frozenset(_registered(REGULAR).face.charToGlyph) & frozenset(_registered(BOLD).face.charToGlyph)


def drawable(text: str) -> str:
    """Text in the signs that the typefaces have; new-lines and what steers a printer become spaces."""
    return "".join((sign if ord(sign) in _SIGNS else UNKNOWN_SIGN) if sign.isprintable() else " " for sign in text)


def width_of(text: str, font: str, size: float) -> float:
    """The width of one line of drawable text, in points."""
    return float(stringWidth(text, font, size))


def cut_to(text: str, room: float, font: str, size: float) -> str:
    """The text, ending in an ellipsis where its line has no room for all of it."""
    if width_of(text, font, size) <= room:
        return text
    fitting = next((n for n in range(len(text) - 1, 0, -1) if width_of(f"{text[:n]}…", font, size) <= room), 0)
    return f"{text[:fitting].rstrip()}…"
