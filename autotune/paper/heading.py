"""The first page of a printed sheet: which loop, how it ended, as found and as left."""

import json
from collections.abc import Iterator, Mapping, Sequence
from datetime import tzinfo
from itertools import groupby
from typing import Any

from reportlab.platypus import Flowable, Table

from autotune.paper.layout import (
    LOOP,
    NOTE,
    OUTCOME,
    ROOM,
    SERVICE,
    STRONG,
    STRONG_FIGURE,
    WARNING,
    band,
    beside,
    bullets,
    gap,
    grid,
    looks,
    rows,
    side_by_side,
    text,
)
from autotune.paper.words import (
    RESULTS,
    amount_of,
    both,
    exact,
    instant,
    newest_change,
    person_line,
    shown,
    span_line,
    to_eu,
    what_to_do,
)
from autotune.sheet.schema import AsFound, Change, Recovery, Sheet
from autotune.sheet.store import StoredSheet

_OUTCOME_WIDTH = 140.0
_ROWS_BESIDE = 12
"""A longer table of the operating point takes the whole width, where it can go on overleaf."""

Described = Mapping[str, Any]


def described(sheet: Sheet) -> Described:
    """What the loop's configuration told, as the sheet keeps it; empty where it can't be read as that any more."""
    try:
        told = json.loads(sheet.configuration_text)
    except ValueError:
        return {}
    return told if isinstance(told, dict) else {}


def title(stored: StoredSheet) -> list[Flowable]:
    """The loop's name in large, the outcome beside it, and what nobody may miss below."""
    sheet = stored.sheet
    outcome = Table(
        [[text(sheet.outcome.ended, OUTCOME)], [text(sheet.outcome.code or "", STRONG_FIGURE)]], [_OUTCOME_WIDTH]
    )
    outcome.setStyle(looks(("RIGHTPADDING", (0, 0), (-1, -1), 0)))
    head = Table(
        [[[text(sheet.loop, LOOP), text(sheet.service, SERVICE)], outcome]],
        colWidths=[ROOM - _OUTCOME_WIDTH, _OUTCOME_WIDTH],
        splitInRow=1,
    )
    head.setStyle(
        looks(
            ("VALIGN", (0, 0), (-1, -1), "TOP"),
            ("LEFTPADDING", (0, 0), (-1, -1), 0),
            ("RIGHTPADDING", (1, 0), (1, 0), 0),
        )
    )
    loud_lines = list(_loud(stored))
    return [head, *([gap(), band(loud_lines)] if loud_lines else [])]


def _loud(stored: StoredSheet) -> Iterator[str]:
    sheet, found = stored.sheet, stored.sheet.as_found
    if sheet.outcome.ended == "STRANDED":
        yield f"STRANDED. {what_to_do(sheet)}"
        if found is None:
            yield "What to enter is not known: the loop was not read before it was touched."
        else:
            yield (
                f"As found: output {both(found.op_pct, found.op_eu, sheet.op_span)}; setpoint"
                f" {both(found.sp_pct, found.sp_eu, sheet.pv_span)}; mode {found.mode}."
            )
    for number, entry in enumerate(stored.addenda, start=1):
        if isinstance(entry, Recovery):
            yield f"Later, addendum {number}: {entry.result}, {RESULTS[entry.result]}."
    change = newest_change(stored)
    if change is not None and change.result == "UNVERIFIED":
        number = stored.addenda.index(change) + 1
        wanted = ", ".join(f"{field.label} {exact(field.amount, field.unit)}" for field in change.wanted)
        yield f"SETTINGS NOT VERIFIED (addendum {number}). Read the controller's own panel. Wanted: {wanted}."


def loop(stored: StoredSheet, zone: tzinfo) -> Iterator[Flowable]:
    """Identities: plant unit, controller, instruments with ranges, the described PID block."""
    sheet, told = stored.sheet, described(stored.sheet)
    length_s = (sheet.ended_utc - sheet.started_utc).total_seconds()
    yield from rows(
        [
            ("Plant unit", sheet.unit),
            ("Controller", sheet.controller),
            (
                "Tested",
                f"{instant(sheet.started_utc, zone)}, lasted {shown(length_s, 's')}, by {person_line(sheet.person)}",
            ),
            ("PV range", f"{span_line(sheet.pv_span)}{_tag(told, 'pv')}"),
            ("OP range", f"{span_line(sheet.op_span)}{_tag(told, 'op')}"),
            *_final_element(told),
            *_block(told.get("block", {}), told.get("action")),
        ]
    )


