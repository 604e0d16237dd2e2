"""A sheet as files for other programs: CSV for a spreadsheet, JSON for everything."""

import csv
import io
import json
from collections.abc import Iterable, Iterator, Sequence

from autotune.errors import SheetError
from autotune.sheet.chain import ChainEntry, to_canonical
from autotune.sheet.schema import Span
from autotune.sheet.store import StoredSheet, stored_sheet

Cell = str | int | float | bool | None


def samples_to_csv(stored: StoredSheet) -> str:
    """All samples, a row each, under comment lines that say what they are; an empty cell is unknown."""
    sheet, samples = stored.sheet, stored.sheet.samples
    columns: dict[str, Sequence[Cell]] = {
        "t_s": samples.t_s,
        "taken_earliest_s": samples.taken_earliest_s,
        "taken_latest_s": samples.taken_latest_s,
        "pv_pct": samples.pv_pct,
        f"pv_eu [{sheet.pv_span.unit}]": _in_units(samples.pv_pct, sheet.pv_span),
        "sp_pct": samples.sp_pct,
        f"sp_eu [{sheet.pv_span.unit}]": _in_units(samples.sp_pct, sheet.pv_span),
        "op_pct": samples.op_pct,
        "mode": samples.mode,
        "pv_quality": samples.pv_quality,
        "op_quality": samples.op_quality,
        "guard_state": samples.guard_state,
        "plc_clock_ms": samples.plc_clock_ms,
        "op_effect_ms": samples.op_effect_ms,
        "op_effect_count": samples.op_effect_count,
    }
    columns |= {f"watch.{column.name}_eu": column.reading_eu for column in samples.watch}
    present = {name: cells for name, cells in columns.items() if len(cells) == len(samples.t_s)}
    return _csv(_about(stored, "samples"), present.keys(), zip(*present.values(), strict=True))


def writes_to_csv(stored: StoredSheet) -> str:
    """Every tag that was written, a row each, with what became of it; ``raw`` is the number as sent, unscaled."""
    names = ("t_s", "utc", "tag", "raw", "outcome", "sent_earliest_s", "sent_latest_s", "why", "detail")
    rows = (
        (w.t_s, w.utc.isoformat(), w.tag, w.raw, w.outcome, w.sent_earliest_s, w.sent_latest_s, w.why, w.detail)
        for w in stored.sheet.writes
    )
    return _csv(_about(stored, "writes"), names, rows)


def to_json(stored: StoredSheet) -> str:
    """The sheet with its addenda as links of the chain.

    Each hash is SHA-256 over ``previous`` and the canonical JSON of ``entry``.
    """
    entries = [
        {"n": link.n, "previous": link.previous, "hash": link.hash, "entry": json.loads(link.text)}
        for link in stored.entries
    ]
    return json.dumps({"entries": entries}, indent=1, ensure_ascii=False, allow_nan=False) + "\n"


def from_json(text: str) -> StoredSheet:
    """The inverse of ``to_json``; raises ``SheetError`` where it is no such file or was changed since."""
    try:
        links = [
            ChainEntry(link["n"], link["previous"], link["hash"], to_canonical(link["entry"]))
            for link in json.loads(text)["entries"]
        ]
        sheet_id = json.loads(links[0].text)["sheet_id"]
    except (ValueError, KeyError, TypeError, IndexError) as fault:
        raise SheetError("exported sheet: not a file that `autotune sheet export` made; export it again") from fault
    return stored_sheet(links, sheet_id, "exported sheet")


def _about(stored: StoredSheet, what: str) -> Iterator[str]:
    sheet = stored.sheet
    yield f"{what} of the loop test {sheet.sheet_id}"
    yield f"loop {sheet.loop} ({sheet.service}), unit {sheet.unit}, controller {sheet.controller}"
    yield f"started {sheet.started_utc.isoformat()}, ended {sheet.ended_utc.isoformat()}: {sheet.outcome.ended}"
    yield f"t_s and *_s: seconds of the test's own clock; *_pct: percent of span; PV span {_span(sheet.pv_span)}"
    yield f"OP span {_span(sheet.op_span)}; *_ms: the controller's clock, unsigned 32 bit, milliseconds"
    yield f"hash of the sheet {stored.hash}"


def _span(span: Span) -> str:
    return f"{span.low_eu:g} .. {span.high_eu:g} {span.unit}".rstrip()


def _in_units(column: Iterable[float | None], span: Span) -> tuple[float | None, ...]:
    width_eu = span.high_eu - span.low_eu
    return tuple(None if pct is None else round(span.low_eu + width_eu * pct / 100.0, 9) for pct in column)


def _csv(about: Iterable[str], names: Iterable[str], rows: Iterable[Iterable[Cell]]) -> str:
    out = io.StringIO()
    for line in about:
        out.write(f"# {' '.join(line.split())}\n")
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(names)
    writer.writerows([_harmless(cell) for cell in row] for row in rows)
    return out.getvalue()


def _harmless(cell: Cell) -> Cell:
    """A text that a spreadsheet would take for a formula gets an apostrophe; numbers stay."""
    return f"'{cell}" if isinstance(cell, str) and cell.startswith(("=", "+", "-", "@", "\t", "\r")) else cell
