import math
from datetime import UTC, datetime, timedelta, timezone

import pytest
from pydantic import ValidationError

from autotune.errors import SheetError
from autotune.sheet.schema import SCHEMA_VERSION, Outcome, Quantity, Samples, Sheet, sheet_id
from autotune.sheet.store import from_text, to_text
from tests.sheet.sheets import change, note, recovery, samples, sheet


def test_an_id_tells_loop_and_time_and_can_be_said() -> None:
    started = datetime(2026, 12, 1, 10, 45, 2, tzinfo=timezone(timedelta(hours=1)))
    assert sheet_id("TIC-204", started, 0x17F3A) == "TIC-204-20261201-094502-7f3a"


def test_ids_of_one_loop_sort_by_time() -> None:
    instants = [datetime(2026, 12, 1, tzinfo=UTC) + timedelta(hours=7 * step) for step in range(200)]
    ids = [sheet_id("TIC-204", instant, 0xFFFF - step) for step, instant in enumerate(instants)]
    assert ids == sorted(ids)


def test_a_loop_name_that_no_file_could_have_still_gives_an_id() -> None:
    one = sheet()
    odd = sheet_id("../Kühler 3" * 20, one.started_utc, 1)
    assert Sheet.model_validate(dict(one) | {"sheet_id": odd}).sheet_id.startswith(".._K_hler_3.._K")


def test_every_kind_of_entry_comes_back_equal() -> None:
    one = sheet()
    for entry in (one, change(one), note(one), recovery(one)):
        assert from_text(to_text(entry), "here") == entry


@pytest.mark.parametrize("odd", [math.nan, math.inf, -math.inf])
def test_what_is_no_number_is_refused_anywhere(odd: float) -> None:
    with pytest.raises(ValidationError):
        Quantity(name="gain", label="GAIN", unit="", amount=odd)
    with pytest.raises(ValidationError):
        Samples.model_validate(dict(samples()) | {"pv_pct": (1.0, odd, 2.0)})


def test_columns_have_one_length_and_optional_ones_may_be_empty() -> None:
    assert samples().op_effect_ms == ()
    with pytest.raises(ValidationError, match="column pv_pct has 2 rows, t_s has 3"):
        Samples.model_validate(dict(samples()) | {"pv_pct": (1.0, 2.0)})
    with pytest.raises(ValidationError, match="column plc_clock_ms has 1 rows"):
        Samples.model_validate(dict(samples()) | {"plc_clock_ms": (1,)})
    with pytest.raises(ValidationError, match=r"column watch\.divert valve has 3 rows, t_s has 0"):
        Samples(watch=samples().watch)


def test_an_interval_out_of_order_is_refused() -> None:
    with pytest.raises(ValidationError, match="low <= amount <= high"):
        Quantity(name="k", label="k", unit="", amount=1.0, low=2.0, high=3.0)


def test_a_test_that_ends_before_it_starts_is_refused() -> None:
    one = sheet()
    with pytest.raises(ValidationError, match="a test ends after it started"):
        Sheet.model_validate(dict(one) | {"ended_utc": one.started_utc - timedelta(seconds=1)})


def test_a_time_without_zone_is_refused_and_a_local_one_is_kept_as_utc() -> None:
    one = sheet()
    with pytest.raises(ValidationError, match="timezone"):
        Sheet.model_validate(dict(one) | {"started_utc": one.started_utc.replace(tzinfo=None)})
    local = one.started_utc.astimezone(timezone(timedelta(hours=1)))
    assert to_text(Sheet.model_validate(dict(one) | {"started_utc": local})) == to_text(one)


def test_a_sheet_never_changes() -> None:
    with pytest.raises(ValidationError, match="frozen"):
        sheet().loop = "FIC-101"


def test_an_unknown_outcome_is_refused() -> None:
    with pytest.raises(ValidationError):
        Outcome.model_validate({"ended": "FINE", "code": None, "text": ""})


def test_a_sheet_of_a_newer_version_says_what_to_open_it_with() -> None:
    newer = to_text(sheet()).replace(f'"schema_version":{SCHEMA_VERSION}', f'"schema_version":{SCHEMA_VERSION + 1}')
    for text in (newer, newer.replace('"service":', '"service_of_tomorrow":')):
        with pytest.raises(SheetError, match=f"here: written in version {SCHEMA_VERSION + 1} .* newer autotune"):
            from_text(text, "here")


@pytest.mark.parametrize("text", ["", "[1]", '{"kind":"sheet","schema_version":1}', '{"schema_version":"x"}'])
def test_a_damaged_entry_is_told_with_its_place_and_the_remedy(text: str) -> None:
    with pytest.raises(SheetError, match=r"^here: damaged at .*autotune sheet verify"):
        from_text(text, "here")
