"""Status codes by the standard's own numbers, and what each means for a reading and for a write."""

import pytest
from asyncua.ua.status_codes import StatusCodes
from hypothesis import given
from hypothesis import strategies as st

from autotune.field.opc_ua.status import ends_the_session, in_words, is_surely_undone, is_written, to_quality
from autotune.loop.quality import Quality
from tests.field.reference import expected, inputs

CODES: dict[str, int] = {name: int(code, 16) for name, code in expected("ST-UA1").items()}
"""OPC 10000-6, StatusCode.csv."""

AS_DATA_VALUE, LIMITED_LOW, LIMITED_HIGH, CONSTANT = 0x0400, 0x0100, 0x0200, 0x0300
SEMANTICS_CHANGED, STRUCTURE_CHANGED = 0x4000, 0x8000


def wanted(name: str) -> Quality:
    if name.startswith("Bad"):
        return Quality.BAD
    if name.startswith("Uncertain"):
        return Quality.UNCERTAIN
    return {"GoodLocalOverride": Quality.FORCED, "GoodClamped": Quality.CLAMPED}.get(name, Quality.GOOD)


@pytest.mark.parametrize("name", CODES)
def test_every_code_of_the_standard_becomes_its_quality(name: str) -> None:
    """ST-UA1."""
    assert to_quality(CODES[name]) is wanted(name)


@pytest.mark.parametrize("name", CODES)
def test_the_library_knows_the_standard_s_numbers(name: str) -> None:
    """ST-UA1."""
    assert getattr(StatusCodes, name) == CODES[name]


@pytest.mark.parametrize("name", CODES)
@given(bits=st.integers(0, 0x3FFF))
def test_the_lower_half_never_makes_a_quality_better(name: str, bits: int) -> None:
    """ST-UA2: the code is what lies under FFFF0000h."""
    quality = to_quality(CODES[name] | bits)
    assert quality is wanted(name) or (wanted(name) is Quality.GOOD and quality is Quality.CLAMPED)


def test_flag_bits_are_not_part_of_the_code() -> None:
    """ST-UA2."""
    code, outside = int(inputs("ST-UA2")["code"], 16), expected("ST-UA2")
    assert to_quality(code) is Quality.BAD
    assert in_words(code).startswith("BadNoCommunication")
    assert CODES["BadNoCommunication"] == int(outside["base"], 16)


@pytest.mark.parametrize("limit", [LIMITED_LOW, LIMITED_HIGH, CONSTANT])
def test_a_limited_reading_is_clamped_but_only_where_the_bits_mean_that(limit: int) -> None:
    """ST-UA2: limit bits 0300h hold with the info type DataValue, 0400h."""
    assert to_quality(AS_DATA_VALUE | limit) is Quality.CLAMPED
    assert to_quality(limit) is Quality.GOOD
    assert to_quality(CODES["GoodLocalOverride"] | AS_DATA_VALUE | limit) is Quality.FORCED


@pytest.mark.parametrize("flag", [SEMANTICS_CHANGED, STRUCTURE_CHANGED])
def test_a_reading_whose_meaning_changed_is_not_good(flag: int) -> None:
    """ST-UA2."""
    assert to_quality(flag) is Quality.UNCERTAIN
    assert "its meaning changed" in in_words(flag)


@given(st.integers(0xC0000000, 0xFFFFFFFF))
def test_what_the_standard_reserves_is_bad(code: int) -> None:
    """ST-UA1: severity 11 is reserved."""
    assert to_quality(code) is Quality.BAD


@given(st.integers(0, 0xFFFFFFFF))
def test_only_good_severity_is_ever_good(code: int) -> None:
    if to_quality(code) is Quality.GOOD:
        assert code >> 30 == 0


def test_a_status_is_told_by_name_number_and_meaning() -> None:
    assert in_words(CODES["BadOutOfRange"]).startswith("BadOutOfRange (803C0000h): The value was out of range")
    assert "limited" in in_words(AS_DATA_VALUE | LIMITED_LOW)
    assert "80FE0000h" in in_words(0x80FE0000)


@pytest.mark.parametrize(
    ("name", "surely_undone"),
    [
        ("BadNodeIdUnknown", True),
        ("BadNotWritable", True),
        ("BadOutOfRange", True),
        ("BadUserAccessDenied", True),
        ("BadTypeMismatch", True),
        ("BadWriteNotSupported", True),
        ("BadTimeout", False),
        ("BadNoCommunication", False),
        ("BadNotConnected", False),
        ("BadDeviceFailure", False),
        ("UncertainLastUsableValue", False),
        ("GoodClamped", False),
    ],
)
def test_a_refused_write_is_only_what_surely_changed_nothing(name: str, surely_undone: bool) -> None:
    assert is_surely_undone(CODES[name]) is surely_undone
    assert not is_written(CODES[name])


def test_a_write_is_done_only_when_it_is_done_as_asked() -> None:
    assert is_written(CODES["Good"])
    assert is_written(CODES["GoodOverload"])
    assert not is_written(CODES["GoodLocalOverride"])  # somebody holds another value
    assert not is_written(StatusCodes.GoodCompletesAsynchronously)  # later, perhaps


def test_some_faults_need_a_fresh_connection() -> None:
    assert ends_the_session(StatusCodes.BadSessionIdInvalid)
    assert ends_the_session(StatusCodes.BadSecureChannelIdInvalid)
    assert not ends_the_session(StatusCodes.BadTooManyOperations)