def _final_element(told: Described) -> Iterator[tuple[str, str]]:
    if "op_low_means" in told and "op_high_means" in told:
        yield (
            "Final element",
            (
                f"0 %: {told['op_low_means']}; 100 %: {told['op_high_means']};"
                f" on failure: {told.get('failure_position') or 'not known'}"
            ),
        )


def _tag(told: Described, name: str) -> str:
    place = dict(told.get("tags", ())).get(name)
    if not isinstance(place, dict):
        return ""
    if place.get("kind") == "ModbusTag":
        return f"; {place['table']} {place['address']} (from 0), {place['type']}"
    return f"; {place.get('node_id') or place.get('path') or 'place not known'}"


def _block(block: Described, action: str | None) -> Iterator[tuple[str, str]]:
    if not block:
        return
    gain, integral, derivative = block["panel_labels"]
    yield (
        "PID block",
        (
            f"{block['form']} form, {action} acting; {gain}: {block['gain_kind']} per {block['gain_per']};"
            f" {integral}: {block['integral_kind']} (off at {shown(block['integral_off'])});"
            f" {derivative}: {block['derivative_kind']}, on {block['derivative_on']},"
            f" filter ratio {shown(block['derivative_filter_ratio'])}; {block['algorithm']}, anti-windup:"
            f" {block['anti_windup']}; scan {shown(block['scan_s'], 's')}"
        ),
    )


def as_found_as_left(stored: StoredSheet, zone: tzinfo) -> Iterator[Flowable]:
    """The operating point and the settings, before and after."""
    sheet, found = stored.sheet, stored.sheet.as_found
    yield text(f"{sheet.outcome.text}")
    yield text(what_to_do(sheet), WARNING if sheet.outcome.ended == "STRANDED" else STRONG)
    if found is None:
        yield gap()
        yield text("The loop was never taken: there is no reading as found.")
        return
    yield gap()
    points = list(_operating_point(found, sheet))
    change = newest_change(stored)
    if len(points) > _ROWS_BESIDE:
        yield _point_grid(points, ROOM)
        yield gap()
        yield _settings_grid(found, change, ROOM)
    else:
        yield side_by_side([_point_grid(points, ROOM * 0.61)], [_settings_grid(found, change, ROOM * 0.38)])
    if change is None:
        yield text("This test changed none of the settings. They were not read again after it.", NOTE)
    else:
        yield text(
            f"As left: {change.result}, read back {instant(change.utc, zone)}; {RESULTS[change.result]}.",
            WARNING if change.result == "UNVERIFIED" else NOTE,
        )


def _point_grid(points: Sequence[tuple[str, str, str]], room: float) -> Flowable:
    return grid(("operating point", "as found", "last reading of the test"), points, room=room)


def _settings_grid(found: AsFound, change: Change | None, room: float) -> Flowable:
    if not found.settings:
        return text("Settings: not read.")
    if change is None:
        body = [(field.label, exact(field.amount), field.unit) for field in found.settings]
        return grid(("settings", "as found", "unit"), body, figures=(1,), room=room)
    left = change.read_back
    compared = [
        (field.label, exact(field.amount), exact(amount_of(left, field.name)), field.unit) for field in found.settings
    ]
    return grid(("settings", "as found", "as left", "unit"), compared, figures=(1, 2), room=room)


def _operating_point(found: AsFound, sheet: Sheet) -> Iterator[tuple[str, str, str]]:
    samples, pv_span, op_span = sheet.samples, sheet.pv_span, sheet.op_span
    last = (
        (samples.mode[-1], samples.op_pct[-1], samples.sp_pct[-1], samples.pv_pct[-1]) if samples.t_s else (None,) * 4
    )
    mode, op_pct, sp_pct, pv_pct = last
    yield "Mode", found.mode, str(mode or "not known")
    for label, pct, eu, later_pct, span in (
        ("Output", found.op_pct, found.op_eu, op_pct, op_span),
        ("Setpoint", found.sp_pct, found.sp_eu, sp_pct, pv_span),
        ("PV", found.pv_pct, found.pv_eu, pv_pct, pv_span),
    ):
        later_eu = None if later_pct is None else to_eu(later_pct, span)
        yield label, both(pct, eu, span), both(later_pct, later_eu, span)
    for column in samples.watch:
        known = [reading for reading in column.reading_eu if reading is not None]
        first, final = (known[0], known[-1]) if known else (None, None)
        yield f"watched: {column.name}", shown(first), shown(final)


