"""The end of a printed sheet: addenda, what the record stands on, the closing list and the signatures."""

from collections.abc import Iterator
from datetime import tzinfo

from reportlab.lib.units import mm
from reportlab.platypus import Flowable, Table

from autotune.paper.layout import (
    LABEL,
    NOTE,
    ROOM,
    SMALL,
    STRONG,
    WARNING,
    TickBox,
    bullets,
    gap,
    grid,
    looks,
    rows,
    text,
    together,
)
from autotune.paper.words import RESULTS, amount_of, both, exact, instant, person_line, shown
from autotune.sheet.schema import Change, Recovery
from autotune.sheet.store import StoredSheet

_CLOSING = (
    "Test enable is taken back at the plant's own panel.",
    "Mode, output and setpoint at the panel were compared with this sheet.",
    "The settings at the panel were compared with the column as left.",
    "The loop was watched after the test, and after the last change of settings.",
    "The operator and the loop owner know the outcome and the cautions above.",
    "The permit is given back.",
    "The head hash is kept in another place than the archive.",
)


def addenda(stored: StoredSheet, zone: tzinfo) -> Iterator[Flowable]:
    """What was added after the sheet was closed, each with its own link of the chain; the sheet stays as it was."""
    for number, (entry, link) in enumerate(zip(stored.addenda, stored.entries[1:], strict=True), start=1):
        who_and_when = f"{entry.kind}, {instant(entry.utc, zone)}, {person_line(entry.person)}"
        parts: list[Flowable] = [gap(2), text(f"Addendum {number}: {who_and_when}", STRONG)]
        if entry.text:
            parts.append(text(entry.text))
        if isinstance(entry, Change):
            parts += _change(entry, zone)
        elif isinstance(entry, Recovery):
            parts += _recovery(entry, stored)
        yield together([*parts, text(f"entry {link.n} of the chain, hash {link.hash}", NOTE)])


def _change(change: Change, zone: tzinfo) -> Iterator[Flowable]:
    yield text(f"{change.result}: {RESULTS[change.result]}", WARNING if change.result == "UNVERIFIED" else STRONG)
    yield text(
        f"Settings of {change.source}, confirmed {instant(change.confirmed_utc, zone)} by typing"
        f" {change.confirmation_digest} for the plan"
    )
    yield text(change.plan_digest, SMALL)
    columns = (change.as_found, change.wanted, change.read_back)
    body = [
        (field.label, *(exact(amount_of(column, field.name)) for column in columns), field.unit)
        for field in change.as_found
    ]
    yield grid(("settings", "as found", "wanted", "read back", "unit"), body, figures=(1, 2, 3))
    if change.writes:
        yield gap(2)
        written = [
            (f"{write.utc.astimezone(zone):%H:%M:%S}", write.name, exact(write.amount), write.outcome, write.detail)
            for write in change.writes
        ]
        yield grid(("time", "written", "number, in the setting's unit", "outcome", ""), written, figures=(2,))
    if change.op_bump_pct is not None:
        yield text(f"The output moved by {shown(change.op_bump_pct, '% of OP span')} when the mode went back.", NOTE)


def _recovery(entry: Recovery, stored: StoredSheet) -> Iterator[Flowable]:
    yield text(f"{entry.result}: {RESULTS[entry.result]}", WARNING if entry.result == "STRANDED" else STRONG)
    met = entry.present
    if met is not None:
        pv_span, op_span = stored.sheet.pv_span, stored.sheet.op_span
        yield text(
            f"The loop as it was met: mode {met.mode}, output {both(met.op_pct, met.op_eu, op_span)}, setpoint"
            f" {both(met.sp_pct, met.sp_eu, pv_span)}, PV {both(met.pv_pct, met.pv_eu, pv_span)}."
        )
    yield from bullets(
        f"written: {write.tag} = {write.raw} (as sent, unscaled), {write.outcome}" for write in entry.writes
    )


def record(stored: StoredSheet, head_hash: str) -> Iterator[Flowable]:
    """What the paper can be checked against."""
    sheet, link = stored.sheet, stored.entries[0]
    libraries = ", ".join(f"{name} {version}" for name, version in sheet.versions.libraries)
    yield from rows(
        [
            (
                "Software",
                f"autotune {sheet.versions.autotune}, Python {sheet.versions.python}{libraries and ', '}{libraries}",
            ),
            ("Kept", f"{len(sheet.samples.t_s)} samples, {len(sheet.writes)} writes, {len(sheet.events)} events"),
            ("Configuration", sheet.configuration_digest),
            ("Journal", sheet.journal_digest or "not kept"),
            ("This sheet", f"{stored.hash} (entry {link.n} of the chain)"),
            ("Head of the archive", f"{head_hash} (when this was printed)"),
        ]
    )
    yield text("Digests are SHA-256. 'autotune sheet verify' compares archive and head hash.", NOTE)


def _closing_list() -> Iterator[Flowable]:
    table = Table(
        [[TickBox(), text(line)] for line in _CLOSING], colWidths=[6 * mm, ROOM - 6 * mm], rowHeights=5.4 * mm
    )
    table.setStyle(
        looks(
            ("VALIGN", (0, 0), (-1, -1), "MIDDLE"),
            ("LEFTPADDING", (0, 0), (0, -1), 1),
            ("BOTTOMPADDING", (1, 0), (1, -1), 2),
        )
    )
    yield text("Ticked by hand by who closes the job:", SMALL)
    yield gap(2)
    yield table


def closing(stored: StoredSheet) -> Iterator[Flowable]:
    """On one page: a list to be ticked by hand (the program ticks nothing), and three lines to sign."""
    count = len(stored.addenda)
    added = "no addenda" if count == 0 else f"{count} addend{'um' if count == 1 else 'a'}"
    lines = [[text(role, STRONG), "", "", ""] for role in ("Tested", "Witnessed", "Accepted")]
    feet = ["", text("name", LABEL), text("signature", LABEL), text("date", LABEL)]
    widths = [26 * mm, 52 * mm, 60 * mm, ROOM - 138 * mm]
    table = Table([row for line in lines for row in (line, feet)], colWidths=widths, rowHeights=[11 * mm, 5 * mm] * 3)
    table.setStyle(
        looks(
            ("VALIGN", (0, 0), (-1, -1), "BOTTOM"),
            ("LEFTPADDING", (0, 0), (0, -1), 0),
            *(("LINEBELOW", (n, row), (n, row), 0.8, "black") for row in (0, 2, 4) for n in (1, 2, 3)),
            *(("VALIGN", (0, row), (-1, row), "TOP") for row in (1, 3, 5)),
            ("LINEAFTER", (1, 0), (2, -1), 4, "white"),
        )
    )
    yield together(
        [
            *_closing_list(),
            gap(8),
            text(f"Signed for {stored.sheet.sheet_id}, {stored.sheet.outcome.ended}, with {added}:", STRONG),
            table,
            gap(2),
        ]
    )
