"""The sheet as a plain page, at most ``WIDTH`` columns: for a terminal, a printer and a clipboard."""

from collections.abc import Iterable, Iterator, Sequence
from datetime import UTC, tzinfo

from autotune.paper.words import (
    RESULTS,
    WIDTH,
    amount_of,
    between,
    both,
    compared,
    exact,
    instant,
    newest_change,
    outcome_line,
    person_line,
    plain,
    quantity,
    shown,
    span_line,
    what_to_do,
    wrapped,
)
from autotune.sheet.schema import AsFound, Change, Quantity, Recovery, Sheet
from autotune.sheet.store import StoredSheet


def sheet_page(stored: StoredSheet, zone: tzinfo = UTC) -> str:
    """The whole page; instants in ``zone`` with their offset from UTC, every figure with its unit."""
    sheet = stored.sheet
    lines = [
        f"TEST SHEET{sheet.sheet_id:>{WIDTH - 10}}",
        "=" * WIDTH,
        *_identity(sheet, zone),
        *_part("Outcome", _outcome(sheet)),
        *_part("As found, as left", _as_found_as_left(stored, zone)),
        *_part("Permission and cautions", _permission(sheet, zone)),
        *_part("Planned", _planned(sheet)),
        *_part("What happened", _events(sheet, zone)),
        *_part("Cycles seen", _cycles(sheet)),
        *_part("Findings", _findings(sheet)),
        *_part("Proposals", _proposals(stored)),
        *_part("What this test can't tell", _bullets(sheet.costs)),
        *_part("Added later", _addenda(stored, zone)),
        *_part("Record", _record(stored)),
        *_signatures(),
    ]
    return "\n".join(line.rstrip() for line in lines) + "\n"


def _part(title: str, lines: Iterable[str]) -> Iterator[str]:
    """A part with its title; one without content is left out."""
    body = list(lines)
    if body:
        yield ""
        yield f"{title} {'-' * (WIDTH - 1 - len(title))}"
        yield from body


def _identity(sheet: Sheet, zone: tzinfo) -> Iterator[str]:
    length_s = (sheet.ended_utc - sheet.started_utc).total_seconds()
    yield from _rows(
        ("Loop", f"{sheet.loop}  {sheet.service}"),
        ("Unit", f"{sheet.unit}, controller {sheet.controller}"),
        ("Started", f"{instant(sheet.started_utc, zone)}, lasted {shown(length_s, 's')}"),
        ("Tested by", person_line(sheet.person)),
        ("PV span", span_line(sheet.pv_span)),
        ("OP span", span_line(sheet.op_span)),
    )


def _outcome(sheet: Sheet) -> Iterator[str]:
    yield from wrapped(outcome_line(sheet))
    yield from wrapped(what_to_do(sheet))


def _as_found_as_left(stored: StoredSheet, zone: tzinfo) -> Iterator[str]:
    found = stored.sheet.as_found
    if found is None:
        return
    yield from _loop_state(found, stored.sheet)
    change = newest_change(stored)
    if change is not None:
        yield from wrapped(f"Settings as left: {change.result}, {instant(change.utc, zone)}")
        yield from _settings(("as found", found.settings), ("as left", change.read_back))
    else:
        yield from wrapped("Settings: this test changed none.")
        yield from _settings(("as found", found.settings))


def _loop_state(state: AsFound, sheet: Sheet) -> Iterator[str]:
    yield from _rows(
        ("Mode", state.mode),
        ("Output", both(state.op_pct, state.op_eu, sheet.op_span)),
        ("Setpoint", both(state.sp_pct, state.sp_eu, sheet.pv_span)),
        ("PV", both(state.pv_pct, state.pv_eu, sheet.pv_span)),
    )


def _settings(*columns: tuple[str, Sequence[Quantity]]) -> Iterator[str]:
    """Settings side by side under the words of the controller's own panel."""
    if not columns[0][1]:
        return
    yield from _table(
        ("", *(title for title, _ in columns)),
        [
            (field.label, *(exact(amount_of(column, field.name), field.unit) for _, column in columns))
            for field in columns[0][1]
        ],
    )


