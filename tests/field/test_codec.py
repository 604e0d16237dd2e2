from dataclasses import replace
from math import inf, isfinite, nan, pi

import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from autotune.config.types import DataType, ModbusTag, Ne43, OpcUaTag, Order, RegisterTable
from autotune.errors import WriteForbidden
from autotune.field.codec import (
    INTEGER_RANGES,
    check_raw,
    from_words,
    held_type,
    judge_current,
    mask_bit,
    nearest_held,
    nearest_within,
    representable,
    to_eu,
    to_reading,
    to_words,
    width,
)
from autotune.field.link import RawValue, Reading
from autotune.loop.quality import Quality
from tests.field.loops import holding
from tests.field.reference import expected, inputs, octets

FLOATS = (DataType.REAL, DataType.LREAL)
ORDERS = {
    "ABCD": (Order.BIG, Order.BIG),
    "CDAB": (Order.LITTLE, Order.BIG),
    "BADC": (Order.BIG, Order.LITTLE),
    "DCBA": (Order.LITTLE, Order.LITTLE),
}


def words(written: str) -> tuple[int, ...]:
    held = octets(written)
    return tuple(int.from_bytes(held[at : at + 2], "big") for at in range(0, len(held), 2))


def raws(kind: DataType) -> st.SearchStrategy[RawValue]:
    if kind is DataType.BOOL:
        return st.booleans()
    if kind in INTEGER_RANGES:
        return st.integers(*INTEGER_RANGES[kind])
    return st.floats(allow_nan=False, allow_infinity=False, width=32 if kind is DataType.REAL else 64)


@st.composite
def tags(draw: st.DrawFn, kinds: tuple[DataType, ...] = tuple(DataType)) -> ModbusTag:
    return ModbusTag(
        RegisterTable.HOLDING,
        draw(st.integers(0, 65000)),
        draw(st.sampled_from(kinds)),
        word_order=draw(st.sampled_from(Order)),
        byte_order=draw(st.sampled_from(Order)),
    )


@pytest.mark.parametrize("order", ORDERS)
def test_a_real_lies_in_each_of_the_four_orders_as_ieee_754_says(order: str) -> None:
    """ST-FP."""
    word_order, byte_order = ORDERS[order]
    tag = replace(holding(0, DataType.REAL), word_order=word_order, byte_order=byte_order)
    held = words(expected("ST-FP")[order])
    assert to_words(tag, inputs("ST-FP")["v"]) == held
    assert from_words(tag, held) == pytest.approx(inputs("ST-FP")["v"], rel=2.0**-24)


@pytest.mark.parametrize(
    ("name", "kind", "raw"),
    [
        ("pi", DataType.REAL, pi),
        ("minus1", DataType.REAL, -1.0),
        ("hundred", DataType.REAL, 100.0),
        ("max", DataType.REAL, 3.4028234663852886e38),
        ("double_pi", DataType.LREAL, pi),
    ],
)
def test_known_numbers_are_coded_as_ieee_754_says(name: str, kind: DataType, raw: float) -> None:
    """ST-FP."""
    assert to_words(holding(0, kind), raw) == words(expected("ST-FP")[name])


def test_infinity_and_nan_do_not_come_in() -> None:
    """ST-FP gives the code of infinity."""
    tag = holding(0, DataType.REAL)
    assert from_words(tag, words(expected("ST-FP")["inf"])) is None
    assert from_words(tag, (0x7FC0, 0)) is None
    assert to_reading(tag, None) == Reading(None, Quality.BAD)


@pytest.mark.parametrize("kind", [*INTEGER_RANGES, *FLOATS])
@pytest.mark.parametrize("raw", [nan, inf, -inf])
def test_infinity_and_nan_do_not_go_out(kind: DataType, raw: float) -> None:
    with pytest.raises(WriteForbidden):
        to_words(holding(0, kind), raw)
    with pytest.raises(WriteForbidden):
        representable(holding(0, kind), raw)


@given(st.data())
def test_every_raw_value_survives_its_registers_in_every_type_and_order(data: st.DataObject) -> None:
    tag = data.draw(tags())
    raw = data.draw(raws(tag.type))
    held = to_words(tag, raw)
    assert len(held) == width(tag)
    assert all(0 <= word <= 0xFFFF for word in held)
    assert from_words(tag, held) == raw


@pytest.mark.parametrize("kind", INTEGER_RANGES)
def test_an_integer_type_holds_its_ends_and_nothing_beyond(kind: DataType) -> None:
    tag = holding(0, kind)
    low, high = INTEGER_RANGES[kind]
    assert from_words(tag, to_words(tag, low)) == low
    assert from_words(tag, to_words(tag, high)) == high
    for beyond in (low - 1, high + 1):
        with pytest.raises(WriteForbidden, match=kind.value):
            to_words(tag, beyond)
        with pytest.raises(WriteForbidden, match=kind.value):
            representable(tag, beyond * 2.0)


