from datetime import timedelta, timezone
from functools import cache
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from autotune.paper.layout import LEFT, PAGE_WIDTH, RIGHT
from autotune.paper.measured import LINES_AT_MOST
from autotune.paper.pdf import to_pdf
from autotune.sheet.schema import (
    Addendum,
    Findings,
    Outcome,
    Proposal,
    Said,
    Samples,
    Sheet,
    WatchColumn,
    WatchLimit,
    WriteLine,
)
from autotune.sheet.store import MemoryStore, StoredSheet
from tests.paper.reading import A4_HEIGHT, A4_WIDTH, fonts, images, pages, reader, text_boxes, whole
from tests.sheet.sheets import as_found, change, limits, note, recovery, sheet

HEAD = "e" * 64
LONG = "WWWWWWWWWW" * 10


def stored(one: Sheet, *addenda: Addendum) -> StoredSheet:
    store = MemoryStore()
    store.append(one)
    for addendum in addenda:
        store.append_addendum(addendum)
    return store.get(one.sheet_id)


def changed(**other: object) -> Sheet:
    return Sheet.model_validate(dict(sheet()) | other)


def paper(*addenda: Addendum, **other: object) -> bytes:
    return to_pdf([stored(changed(**other), *addenda)], HEAD)


@cache
def usual() -> tuple[str, ...]:
    """The pages of the example sheet, read back once for all tests that look at them."""
    return tuple(pages(paper()))


def stays_on_the_page(pdf: bytes) -> bool:
    """Whether all text lies between the margins; half a point is left to rounding."""
    boxes = list(text_boxes(pdf))
    assert boxes
    return all(
        left >= LEFT - 0.5 and right <= PAGE_WIDTH - RIGHT + 0.5 and 15.0 <= base <= A4_HEIGHT - 20.0
        for _, left, right, base in boxes
    )


def test_the_first_page_names_the_loop_its_instruments_and_how_the_test_ended() -> None:
    first = usual()[0]
    for told in (
        "TIC-204 juice outlet temperature COMPLETE",
        "Plant unit pasteuriser 1",
        "Controller 127.0.0.1:5020",
        "2026-12-01 09:45:02 +0000, lasted 95 s, by R. Lind (typed, not authenticated)",
        "PV range 0 % = 0 degC, 100 % = 120 degC",
        "three cycles agreed",
        "The test ran to its end and the loop was given back as found.",
    ):
        assert told in first


def test_the_block_and_the_final_element_are_told_as_the_configuration_described_them() -> None:
    text = (
        '{"action":"reverse","op_low_means":"closed","op_high_means":"open","failure_position":"closed",'
        '"tags":[["pv",{"kind":"ModbusTag","table":"holding","address":12,"type":"REAL"}],'
        '["op",{"kind":"OpcUaTag","node_id":"ns=2;s=OP","path":""}]],"block":{"form":"series",'
        '"panel_labels":["PB","RESET","RATE"],"gain_kind":"proportional band","gain_per":"percent",'
        '"integral_kind":"repeats per min","integral_off":0.0,"derivative_kind":"time in min","derivative_on":"PV",'
        '"derivative_filter_ratio":10.0,"algorithm":"positional","anti_windup":"stop","scan_s":0.05}}'
    )
    first = pages(paper(configuration_text=text))[0]
    assert "series form, reverse acting; PB: proportional band per percent; RESET: repeats per min (off at 0)" in first
    assert "RATE: time in min, on PV, filter ratio 10; positional, anti-windup: stop; scan 0.05 s" in first
    assert "0 %: closed; 100 %: open; on failure: closed" in first
    assert "holding 12 (from 0), REAL" in first
    assert "ns=2;s=OP" in first


def test_as_found_stands_in_both_units_beside_the_last_reading() -> None:
    first = usual()[0]
    assert "Mode AUTO MAN" in first
    assert "Output 42 % 47 %" in first
    assert "Setpoint 60 % = 72 degC 60 % = 72 degC" in first
    assert "PV 59.9 % = 71.88 degC 60.1 % = 72.12 degC" in first
    assert "RESET 0.8 repeats/min" in first
    assert "This test changed none of the settings. They were not read again after it." in first