def _permission(sheet: Sheet, zone: tzinfo) -> Iterator[str]:
    yield from wrapped(f"Permitted {instant(sheet.permission.utc, zone)}: {sheet.permission.text}")
    yield from _bullets(f"accepted {instant(said.utc, zone)}: {said.text}" for said in sheet.cautions_accepted)


def _planned(sheet: Sheet) -> Iterator[str]:
    plan, limits = sheet.plan, sheet.limits
    hysteresis = "from the noise" if plan.hysteresis_pct is None else shown(plan.hysteresis_pct, "% of PV span")
    yield from _rows(
        ("Excitation", f"{plan.kind}, first {plan.first_move}"),
        ("Steps", f"up {shown(plan.step_up_pct, '%')}, down {shown(plan.step_down_pct, '%')} of OP span"),
        ("Hysteresis", f"{hysteresis} (half-width)"),
        ("Output limits", between(limits.op_low_pct, limits.op_high_pct, sheet.op_span)),
        ("PV limits", between(limits.pv_low_pct, limits.pv_high_pct, sheet.pv_span)),
        ("Scan", f"ours {shown(plan.scan_s, 's')}, controller's {shown(plan.plc_scan_s, 's')}"),
        ("Guard", "armed in the controller" if plan.has_guard else "none in the controller"),
    )
    yield from _bullets(
        f"watched: {watch.name} from {shown(watch.low_eu)} to {shown(watch.high_eu)} {watch.meaning}".rstrip()
        for watch in limits.watch
    )


def _events(sheet: Sheet, zone: tzinfo) -> Iterator[str]:
    for event in sheet.events:
        since_s = (event.utc - sheet.started_utc).total_seconds()
        code = f"{event.code}: " if event.code else ""
        by = f" (by {event.by})" if event.by else ""
        yield from wrapped(
            f"- {event.utc.astimezone(zone):%H:%M:%S} ({since_s:.1f} s), {event.kind}: {code}{event.text}{by}"
        )


def _cycles(sheet: Sheet) -> Iterator[str]:
    if sheet.findings is None or not sheet.findings.cycles:
        return
    span = sheet.pv_span
    rows = [
        (
            str(n),
            f"{cycle.from_s:.1f} s",
            shown(cycle.period_s, "s"),
            both(cycle.pv_amplitude_pct, cycle.pv_amplitude_pct * (span.high_eu - span.low_eu) / 100.0, span, 4),
            shown(cycle.amplitude_pct, "%"),
        )
        for n, cycle in enumerate(sheet.findings.cycles, start=1)
    ]
    yield from _table(("no.", "from", "period", "half swing of PV", "half step of OP"), rows)


def _findings(sheet: Sheet) -> Iterator[str]:
    findings = sheet.findings
    if findings is None:
        return
    if findings.refusal is not None:
        yield from wrapped(f"No conclusion: {findings.refusal}")
    for figure in findings.concluded:
        yield from wrapped(f"{figure.label}: {quantity(figure)}")
    if findings.method:
        yield from wrapped(f"by {findings.method}; time from {findings.time_base}")
    yield from _bullets(f"why so wide: {reason}" for reason in findings.because)
    yield from _bullets(f"caution: {caution}" for caution in findings.cautions)
    for point in findings.seen:
        yield from wrapped(
            f"seen, {point.method}: gain {shown(point.gain, '%PV/%OP')} and phase {shown(point.phase_rad, 'rad')}"
            f" at {shown(point.frequency_rad_per_s, 'rad/s')}"
        )


def _proposals(stored: StoredSheet) -> Iterator[str]:
    sheet = stored.sheet
    offered, more = compared(stored)
    refused = [proposal for proposal in sheet.proposals if proposal.not_proposed_because is not None]
    is_any = any(proposal.is_recommended for proposal in sheet.proposals)
    if sheet.proposals_reason:
        yield from wrapped(f"{'Recommended' if is_any else 'Nothing is recommended'}: {sheet.proposals_reason}")
    for proposal in (*offered, *refused):
        mark = " (recommended)" if proposal.is_recommended else ""
        yield from wrapped(f"{proposal.name}: {proposal.title}{mark}")
        yield from wrapped(f"after {proposal.source}", "    ")
        if proposal.not_proposed_because is not None:
            yield from wrapped(f"not proposed: {proposal.not_proposed_because}", "    ")
            continue
        settings = ", ".join(f"{field.label} {exact(field.amount, field.unit)}" for field in proposal.settings)
        yield from wrapped(f"settings: {settings}", "    ")
        if proposal.gain_factor is not None:
            yield from wrapped(f"gain as proposed is {shown(proposal.gain_factor)} times the present one", "    ")
        if proposal.rounding_pct is not None:
            yield from wrapped(f"rounding changed a setting by at most {shown(proposal.rounding_pct, '%')}", "    ")
        for figure in proposal.figures:
            yield from wrapped(f"forecast, {figure.label}: {shown(figure.amount, figure.unit)}", "    ")
        yield from _bullets((f"caution: {caution}" for caution in proposal.cautions), "    ")
    if more:
        yield f"{more} more proposals are kept on the sheet; 'autotune propose' shows them"


