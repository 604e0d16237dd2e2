from datetime import timedelta, timezone

import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.paper.text import sheet_page
from autotune.paper.words import WIDTH, exact, quantity, shown
from autotune.sheet.schema import Addendum, Findings, Outcome, Quantity, Sheet
from autotune.sheet.store import MemoryStore, StoredSheet
from tests.sheet.sheets import change, findings, note, recovery, sheet


def _stored(one: Sheet, *addenda: Addendum) -> StoredSheet:
    store = MemoryStore()
    store.append(one)
    for addendum in addenda:
        store.append_addendum(addendum)
    return store.get(one.sheet_id)


def _page(*addenda: Addendum, **changed: object) -> str:
    return sheet_page(_stored(Sheet.model_validate(dict(sheet()) | changed), *addenda))


def _flat(page: str) -> str:
    return " ".join(page.split())


def test_the_page_tells_who_tested_what_when_and_how_it_ended() -> None:
    page = _page()
    assert page.splitlines()[0].split() == ["TEST", "SHEET", "TIC-204-20261201-094502-7f3a"]
    assert "TIC-204  juice outlet temperature" in page
    assert "2026-12-01 09:45:02 +0000, lasted 95 s" in page
    assert "R. Lind (typed, not authenticated)" in page
    assert "COMPLETE: three cycles agreed" in page
    assert "given back as found" in page


def test_instants_are_in_the_readers_zone_with_its_offset() -> None:
    page = sheet_page(_stored(sheet()), timezone(timedelta(hours=1)))
    assert "2026-12-01 10:45:02 +0100" in page


def test_the_loop_as_found_stands_in_percent_and_engineering_units() -> None:
    page = _page()
    assert "Setpoint        60 % = 72 degC" in page
    assert "PV              59.9 % = 71.88 degC" in page
    assert "RESET  0.8 repeats/min" in page
    assert "this test changed none" in page


def test_findings_carry_unit_and_interval_and_what_is_undefined_is_said() -> None:
    page = _page()
    assert "ultimate gain: 6.1 %OP/%PV, 95 % interval 5.6 to 6.3 %OP/%PV" in page
    assert "ultimate period: 13.9 s, bounds 13.1 to 14.4 s" in page
    assert "static gain: not determined" in page
    assert "why so wide: the controller's scan is not known" in page
    assert "1.1 % = 1.32 degC" in page  # half swing of 1.1 % of 120 degC


def test_a_test_without_conclusion_says_why() -> None:
    assert "No conclusion: no cycles agreed" in _page(
        findings=Findings(time_base="our clock", refusal="no cycles agreed")
    )


def test_proposals_name_their_source_and_the_recommended_one_or_why_there_is_none() -> None:
    page = _page()
    assert "some-rule-pi: a rule (recommended)" in page
    assert "after a paper, table 1" in page
    assert "settings: GAIN 2.1 %OP/%PV, RESET 1.25 repeats/min" in page
    assert "forecast, peak of |S|: 1.6\n" in page
    assert "not proposed: needs a static gain" in page


def test_costs_cautions_trips_and_operator_acts_are_on_the_page() -> None:
    page = _page()
    assert "late writes can't be excluded" in page
    assert "The valve will move." in page
    assert "trip: PV_RANGE: PV left its range" in page
    assert "operator: asked to finish (by R. Lind)" in page
    assert "watched: divert valve from 1 to 1 closed" in page


def test_a_write_shows_as_found_wanted_and_read_back_side_by_side() -> None:
    page = _page(change(sheet()))
    assert "Settings as left: WRITTEN, 2026-12-01 09:48:02 +0000" in page
    assert "WRITTEN: written; the controller holds the new settings, read back" in page
    row = next(line for line in page.splitlines() if line.split()[:1] == ["GAIN"] and line.count("%OP/%PV") == 3)
    assert row.split() == ["GAIN", "1.5", "%OP/%PV", "2.1", "%OP/%PV", "2.1", "%OP/%PV"]
    assert "a" * 64 in page
    assert "aaaa-aaaa" in page