def test_findings_cycles_and_proposals_carry_units_intervals_and_reasons() -> None:
    told = whole(paper(proposals_reason="it is the calmest"))
    for figure in (
        "ultimate gain 6.1 %OP/%PV, 95 % interval 5.6 to 6.3 %OP/%PV",
        "ultimate period 13.9 s, bounds 13.1 to 14.4 s",
        "static gain not determined",
        "By a fitted model; time from our clock.",
        "the controller's scan is not known",
        "the drift was large",
        "describing function 0.4420 0.1730 1 -2.900 0.02",
        "1 12.5 14.20 1.100 1.320 5.000",  # 1.1 % of a span of 120 degC is 1.32 degC
        "half swing of PV, degC",
        "Recommended: it is the calmest",
        "GAIN, %OP/%PV RESET, repeats/min gain x peak of |S|",
        "as found 1.5 0.8 1",
        "some-rule-pi 2.1 1.25 1.4 1.6 recommended",
        "a rule, after a paper, table 1. faster than now Rounding changed a setting by at most 0.2 %.",
        "other: needs a static gain",
    ):
        assert figure in told, figure


def test_plan_limits_events_writes_and_costs_are_on_the_paper() -> None:
    told = " ".join(usual())
    for line in (
        "up 5 %, down 5 % of OP span",
        "in force 0.25 % = 0.3 degC",
        "PV at rest 59.95 % = 71.94 degC",
        "sd 0.1 %, 0.002 %/s",
        "PV low 50 % = 60 degC",
        "PV rate 4 %/s",
        "PV deviation switched off",
        "none in the controller",
        "divert valve 1 1 closed",
        "PV_RANGE: PV left its range",
        "asked to finish R. Lind",
        "09:45:12.000 op 4700 applied DriveOutput, =1+1",
        "Altogether 1 tags were written: op 1 x applied.",
        "late writes can't be excluded: the controller has no guard",
        "Cautions accepted at 09:45:02: – The valve will move.",
        "I stand at the skid and can stop it.",
        "Permit, change no. ....",
    ):
        assert line in told, line


def test_the_record_names_versions_digests_and_both_hashes() -> None:
    one = stored(sheet())
    told = whole(to_pdf([one], HEAD))
    for line in ("autotune 0.1.0, Python 3.11.7, numpy 2.3.0", "c" * 64, "d" * 64, f"{one.hash} (entry 1", HEAD):
        assert line in told


def test_every_page_carries_the_sheet_its_hash_and_its_number() -> None:
    one = stored(sheet(), change(sheet()))
    told = pages(to_pdf([one], HEAD))
    assert len(told) > 1
    for number, page in enumerate(told, start=1):
        assert f"page {number} of {len(told)} " in page
        assert f"{one.sheet.sheet_id} hash {one.hash}" in page


def test_it_is_a4_and_every_typeface_is_embedded_and_nothing_is_a_raster_image() -> None:
    pdf = paper(note(sheet()))
    boxes = [page.mediabox for page in reader(pdf).pages]
    assert all((float(box.width), float(box.height)) == pytest.approx((A4_WIDTH, A4_HEIGHT), abs=0.01) for box in boxes)
    named = fonts(pdf)
    assert {name.partition("+")[2] for name in named} == {"RobotoCondensed-Regular", "RobotoCondensed-Bold"}
    assert all(named.values())
    assert images(pdf) == 0


def test_a_stranded_loop_is_loud_on_every_page_with_the_values_to_enter() -> None:
    told = pages(paper(outcome=Outcome(ended="STRANDED", code="LINK_LOST", text="no answer")))
    assert "STRANDED. NOT CONFIRMED THAT THE LOOP WAS GIVEN BACK. Look at the controller" in told[0]
    assert "As found: output 42 %; setpoint 60 % = 72 degC; mode AUTO." in told[0]
    assert "LINK_LOST" in told[0]
    assert all("STRANDED" in page for page in told)


def test_a_stranded_loop_that_was_never_read_says_that_nothing_is_known() -> None:
    told = whole(paper(outcome=Outcome(ended="STRANDED", code=None, text="lost"), as_found=None))
    assert "What to enter is not known" in told


def test_what_became_of_a_stranded_loop_stands_beside_it() -> None:
    stranded = Outcome(ended="STRANDED", code=None, text="lost")
    one = changed(outcome=stranded)
    restored = recovery(one).model_copy(update={"result": "RESTORED"})
    told = pages(to_pdf([stored(one, restored)], HEAD))[0]
    assert "Later, addendum 1: RESTORED, the loop was given back as found." in told


def test_a_loop_that_ended_well_is_never_called_stranded() -> None:
    assert "STRANDED" not in " ".join(usual())
    assert "NOT CONFIRMED" not in " ".join(usual())


