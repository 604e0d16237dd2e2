"""Figures, instants and outcomes as a person reads them.  Undefined is said, never left blank."""

import textwrap
from collections.abc import Iterator, Sequence
from datetime import datetime, tzinfo

from autotune.sheet.schema import Change, Person, Proposal, Quantity, Sheet, Span
from autotune.sheet.store import StoredSheet

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


COMPARED_AT_MOST = 8
"""A person compares the first few; the sheet keeps all, the best suited first."""


def written_proposals(stored: StoredSheet) -> frozenset[str]:
    """The names of the proposals that were written later."""
    return frozenset(one.source for one in stored.addenda if isinstance(one, Change) and one.result == "WRITTEN")


def compared(stored: StoredSheet) -> tuple[tuple[Proposal, ...], int]:
    """The proposals to show, those recommended or written always among them, and how many more the sheet keeps."""
    offered = [one for one in stored.sheet.proposals if one.not_proposed_because is None]
    kept = written_proposals(stored)
    shown_ones = [
        one for place, one in enumerate(offered) if place < COMPARED_AT_MOST or one.is_recommended or one.name in kept
    ]
    return tuple(shown_ones), len(offered) - len(shown_ones)


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


def outcome_line(sheet: Sheet) -> str:
    """How the test ended, with its code."""
    code = f" ({sheet.outcome.code})" if sheet.outcome.code else ""
    return f"{sheet.outcome.ended}{code}: {sheet.outcome.text}"


def what_to_do(sheet: Sheet) -> str:
    """What the outcome means for the loop."""
    is_untouched = sheet.outcome.ended == "ABORTED" and sheet.as_found is None and not sheet.writes
    return "The loop was not touched." if is_untouched else OUTCOMES[sheet.outcome.ended]


def newest_change(stored: StoredSheet) -> Change | None:
    """The last confirmed change of settings that was added to the sheet."""
    return next((entry for entry in reversed(stored.addenda) if isinstance(entry, Change)), None)


def both(pct: float | None, eu: float | None, span: Span, digits: int = 5) -> str:
    """A reading in percent and, where that is another number, in engineering units."""
    if pct is None:
        return "not known"
    is_percent = (span.low_eu, span.high_eu, span.unit) == (0.0, 100.0, "%")
    told = shown(pct, "%", digits)
    return told if eu is None or is_percent else f"{told} = {shown(eu, span.unit, digits)}"


def to_eu(pct: float, span: Span) -> float:
    """Percent of span in engineering units."""
    return span.low_eu + pct * (span.high_eu - span.low_eu) / 100.0


def between(low_pct: float, high_pct: float, span: Span) -> str:
    """A range of a signal in both units."""
    low, high = (both(pct, to_eu(pct, span), span, 4) for pct in (low_pct, high_pct))
    return f"{low} to {high}"


def span_line(span: Span) -> str:
    """The ends of a span."""
    return f"0 % = {shown(span.low_eu, span.unit)}, 100 % = {shown(span.high_eu, span.unit)}"


def amount_of(column: Sequence[Quantity], name: str) -> float | None:
    """The amount of the quantity called ``name``; ``None`` where the column lacks it."""
    return next((field.amount for field in column if field.name == name), None)


def person_line(person: Person) -> str:
    """A person as the sheet may name them."""
    return person.name if person.is_authenticated else f"{person.name} (typed, not authenticated)"


def _digits(number: float, digits: int) -> str:
    """Significant digits, without an exponent wherever a person would write none."""
    written_out = 10.0**digits - 0.5 <= abs(number) < 1e15
    return f"{number:.0f}" if written_out else f"{number or 0.0:.{digits}g}"
