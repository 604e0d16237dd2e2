"""Variants and raw values: exactly the node's type goes out, and nothing that isn't one number comes in."""

import struct
from math import inf, isfinite, nan

import pytest
from asyncua import ua
from asyncua.common.utils import Buffer
from asyncua.ua.status_codes import StatusCodes
from asyncua.ua.ua_binary import struct_from_binary, struct_to_binary
from hypothesis import given
from hypothesis import strategies as st

from autotune.config.types import DataType
from autotune.errors import WriteForbidden
from autotune.field.link import RawValue
from autotune.field.opc_ua.variants import HELD_TYPES, as_held, held_type_of, to_answer, to_reading
from autotune.loop.quality import Quality

# OPC 10000-6, 5.1.2: the built-in types' numbers, and the bits of each (OPC 10000-3, 8).
NUMBERS = {1: ("BOOL", 8), 2: ("SINT", 8), 3: ("USINT", 8), 4: ("INT", 16), 5: ("UINT", 16), 6: ("DINT", 32)}
NUMBERS |= {7: ("UDINT", 32), 8: ("LINT", 64), 9: ("ULINT", 64), 10: ("REAL", 32), 11: ("LREAL", 64)}
WHOLE = [kind for kind in DataType if kind.is_whole and kind is not DataType.BOOL]
RANGES = {
    DataType[name]: (-(2 ** (bits - 1)), 2 ** (bits - 1) - 1) if number in (2, 4, 6, 8) else (0, 2**bits - 1)
    for number, (name, bits) in NUMBERS.items()
    if number not in (1, 10, 11)
}


def answer(content: object, kind: ua.VariantType | None = None, code: int = 0) -> ua.DataValue:
    return ua.DataValue(ua.Variant(content, kind) if kind else ua.Variant(content), ua.StatusCode(ua.UInt32(code)))


def test_every_number_of_the_standard_has_its_type() -> None:
    assert {variant.value: held.value for variant, held in HELD_TYPES.items()} == {
        number: name for number, (name, _) in NUMBERS.items()
    }


@pytest.mark.parametrize("held", list(DataType))
def test_a_number_goes_out_bare_in_the_node_s_own_type(held: DataType) -> None:
    sent = to_answer(held, 1)
    assert HELD_TYPES[sent.Value.VariantType] is held  # type: ignore[union-attr]  # it has one
    assert (sent.SourceTimestamp, sent.ServerTimestamp) == (None, None)
    octets = struct_to_binary(sent)
    assert octets[0] == 0x01  # OPC 10000-6, 5.2.2.17: only the value is there: no status, no stamps


@pytest.mark.parametrize("held", WHOLE)
def test_whole_numbers_go_out_to_the_ends_of_their_type_and_not_beyond(held: DataType) -> None:
    low, high = RANGES[held]
    assert (as_held(held, low), as_held(held, high), as_held(held, float(low))) == (low, high, low)
    for wrong in (low - 1, high + 1, nan, inf, 0.5, True):
        with pytest.raises(WriteForbidden):
            as_held(held, wrong)


def test_a_fraction_in_a_whole_number_says_what_to_add_to_the_file() -> None:
    with pytest.raises(WriteForbidden, match='add type = "INT" to the tag'):
        as_held(DataType.INT, 41.5)


@pytest.mark.parametrize("held", [DataType.REAL, DataType.LREAL])
@pytest.mark.parametrize("wrong", [nan, inf, -inf, True])
def test_no_real_is_no_finite_number(held: DataType, wrong: RawValue) -> None:
    with pytest.raises(WriteForbidden):
        as_held(held, wrong)


def test_what_a_single_cannot_hold_is_not_sent() -> None:
    greatest = (2 - 2**-23) * 2.0**127  # IEEE 754
    assert as_held(DataType.REAL, greatest) == greatest
    with pytest.raises(WriteForbidden):
        as_held(DataType.REAL, 1e39)
    assert as_held(DataType.LREAL, 1e39) == 1e39


@pytest.mark.parametrize(("raw", "held"), [(0, False), (1, True), (1.0, True), (True, True)])
def test_a_boolean_takes_0_and_1(raw: RawValue, held: bool) -> None:
    assert as_held(DataType.BOOL, raw) is held


@pytest.mark.parametrize("wrong", [2, -1, 0.5, nan])
def test_a_boolean_takes_nothing_else(wrong: RawValue) -> None:
    with pytest.raises(WriteForbidden):
        as_held(DataType.BOOL, wrong)


@given(st.floats(width=32, allow_nan=False, allow_infinity=False))
def test_a_single_comes_back_from_the_wire_bit_for_bit(number: float) -> None:
    sent = struct_to_binary(to_answer(DataType.REAL, number))
    assert sent[-4:] == struct.pack("<f", number)
    back = struct_from_binary(ua.DataValue, Buffer(sent))
    assert to_reading(back).raw == number


@pytest.mark.parametrize(
    ("content", "kind", "reason"),
    [
        ([1.0, 2.0], ua.VariantType.Float, "a list of Float"),
        ([], ua.VariantType.Float, "a list of Float"),
        ("78.0", ua.VariantType.String, "a String, which is no number"),
        (None, None, "no value yet"),
        (nan, ua.VariantType.Double, "no number"),
        (inf, ua.VariantType.Float, "no number"),
        (ua.LocalizedText("open"), ua.VariantType.LocalizedText, "a LocalizedText"),
    ],
)
def test_what_is_not_one_number_is_bad_and_says_why(content: object, kind: ua.VariantType | None, reason: str) -> None:
    reading = to_reading(answer(content, kind))
    assert (reading.raw, reading.quality) == (None, Quality.BAD)
    assert reason in reading.reason


def test_an_enumeration_reads_as_its_number() -> None:
    reading = to_reading(answer(2, ua.VariantType.Int32))
    assert (reading.raw, reading.quality, reading.reason) == (2, Quality.GOOD, "")


@pytest.mark.parametrize(
    ("code", "quality", "has_number"),
    [
        (StatusCodes.Good, Quality.GOOD, True),
        (StatusCodes.GoodLocalOverride, Quality.FORCED, True),
        (StatusCodes.GoodClamped, Quality.CLAMPED, True),
        (StatusCodes.UncertainLastUsableValue, Quality.UNCERTAIN, True),
        (StatusCodes.BadSensorFailure, Quality.BAD, False),
    ],
)
def test_a_status_that_is_not_good_says_its_name(code: int, quality: Quality, has_number: bool) -> None:
    reading = to_reading(answer(78.0, ua.VariantType.Float, code))
    assert reading.quality is quality
    assert (reading.raw == 78.0) is has_number
    assert (reading.reason == "") is (quality is Quality.GOOD)


@given(st.integers(0, 0xFFFFFFFF), st.floats())
def test_no_reading_ever_carries_what_is_no_number(code: int, number: float) -> None:
    reading = to_reading(answer(number, ua.VariantType.Double, code))
    assert reading.raw is None or isfinite(reading.raw)
    assert (reading.raw is None) == (reading.quality is Quality.BAD)


def test_a_matrix_has_no_type_of_a_number() -> None:
    assert held_type_of(answer([[1, 2], [3, 4]], ua.VariantType.Int32)) is None