def test_addenda_stand_as_addenda_with_their_own_hashes_and_as_left_names_them() -> None:
    one = sheet()
    kept = stored(one, change(one), note(one))
    told = whole(to_pdf([kept], HEAD))
    assert "Added later; the sheet above is unchanged" in told
    assert "Addendum 1: write, 2026-12-01 09:48:02 +0000, R. Lind (typed, not authenticated)" in told
    assert "GAIN 1.5 2.1 2.1 %OP/%PV" in told
    assert "GAIN 1.5 2.1 %OP/%PV" in told
    assert "As left: WRITTEN, read back 2026-12-01 09:48:02 +0000" in told
    assert "Addendum 2: note" in told
    assert "valve packing was renewed" in told
    assert "some-rule-pi 2.1 1.25 1.4 1.6 recommended, written" in told
    assert "COMPLETE, with 2 addenda" in told
    for link in kept.entries:
        assert link.hash in told


def test_a_write_that_could_not_be_verified_is_loud_and_never_marked_as_written() -> None:
    one = sheet()
    told = whole(to_pdf([stored(one, change(one, "UNVERIFIED", gain=None))], HEAD))
    assert "SETTINGS NOT VERIFIED (addendum 1). Read the controller's own panel. Wanted: GAIN 2.1 %OP/%PV" in told
    assert "GAIN 1.5 not known %OP/%PV" in told
    assert "recommended, written" not in told


def test_a_recovery_tells_how_the_loop_was_met() -> None:
    told = whole(paper(recovery(sheet())))
    assert "STRANDED: NOT CONFIRMED; look at the controller and enter the values as found" in told
    assert "The loop as it was met: mode AUTO, output 42 %, setpoint 60 % = 72 degC" in told


def test_three_sign_on_the_page_of_the_closing_list() -> None:
    last = usual()[-1]
    for told in ("The permit is given back.", "Tested name signature date", "Witnessed", "Accepted"):
        assert told in last


def test_instants_are_in_the_readers_zone_also_under_the_trend() -> None:
    told = whole(to_pdf([stored(sheet())], HEAD, timezone(timedelta(hours=1))))
    assert "2026-12-01 10:45:02 +0100" in told
    assert "local time, 2026-12-01, UTC+01:00" in told
    assert "10:45:02.1" in told  # a mark under 0.2 s of samples


def test_the_trend_tells_limits_that_lie_beyond_it() -> None:
    told = " ".join(usual())
    assert "PV limit 60 degC" in told
    assert "PV limit 84 degC" in told
    assert "OP limit" in told
    assert "grey: hysteresis of the relay" in told


def test_the_same_sheet_gives_the_same_file_dated_by_its_newest_entry() -> None:
    one = sheet()
    pdf = to_pdf([stored(one, change(one))], HEAD)
    assert pdf == to_pdf([stored(one, change(one))], HEAD)
    about = reader(pdf).metadata
    assert about is not None
    assert about.creation_date == change(one).utc
    assert about.title == one.sheet_id


def test_several_sheets_make_one_file_with_an_index_and_an_outline() -> None:
    store = MemoryStore()
    for one in (sheet(), sheet("PIC-110", minutes=5, ended="ABORTED")):
        store.append(one)
    kept = [store.get(line.sheet_id) for line in store.list()]
    pdf = to_pdf(kept, store.head_hash())
    told = pages(pdf)
    assert "TIC-204 juice outlet temperature 2026-12-01 09:45:02 +0000 COMPLETE TIC-204-20261201-094502-7f3a" in told[0]
    assert "PIC-110 juice outlet temperature 2026-12-01 09:50:02 +0000 ABORTED" in told[0]
    assert "page 1 of 1 " in told[0]
    each = (len(told) - 1) // 2
    for entry, own in zip(kept, (told[1 : 1 + each], told[1 + each :]), strict=True):
        assert all(f"{entry.sheet.sheet_id} hash {entry.hash}" in page for page in own)
        assert f"page {each} of {each} " in own[-1]
    titles: list[Any] = [mark["/Title"] for mark in reader(pdf).outline if isinstance(mark, dict)]
    assert titles == [entry.sheet.sheet_id for entry in kept]