def permission(sheet: Sheet, zone: tzinfo) -> Iterator[Flowable]:
    """Who allowed what, the cautions that were accepted, and room for the permit."""
    yield from rows(
        [
            ("Permitted by", f"{person_line(sheet.person)}, {instant(sheet.permission.utc, zone)}"),
            ("in the words", sheet.permission.text),
            ("Permit, change no.", "." * 60 + " (by hand)"),
        ]
    )
    for accepted, said in groupby(sheet.cautions_accepted, lambda one: f"{one.utc.astimezone(zone):%H:%M:%S}"):
        yield text(f"Cautions accepted at {accepted}:", STRONG)
        yield from bullets(one.text for one in said)


def planned(sheet: Sheet) -> Iterator[Flowable]:
    """The excitation as planned beside the limits that were in force."""
    plan, limits = sheet.plan, sheet.limits
    op_unit, pv_unit = "% of OP span", "% of PV span"
    hysteresis = "from the noise" if plan.hysteresis_pct is None else shown(plan.hysteresis_pct, pv_unit)
    yield from beside(
        [
            ("Excitation", f"{plan.kind}, first {plan.first_move}"),
            ("Steps", f"up {shown(plan.step_up_pct, '%')}, down {shown(plan.step_down_pct, op_unit)}"),
            ("Hysteresis", f"{hysteresis} (half-width)"),
            *_rested(sheet),
            ("Wanted swing", _or_off(plan.wanted_swing_pct, pv_unit, "not asked for")),
            (
                "Cycles",
                f"{plan.cycles_to_agree} within {shown(plan.agreement_pct, '%')}; {plan.cycles_to_discard} left out",
            ),
            ("Baseline", shown(plan.baseline_s, "s")),
            ("Scan", f"ours {shown(plan.scan_s, 's')}, controller's {shown(plan.plc_scan_s, 's')}"),
            ("Guard", "armed in the controller" if plan.has_guard else "none in the controller"),
            ("Clock tags", "of the controller" if plan.has_clock_tags else "none in the controller"),
        ],
        [
            ("Output", f"{shown(limits.op_low_pct, '%')} to {shown(limits.op_high_pct, op_unit)}"),
            ("Steps at most", f"up {shown(limits.step_up_pct, '%')}, down {shown(limits.step_down_pct, op_unit)}"),
            ("Output rate", _or_off(limits.op_rate_pct_per_s, "%/s")),
            ("PV low", both(limits.pv_low_pct, to_eu(limits.pv_low_pct, sheet.pv_span), sheet.pv_span, 4)),
            ("PV high", both(limits.pv_high_pct, to_eu(limits.pv_high_pct, sheet.pv_span), sheet.pv_span, 4)),
            ("PV rate", _or_off(limits.pv_rate_pct_per_s, "%/s")),
            ("PV deviation", _or_off(limits.pv_deviation_pct, pv_unit)),
            ("Test within", shown(limits.test_within_s, "s")),
            ("Cycles at most", f"{limits.cycles_at_most}"),
        ],
    )
    if limits.watch:
        yield gap()
        body = [(one.name, shown(one.low_eu), shown(one.high_eu), one.meaning) for one in limits.watch]
        yield grid(("watched", "from", "to", "otherwise"), body, figures=(1, 2))


def _rested(sheet: Sheet) -> Iterator[tuple[str, str]]:
    rested, span = sheet.rested, sheet.pv_span
    if rested is None:
        return
    width_eu = abs(span.high_eu - span.low_eu) / 100.0
    yield "in force", both(rested.hysteresis_pct, rested.hysteresis_pct * width_eu, span, 4)
    yield "PV at rest", both(rested.reference_pct, to_eu(rested.reference_pct, span), span, 5)
    yield "Noise, drift", f"sd {shown(rested.noise_pct, '%', 2)}, {shown(rested.drift_pct_per_s, '%/s', 2)}"


def _or_off(number: float | None, unit: str, off: str = "switched off") -> str:
    return off if number is None else shown(number, unit)
