import csv
import hashlib
import io
import json
from pathlib import Path

import pytest

from autotune.errors import SheetError
from autotune.sheet.export import from_json, samples_to_csv, to_json, writes_to_csv
from autotune.sheet.schema import Sheet
from autotune.sheet.store import MemoryStore, StoredSheet
from tests.sheet.sheets import change, note, recovery, sheet

STORED = Path(__file__).parent / "stored"


def _stored(one: Sheet | None = None) -> StoredSheet:
    store, one = MemoryStore(), one or sheet()
    store.append(sheet("FIC-101"))
    store.append(one)
    for addendum in (change(one), note(one), recovery(one)):
        store.append_addendum(addendum)
    return store.get(one.sheet_id)


def _rows(text: str) -> tuple[list[str], list[dict[str, str]]]:
    about = [line for line in text.splitlines() if line.startswith("# ")]
    return about, list(csv.DictReader(io.StringIO("\n".join(text.splitlines()[len(about) :]))))


def test_json_comes_back_as_the_same_sheet_with_all_that_was_added() -> None:
    stored = _stored()
    assert from_json(to_json(stored)) == stored


def test_anybody_can_check_the_hashes_of_exported_json() -> None:
    stored = _stored()
    for link in json.loads(to_json(stored))["entries"]:
        text = json.dumps(link["entry"], sort_keys=True, separators=(",", ":"), ensure_ascii=False)
        assert link["hash"] == hashlib.sha256((link["previous"] + text).encode()).hexdigest()


def test_exported_json_that_was_edited_is_refused() -> None:
    edited = to_json(_stored()).replace('"amount": 1.5', '"amount": 2.5')
    with pytest.raises(SheetError, match="changed after it was written"):
        from_json(edited)


@pytest.mark.parametrize("text", ["", "{}", "[]", '{"entries": []}', '{"entries": [{"n": 1}]}', '{"entries": 3}'])
def test_another_file_is_refused_with_the_remedy(text: str) -> None:
    with pytest.raises(SheetError, match="export it again"):
        from_json(text)


def test_a_sheet_stored_in_version_1_still_opens() -> None:
    # The file was written once and is never written again: it stands for every sheet kept on a site.
    stored = from_json((STORED / "sheet-v1.json").read_text(encoding="utf-8"))
    assert stored.hash == "370f053897a4c58178c1c58c64f6852986e6dbe2203c420fe2730dd41a6dd513"
    assert stored.sheet.outcome.ended == "COMPLETE"
    assert stored.sheet.as_found is not None
    assert stored.sheet.as_found.settings[1].amount == 0.8
    assert stored.sheet.samples.pv_pct == (59.9, None, 60.1)
    assert [addendum.kind for addendum in stored.addenda] == ["write", "note", "recovery"]


def test_samples_are_a_table_with_units_in_the_titles_and_empty_cells_for_unknown() -> None:
    about, rows = _rows(samples_to_csv(_stored()))
    assert about[0] == "# samples of the loop test TIC-204-20261201-094502-7f3a"
    assert any("percent of span; PV span 0 .. 120 degC" in line for line in about)
    assert [row["pv_pct"] for row in rows] == ["59.9", "", "60.1"]
    assert [row["pv_eu [degC]"] for row in rows] == ["71.88", "", "72.12"]  # 0.599 x 120, 0.601 x 120
    assert rows[0]["plc_clock_ms"] == "4294967290"
    assert rows[2]["watch.divert valve_eu"] == ""


def test_a_column_that_the_controller_lacks_is_left_out() -> None:
    _, rows = _rows(samples_to_csv(_stored()))
    assert "op_effect_ms" not in rows[0]
    assert "plc_clock_ms" in rows[0]


def test_every_write_is_a_row_with_the_raw_number_as_sent() -> None:
    _, rows = _rows(writes_to_csv(_stored()))
    assert [(row["tag"], row["raw"], row["outcome"]) for row in rows] == [("op", "4700", "applied")]


def test_no_text_becomes_a_formula_or_leaves_the_comment() -> None:
    hostile = Sheet.model_validate(dict(sheet()) | {"service": "juice\n=cmd()"})
    about, rows = _rows(writes_to_csv(_stored(hostile)))
    assert rows[0]["detail"] == "'=1+1"
    assert about[1] == "# loop TIC-204 (juice =cmd()), unit pasteuriser 1, controller 127.0.0.1:5020"
