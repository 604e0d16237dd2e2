"""What a printed sheet tells of the test itself: cycles, findings, proposals, events and writes."""

from collections import Counter
from collections.abc import Iterable, Iterator, Sequence
from datetime import tzinfo

from reportlab.platypus import Flowable

from autotune.paper.layout import NOTE, SMALL, STRONG, bullets, gap, grid, text
from autotune.paper.words import amount_of, compared, exact, quantity, shown, written_proposals
from autotune.sheet.schema import Findings, Proposal, Quantity, Sheet, Span, WriteLine
from autotune.sheet.store import StoredSheet

LINES_AT_MOST = 150
"""Longer lists are cut on paper and say so; the CSV export holds all of them."""

_REPEATED_TAGS = ("holder_request", "heartbeat", "sequence")
_LANDED = "applied"
_FIGURES_LEFT_OUT = frozenset({"phase_margin_deg", "delay_margin_s", "gain_margin_ratio"})
"""Ms bounds these margins; a table of a page's width has no room for all."""


def cycles(sheet: Sheet) -> Iterator[Flowable]:
    """Every whole cycle as seen."""
    if sheet.findings is None or not sheet.findings.cycles:
        return
    span: Span = sheet.pv_span
    width_eu = span.high_eu - span.low_eu
    body = [
        (
            str(n),
            f"{cycle.from_s:.1f}",
            _even(cycle.period_s),
            _even(cycle.pv_amplitude_pct),
            _even(abs(cycle.pv_amplitude_pct * width_eu / 100.0)),
            _even(cycle.amplitude_pct),
        )
        for n, cycle in enumerate(sheet.findings.cycles, start=1)
    ]
    titles = (
        "cycle",
        "from, s",
        "period, s",
        "half swing of PV, % of span",
        f"half swing of PV, {span.unit}",
        "half step of OP, % of span",
    )
    yield grid(titles, body, figures=range(6))


def _even(number: float) -> str:
    """Four significant digits, zeros at the end as well, so that a column reads evenly."""
    return f"{number:#.4g}".rstrip(".")


def findings(sheet: Sheet) -> Iterator[Flowable]:
    """Conclusions with their intervals, why these are as wide as they are, and what was seen."""
    found = sheet.findings
    if found is None:
        yield text("No conclusion: the test did not come so far.")
        return
    if found.refusal is not None:
        yield text(f"No conclusion: {found.refusal}", STRONG)
    if found.concluded:
        yield grid(
            ("concluded", "with its interval"), [(one.label, quantity(one)) for one in found.concluded], strong=(0, 1)
        )
    if found.method:
        yield text(f"By {found.method}; time from {found.time_base}.", NOTE)
    if found.because:
        yield gap(2)
        yield text("Why the intervals are as wide as they are:", STRONG)
        yield from bullets(found.because)
    if found.cautions:
        yield gap(2)
        yield text("Cautions:", STRONG)
        yield from bullets(found.cautions)
    yield from _seen(found)


def _seen(found: Findings) -> Iterator[Flowable]:
    if not found.seen:
        return
    yield gap()
    body = [
        (
            point.method,
            _even(point.frequency_rad_per_s),
            _even(point.gain),
            shown(100.0 * point.gain_sd_ratio, digits=2),
            _even(point.phase_rad),
            shown(point.phase_sd_rad, digits=2),
        )
        for point in found.seen
    ]
    titles = ("seen by", "frequency, rad/s", "gain, %PV/%OP", "its sd, %", "phase, rad", "its sd, rad")
    yield grid(titles, body, figures=range(1, 6))


def proposals(stored: StoredSheet) -> Iterator[Flowable]:
    """The first proposals side by side, the reason of the choice, and what speaks for and against each."""
    sheet, written = stored.sheet, written_proposals(stored)
    offered, more = compared(stored)
    refused = [one for one in sheet.proposals if one.not_proposed_because is not None]
    if sheet.proposals_reason:
        is_any = any(one.is_recommended for one in offered)
        yield text(f"{'Recommended' if is_any else 'Nothing is recommended'}: {sheet.proposals_reason}", STRONG)
        yield gap()
    if offered:
        yield _side_by_side(sheet, offered, written)
        if more:
            yield text(f"{more} more proposals are kept on the sheet.", SMALL)
        yield gap()
        in_words = [(one.name, f"{one.title}, after {one.source}. {_spoken(one)}") for one in offered]
        yield grid(("proposal", "where it comes from, and what speaks against it"), in_words, style=SMALL)
    if refused:
        yield gap()
        body = [(one.name, f"{one.title}: {one.not_proposed_because}") for one in refused]
        yield grid(("not proposed", "because"), body, style=SMALL)