def test_a_write_that_could_not_be_verified_never_looks_like_a_success() -> None:
    page = _flat(_page(change(sheet(), "UNVERIFIED", gain=None)))
    assert "UNVERIFIED: NOT VERIFIED; read the controller's own panel" in page
    assert "not known" in page
    assert "WRITTEN" not in page


def test_a_stranded_loop_is_loud_and_shows_the_values_to_enter() -> None:
    page = _page(outcome=Outcome(ended="STRANDED", code="LINK_LOST", text="no answer"))
    assert "STRANDED (LINK_LOST): no answer" in page
    assert "NOT CONFIRMED THAT THE LOOP WAS GIVEN BACK." in page
    assert "Output          42 %\n" in page


def test_a_test_that_never_began_says_that_the_loop_was_not_touched() -> None:
    ended = Outcome(ended="ABORTED", code="NOT_STEADY", text="PV drifts")
    page = _page(outcome=ended, as_found=None, writes=(), findings=None)
    assert "The loop was not touched." in page
    assert "given back" not in page


def test_a_stranded_loop_without_a_reading_is_never_called_untouched() -> None:
    page = _page(outcome=Outcome(ended="STRANDED", code=None, text="lost"), as_found=None, writes=())
    assert "not touched" not in page


def test_notes_and_recoveries_are_added_with_their_own_hashes() -> None:
    one = sheet()
    stored = _stored(one, note(one), recovery(one))
    page = sheet_page(stored)
    assert "valve packing was renewed" in page
    assert "STRANDED: NOT CONFIRMED; look at the controller" in page
    for entry in stored.entries:
        assert entry.hash in page


def test_what_is_not_known_is_left_out_or_said_but_never_guessed() -> None:
    one = sheet()
    assert one.as_found is not None
    bare = one.as_found.model_copy(update={"settings": (), "sp_pct": None, "sp_eu": None, "pv_eu": None})
    proposal = one.proposals[0].model_copy(update={"gain_factor": None, "rounding_pct": None})
    met = recovery(one).model_copy(update={"present": None})
    written = change(one).model_copy(update={"op_bump_pct": None})
    page = _page(met, written, as_found=bare, proposals=(proposal,), journal_digest=None)
    assert "Setpoint        not known" in page
    assert "PV              59.9 %\n" in page
    assert "Journal         not kept" in page
    for phrase in ("as it was met", "times the present one", "rounding changed", "the output moved", "None"):
        assert phrase not in page


def test_it_is_signed_by_three() -> None:
    signed = [line.split()[0] for line in _page().splitlines() if "date ...." in line]
    assert signed == ["Tested", "Witnessed", "Accepted"]


@given(st.text(max_size=300))
def test_no_text_breaks_the_width_or_steers_the_terminal(text: str) -> None:
    one = sheet()
    hostile = {
        "service": text,
        "unit": text,
        "costs": (text,),
        "outcome": Outcome(ended="ABORTED", code=text, text=text),
    }
    panel = tuple(field.model_copy(update={"label": text, "unit": text}) for field in change(one).wanted)
    page = sheet_page(
        _stored(
            Sheet.model_validate(dict(one) | hostile),
            note(one, text),
            change(one).model_copy(update={"as_found": panel}),
        )
    )
    assert all(len(line) <= WIDTH for line in page.split("\n"))
    assert all(sign.isprintable() or sign == "\n" for sign in page)


@pytest.mark.parametrize(
    ("number", "text"),
    [(0.0, "0"), (-0.0, "0"), (1234.5678, "1235"), (12345.678, "12346"), (9999.7, "10000"), (0.000123456, "0.0001235")],
)
def test_a_figure_is_rounded_to_what_a_person_can_use(number: float, text: str) -> None:
    assert shown(number) == text


def test_a_setting_is_shown_with_all_digits_that_single_precision_holds() -> None:
    assert exact(1.2000000476837158, "s") == "1.2 s"  # 1.2 as a single-precision number
    assert exact(123456.7) == "123456.7"
    assert exact(None, "s") == "not known"


def test_a_conclusion_without_interval_says_so() -> None:
    assert quantity(Quantity(name="k", label="k", unit="s", amount=1.0)) == "1 s, without an interval"
    assert findings().concluded[2].amount is None
    assert quantity(findings().concluded[2]) == "not determined"