def test_a_test_without_samples_findings_or_as_found_still_makes_a_paper() -> None:
    ended = Outcome(ended="ABORTED", code="NOT_STEADY", text="PV drifts")
    pdf = paper(outcome=ended, as_found=None, writes=(), events=(), findings=None, proposals=(), proposals_reason="",
                samples=Samples(), rested=None, costs=(), cautions_accepted=(), journal_digest=None)  # fmt: skip
    told = whole(pdf)
    for line in ("No sample was taken.", "No conclusion", "The loop was not touched.", "Journal not kept",
                 "nothing is recorded here"):  # fmt: skip
        assert line in told
    assert "None" not in told
    assert "hysteresis of the relay" not in told
    assert stays_on_the_page(pdf)


def test_findings_that_refuse_say_why() -> None:
    assert "No conclusion: no cycles agreed" in whole(
        paper(findings=Findings(time_base="our clock", refusal="no cycles agreed"))
    )


def test_readings_that_are_all_unknown_leave_an_empty_trend() -> None:
    bare = sheet().samples.model_copy(update={"pv_pct": (None,) * 3, "sp_pct": (None,) * 3, "op_pct": (None,) * 3})
    assert "not known" in whole(paper(samples=bare, as_found=None))


def test_the_longest_names_and_forty_watched_conditions_stay_on_the_page() -> None:
    watched = tuple(WatchLimit(name=f"{n}{LONG}"[:100], low_eu=1.0, high_eu=1e9, meaning=LONG) for n in range(40))
    columns = tuple(WatchColumn(name=one.name, reading_eu=(1.0, None, 2.0)) for one in watched)
    panel = tuple(field.model_copy(update={"label": LONG, "unit": LONG}) for field in as_found().settings)
    proposal = Proposal(name=LONG, title=LONG, source=LONG, settings=panel, cautions=(LONG * 3,), is_recommended=True)
    one = changed(
        loop=LONG, service=LONG, unit=LONG, controller=LONG, costs=(LONG,),
        limits=limits().model_copy(update={"watch": watched}),
        samples=sheet().samples.model_copy(update={"watch": columns}),
        as_found=as_found().model_copy(update={"settings": panel, "mode": LONG}),
        outcome=Outcome(ended="STRANDED", code=LONG, text=LONG), proposals=(proposal,) * 8, proposals_reason=LONG,
        pv_span=sheet().pv_span.model_copy(update={"unit": LONG}),
        permission=Said(text=LONG, utc=sheet().started_utc),
    )  # fmt: skip
    pdf = to_pdf([stored(one, note(one, f"{LONG} " * 200))], HEAD)
    assert stays_on_the_page(pdf)
    assert whole(pdf).count("watched: ") == 40


def test_a_long_list_of_writes_is_cut_and_says_so() -> None:
    writes = tuple(
        WriteLine(t_s=float(n), utc=sheet().started_utc, tag="op", raw=n, outcome="APPLIED", sent_earliest_s=float(n),
                  sent_latest_s=float(n), why="DriveOutput")
        for n in range(LINES_AT_MOST + 7)
    )  # fmt: skip
    told = whole(paper(writes=writes))
    assert "7 more lines are in the export of this sheet as CSV and JSON." in told


def test_what_repeats_with_each_scan_is_counted_and_what_did_not_land_is_listed() -> None:
    beat = WriteLine(t_s=1.0, utc=sheet().started_utc, tag="heartbeat", raw=1, outcome="APPLIED", sent_earliest_s=1.0,
                     sent_latest_s=1.0, why="DriveOutput")  # fmt: skip
    lost = beat.model_copy(update={"outcome": "NOT_HEARD", "raw": 2, "detail": "no answer"})
    told = whole(paper(writes=(beat,) * 50 + (lost,)))
    assert "heartbeat 50 x APPLIED, heartbeat 1 x NOT_HEARD" in told
    assert told.count("heartbeat") == 3
    assert "heartbeat 2 NOT_HEARD DriveOutput, no answer" in told


def test_signs_that_the_typeface_lacks_are_shown_as_unknown_and_markup_is_only_text() -> None:
    told = whole(paper(service="<b>Säfte</b> & 温度", unit="Ωλ Соки"))
    assert "<b>Säfte</b> & \N{REPLACEMENT CHARACTER}\N{REPLACEMENT CHARACTER}" in told
    assert "Ωλ Соки" in told


@given(st.text(max_size=200))
@settings(max_examples=6, deadline=None, suppress_health_check=[HealthCheck.too_slow])
def test_no_text_leaves_the_page(text: str) -> None:
    one = changed(service=text, unit=text, costs=(text,), outcome=Outcome(ended="ABORTED", code=text, text=text))
    assert stays_on_the_page(to_pdf([stored(one, note(one, text))], HEAD))