def _side_by_side(sheet: Sheet, offered: Sequence[Proposal], written: frozenset[str]) -> Flowable:
    """Four digits to compare by; what was written stands with all its digits among the addenda."""
    found = () if sheet.as_found is None else sheet.as_found.settings
    fields = _columns([found, *(one.settings for one in offered)])
    figures = [one for one in _columns(one.figures for one in offered) if one.name not in _FIGURES_LEFT_OUT]
    titles = ("", *(_titled(one) for one in fields), "gain x", *(_titled(one) for one in figures), "")
    as_found = (
        "as found",
        *(shown(amount_of(found, one.name)) for one in fields),
        "1",
        *(_figure(sheet.as_found_figures, one.name) for one in figures),
        "",
    )
    body = [
        (
            one.name,
            *(shown(amount_of(one.settings, field.name)) for field in fields),
            "" if one.gain_factor is None else shown(one.gain_factor, digits=3),
            *(_figure(one.figures, figure.name) for figure in figures),
            ", ".join(word for word in (one.is_recommended * "recommended", (one.name in written) * "written") if word),
        )
        for one in offered
    ]
    strong = [n for n, one in enumerate(offered, start=1) if one.is_recommended]
    return grid(titles, [as_found, *body], figures=range(1, len(titles) - 1), strong=strong)


def _columns(lists: Iterable[Sequence[Quantity]]) -> list[Quantity]:
    """One quantity of each name, in order of appearance: the columns of a comparison."""
    named: dict[str, Quantity] = {}
    for quantities in lists:
        for one in quantities:
            named.setdefault(one.name, one)
    return list(named.values())


def _titled(one: Quantity) -> str:
    return f"{one.label}, {one.unit}" if one.unit else one.label


def _figure(figures: Sequence[Quantity], name: str) -> str:
    return shown(amount_of(figures, name)) if any(one.name == name for one in figures) else ""


def _spoken(one: Proposal) -> str:
    rounded = one.rounding_pct is not None and one.rounding_pct > 0.0
    note = (f"Rounding changed a setting by at most {shown(one.rounding_pct, '%')}.",) if rounded else ()
    return " ".join((*one.cautions, *note))


def events(sheet: Sheet, zone: tzinfo) -> Iterator[Flowable]:
    """All that happened, in local time and in seconds of the test."""
    if not sheet.events:
        return
    body = [
        (
            f"{event.utc.astimezone(zone):%H:%M:%S}",
            f"{(event.utc - sheet.started_utc).total_seconds():.1f}",
            event.kind,
            f"{event.code}: {event.text}" if event.code else event.text,
            event.by or "",
        )
        for event in sheet.events[:LINES_AT_MOST]
    ]
    yield grid(("time", "since start, s", "kind", "what", "by"), body, figures=(1,))
    yield from _cut(len(sheet.events))


def writes(sheet: Sheet, zone: tzinfo) -> Iterator[Flowable]:
    """Every write that changed something or didn't land; what repeats with each scan is counted."""
    if not sheet.writes:
        return
    listed = _notable(sheet.writes)
    if listed:
        body = [
            (
                f"{write.utc.astimezone(zone):%H:%M:%S.%f}"[:-3],
                write.tag,
                _raw(write),
                write.outcome,
                f"{write.why}{f', {write.detail}' if write.detail else ''}",
            )
            for write in listed[:LINES_AT_MOST]
        ]
        yield grid(("time", "tag", "number as sent, unscaled", "outcome", "why"), body, figures=(2,))
        yield from _cut(len(listed))
    counted = Counter((write.tag, write.outcome) for write in sheet.writes)
    told = ", ".join(f"{tag} {count} x {outcome}" for (tag, outcome), count in counted.items())
    yield text(
        f"Altogether {len(sheet.writes)} tags were written: {told}. The list has those that changed or did not land.",
        NOTE,
    )


def _notable(lines: Sequence[WriteLine]) -> list[WriteLine]:
    listed, last = [], dict[str, bool | int | float]()
    for write in lines:
        is_new = write.tag not in _REPEATED_TAGS and last.get(write.tag) != write.raw
        if is_new or write.outcome.lower() != _LANDED:
            listed.append(write)
        last[write.tag] = write.raw
    return listed


def _raw(write: WriteLine) -> str:
    return str(write.raw) if isinstance(write.raw, bool | int) else exact(write.raw)


def _cut(count: int) -> Iterator[Flowable]:
    if count > LINES_AT_MOST:
        yield text(f"{count - LINES_AT_MOST} more lines are in the export of this sheet as CSV and JSON.", STRONG)