def _addenda(stored: StoredSheet, zone: tzinfo) -> Iterator[str]:
    for entry, link in zip(stored.addenda, stored.entries[1:], strict=True):
        yield from wrapped(f"{entry.kind.upper()}, {instant(entry.utc, zone)}, {person_line(entry.person)}")
        if entry.text:
            yield from wrapped(entry.text, "    ")
        if isinstance(entry, Change):
            yield from _change(entry, zone)
        elif isinstance(entry, Recovery):
            yield from wrapped(f"{entry.result}: {RESULTS[entry.result]}", "    ")
            if entry.present is not None:
                yield from wrapped("the loop as it was met:", "    ")
                yield from (f"    {line}" for line in _loop_state(entry.present, stored.sheet))
        yield f"    hash {link.hash}"


def _change(change: Change, zone: tzinfo) -> Iterator[str]:
    yield from wrapped(f"{change.result}: {RESULTS[change.result]}", "    ")
    yield from wrapped(f"settings of {change.source}, confirmed {instant(change.confirmed_utc, zone)}", "    ")
    yield from _settings(("as found", change.as_found), ("wanted", change.wanted), ("read back", change.read_back))
    for write in change.writes:
        detail = f"; {write.detail}" if write.detail else ""
        yield from wrapped(f"- {write.name} = {exact(write.amount)}: {write.outcome}{detail}", "    ")
    if change.op_bump_pct is not None:
        yield from wrapped(f"the output moved by {shown(change.op_bump_pct, '% of OP span')} at the return", "    ")
    yield f"    plan {change.plan_digest}"
    yield from wrapped(f"confirmed with {change.confirmation_digest}", "    ")


def _record(stored: StoredSheet) -> Iterator[str]:
    sheet = stored.sheet
    yield from _rows(
        ("Software", f"autotune {sheet.versions.autotune}, Python {sheet.versions.python}"),
        ("Samples", f"{len(sheet.samples.t_s)}, writes {len(sheet.writes)}"),
        ("Configuration", sheet.configuration_digest),
        ("Journal", sheet.journal_digest or "not kept"),
        ("This sheet", stored.hash),
    )


def _signatures() -> Iterator[str]:
    for role in ("Tested", "Witnessed", "Accepted"):
        yield ""
        yield ""
        yield f"{role:<12}{'.' * 34}   name {'.' * 26}   date {'.' * 12}"


def _rows(*rows: tuple[str, str]) -> Iterator[str]:
    for label, text in rows:
        first, *rest = wrapped(text, " " * 16)
        yield f"{label:<15} {first.lstrip()}"
        yield from rest


def _table(titles: Sequence[str], rows: Sequence[Sequence[str]]) -> Iterator[str]:
    """Columns as wide as their widest cell; what the page has no room for ends in an ellipsis."""
    cells = [tuple(plain(cell) for cell in row) for row in (titles, *rows)]
    room = (WIDTH - 2 * len(titles)) // len(titles)
    widths = [min(room, max(len(row[column]) for row in cells)) for column in range(len(titles))]
    for row in cells:
        fitted = (c if len(c) <= width else f"{c[: width - 1]}…" for c, width in zip(row, widths, strict=True))
        yield "  " + "  ".join(f"{cell:<{width}}" for cell, width in zip(fitted, widths, strict=True))


def _bullets(texts: Iterable[str], indent: str = "") -> Iterator[str]:
    for text in texts:
        yield from wrapped(f"- {text}", indent)