@pytest.mark.parametrize(
    ("kind", "word", "raw"),
    [
        (DataType.SINT, 0x007F, 127),
        (DataType.SINT, 0x00FF, -1),
        (DataType.SINT, 0xFFFF, -1),
        (DataType.SINT, 0xFF80, -128),
        (DataType.SINT, 0x0080, -128),
        (DataType.SINT, 0x0100, None),
        (DataType.SINT, 0xFF7F, None),
        (DataType.USINT, 0x00FF, 255),
        (DataType.USINT, 0x0100, None),
    ],
)
def test_eight_bits_in_a_register_are_read_with_or_without_extended_sign_and_nothing_else(
    kind: DataType, word: int, raw: int | None
) -> None:
    assert from_words(holding(0, kind), (word,)) == raw


@pytest.mark.parametrize(
    ("kind", "raw"),
    [
        (DataType.BOOL, 1),
        (DataType.INT, True),
        (DataType.INT, 1.0),
        (DataType.REAL, True),
        (DataType.REAL, 3.5e38),
        (DataType.LREAL, 10**400),
    ],
)
def test_a_raw_value_of_another_kind_or_size_is_refused(kind: DataType, raw: RawValue) -> None:
    with pytest.raises(WriteForbidden):
        check_raw(holding(0, kind), raw)


@given(st.integers(0, 15), st.sampled_from(Order), st.integers(0, 0xFFFF))
def test_a_bit_of_a_register_is_the_one_that_its_mask_names(bit: int, byte_order: Order, word: int) -> None:
    tag = replace(holding(0, DataType.UINT), bit=bit, byte_order=byte_order)
    mask = mask_bit(tag)
    assert held_type(tag) is DataType.BOOL
    assert width(tag) == 1
    assert mask.bit_count() == 1
    assert from_words(tag, (word,)) is (word & mask != 0)
    assert byte_order is Order.LITTLE or mask == 2**bit


def test_a_bit_is_never_written_as_a_whole_register_nor_a_register_as_a_bit() -> None:
    with pytest.raises(WriteForbidden, match="masked"):
        to_words(replace(holding(0, DataType.UINT), bit=3), True)
    with pytest.raises(ValueError, match="whole register"):
        mask_bit(holding(0, DataType.UINT))


def test_a_coil_a_discrete_input_and_a_bit_are_booleans_and_an_undeclared_node_is_a_double() -> None:
    assert held_type(ModbusTag(RegisterTable.COIL, 0, DataType.INT)) is DataType.BOOL
    assert held_type(ModbusTag(RegisterTable.DISCRETE, 0, DataType.BOOL)) is DataType.BOOL
    assert width(ModbusTag(RegisterTable.COIL, 0, DataType.REAL)) == 1
    assert held_type(OpcUaTag("ns=2;s=TIC-204.PV")) is DataType.LREAL
    assert held_type(OpcUaTag("ns=2;s=TIC-204.PV", DataType.REAL)) is DataType.REAL


@given(st.data())
def test_what_was_read_goes_back_as_the_identical_raw_value(data: st.DataObject) -> None:
    kinds = tuple(kind for kind in DataType if kind not in (DataType.LINT, DataType.ULINT, DataType.LREAL))
    tag = data.draw(tags(kinds))
    tag = replace(
        tag,
        scale=data.draw(st.floats(1e-4, 1e4)) * data.draw(st.sampled_from((1, -1))),
        offset=data.draw(st.floats(-1e4, 1e4)),
    )
    raw = data.draw(raws(tag.type))
    if tag.type is DataType.REAL:  # an offset must leave the last of 24 bits within the 53 of a double
        assume(raw == 0 or abs(tag.offset) <= 2.0**20 * abs(raw * tag.scale))
        assume(raw == 0 or abs(raw) > 1e-30)
    reading_eu = to_eu(tag, raw)
    again = representable(tag, reading_eu)
    if raw != 0 or tag.type is not DataType.REAL:
        assert again == raw
    assert to_eu(tag, again) == pytest.approx(reading_eu, rel=1e-12, abs=1e-12)


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_an_unscaled_double_goes_back_identically(raw: float) -> None:
    tag = holding(0, DataType.LREAL)
    assert representable(tag, to_eu(tag, raw)) == raw


