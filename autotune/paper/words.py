"""Figures, instants and outcomes as a person reads them.  Undefined is said, never left blank."""

import textwrap
from collections.abc import Iterator
from datetime import datetime, tzinfo

from autotune.sheet.schema import Quantity

WIDTH = 100

OUTCOMES = {
    "COMPLETE": "The test ran to its end and the loop was given back as found.",
    "ABORTED": "The test was ended early and the loop was given back as found.",
    "RELEASED": "Somebody else took the loop during the test. It was left to them; nothing more was written.",
    "STRANDED": "NOT CONFIRMED THAT THE LOOP WAS GIVEN BACK. Look at the controller and enter the values as found.",
}
RESULTS = {
    "WRITTEN": "written; the controller holds the new settings, read back",
    "PUT_BACK": "not kept; the settings as found were put back, read back",
    "UNVERIFIED": "NOT VERIFIED; read the controller's own panel and enter the values wanted",
    "RESTORED": "the loop was given back as found",
    "GUARD_GAVE_BACK": "the controller's guard had given the loop back already",
    "TAKEN": "somebody else had taken the loop; nothing was written",
    "STRANDED": "NOT CONFIRMED; look at the controller and enter the values as found",
}


def plain(text: str) -> str:
    """Text without anything that could steer a terminal or a printer."""
    return "".join(sign if sign.isprintable() else " " for sign in text)


def shown(number: float | None, unit: str = "", digits: int = 4) -> str:
    """A figure with its unit to ``digits`` significant digits; ``None`` is "not known"."""
    return "not known" if number is None else f"{_digits(number, digits)} {unit}".rstrip()


def exact(number: float | None, unit: str = "") -> str:
    """A figure that a person may have to type: as many digits as single precision holds."""
    return shown(number, unit, digits=7)


def quantity(figure: Quantity) -> str:
    """A conclusion with its interval and what the interval claims."""
    if figure.amount is None:
        return "not determined"
    best = shown(figure.amount, plain(figure.unit))
    if figure.low is None or figure.high is None:
        return f"{best}, without an interval"
    claim = "bounds" if figure.level is None else f"{100.0 * figure.level:g} % interval"
    return f"{best}, {claim} {shown(figure.low)} to {shown(figure.high, plain(figure.unit))}"


def instant(utc: datetime, zone: tzinfo) -> str:
    """Local time with its offset from UTC."""
    return utc.astimezone(zone).strftime("%Y-%m-%d %H:%M:%S %z")


def wrapped(text: str, indent: str = "") -> Iterator[str]:
    """Lines of at most ``WIDTH`` columns; later lines stand under the first one's text."""
    lead = indent + " " * (len(text) - len(text.lstrip("- ")))
    yield from textwrap.wrap(plain(text), WIDTH, initial_indent=indent, subsequent_indent=lead) or [indent.rstrip()]


def _digits(number: float, digits: int) -> str:
    """Significant digits, without an exponent wherever a person would write none."""
    written_out = 10.0**digits - 0.5 <= abs(number) < 1e15
    return f"{number:.0f}" if written_out else f"{number or 0.0:.{digits}g}"