@given(st.data())
def test_no_other_raw_value_lies_nearer_to_what_was_wanted(data: st.DataObject) -> None:
    tag = replace(
        holding(0, DataType.INT), scale=data.draw(st.floats(0.01, 10.0)), offset=data.draw(st.floats(-50, 50))
    )
    wanted_eu = data.draw(st.floats(-100.0, 100.0))
    chosen = representable(tag, wanted_eu)
    assert isinstance(chosen, int)
    miss = abs(to_eu(tag, chosen) - wanted_eu)
    for other in (chosen - 1, chosen + 1):
        assert miss <= abs(to_eu(tag, other) - wanted_eu) + 1e-9


def test_a_real_takes_the_nearest_single() -> None:
    tag = holding(0, DataType.REAL)
    chosen = representable(tag, 0.1)
    assert chosen == 13421773 * 2.0**-27  # the single next to 0.1, after IEEE 754
    assert from_words(tag, to_words(tag, 0.1)) == chosen


def test_a_boolean_is_zero_or_one_and_is_not_scaled() -> None:
    tag = replace(holding(0, DataType.BOOL), scale=10.0, offset=3.0)
    assert to_eu(tag, True) == 1.0
    assert representable(tag, 1.0) is True
    assert representable(tag, 0.0) is False
    with pytest.raises(WriteForbidden):
        representable(tag, 0.5)


@pytest.mark.parametrize("kind", FLOATS)
def test_a_number_beyond_the_type_is_refused(kind: DataType) -> None:
    tag = replace(holding(0, kind), scale=1e-300)
    with pytest.raises(WriteForbidden):
        representable(tag, 1e300)
    assert nearest_held(DataType.REAL, 1e39) is None
    with pytest.raises(WriteForbidden):
        representable(holding(0, DataType.REAL), 1e39)


@given(tags(), st.floats(allow_nan=False, allow_infinity=False))
def test_a_bound_is_moved_into_the_type(tag: ModbusTag, bound_eu: float) -> None:
    held = nearest_within(tag, bound_eu)
    check_raw(tag, held)
    try:
        exact = representable(tag, bound_eu)
    except WriteForbidden:
        return
    assert held == exact


@pytest.mark.parametrize(("raw_at_4_ma", "raw_at_20_ma"), [(4000.0, 20000.0), (0.0, 27648.0), (20000.0, 4000.0)])
def test_the_current_of_an_input_tells_its_quality(raw_at_4_ma: float, raw_at_20_ma: float) -> None:
    """ST-43: NAMUR NE 43 measures from 3.8 to 20.5 mA and signals failure at 3.6 mA and 21 mA."""
    ne43 = Ne43(raw_at_4_ma, raw_at_20_ma)

    def quality_at(pct: float) -> Quality:
        return judge_current(ne43, raw_at_4_ma + pct / 100.0 * (raw_at_20_ma - raw_at_4_ma))

    at_ma = dict(zip(inputs("ST-43")["mA"], expected("ST-43")["pct"], strict=True))
    assert [quality_at(at_ma[ma]) for ma in (3.8, 4, 12, 20, 20.5)] == [Quality.GOOD] * 5
    assert [quality_at(at_ma[ma]) for ma in (3.6, 21)] == [Quality.BAD] * 2
    assert [quality_at(pct) for pct in (at_ma[3.6] - 1, at_ma[21] + 1)] == [Quality.BAD] * 2
    assert [quality_at(pct) for pct in (at_ma[3.6] + 0.01, at_ma[3.8] - 0.01)] == [Quality.UNCERTAIN] * 2
    assert [quality_at(pct) for pct in (at_ma[20.5] + 0.01, at_ma[21] - 0.01)] == [Quality.UNCERTAIN] * 2


def test_a_failed_current_leaves_no_number_and_a_doubtful_one_keeps_it() -> None:
    tag = replace(holding(0, DataType.INT), ne43=Ne43(4000.0, 20000.0))
    assert to_reading(tag, 12000) == Reading(12000, Quality.GOOD)
    assert to_reading(tag, 3700) == Reading(3700, Quality.UNCERTAIN)
    assert to_reading(tag, 3500) == Reading(None, Quality.BAD)
    assert to_reading(OpcUaTag("ns=2;s=PV"), 1.5) == Reading(1.5, Quality.GOOD)


@given(st.data())
def test_a_reading_is_finite_or_bad(data: st.DataObject) -> None:
    tag = data.draw(tags())
    held = data.draw(st.lists(st.integers(0, 0xFFFF), min_size=width(tag), max_size=width(tag)))
    reading = to_reading(tag, from_words(tag, held))
    assert (reading.raw is None) is (reading.quality is Quality.BAD)
    assert reading.raw is None or isfinite(reading.raw)
