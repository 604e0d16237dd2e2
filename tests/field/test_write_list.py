from dataclasses import replace
from math import inf, nan

import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.config.types import (
    AddressRange,
    DataType,
    LoopConfig,
    ModbusTag,
    ModeCodes,
    OpcUaEndpoint,
    OpcUaTag,
    RegisterTable,
)
from autotune.errors import WriteForbidden
from autotune.field.codec import to_eu
from autotune.field.link import RawValue
from autotune.field.write_list import build_write_list
from autotune.loop.mode import ControlAction, LoopMode
from autotune.loop.settings import FieldRange, SignConvention
from tests.field.loops import ENDPOINT, GUARDED, LOOP_TAGS, PLAIN, at_endpoint, holding, with_tags, without_tags


def allows(loop: LoopConfig, name: str, raw: RawValue) -> bool:
    tag = loop.tag(name)
    assert tag is not None
    try:
        build_write_list(loop).check(name, tag, raw)
    except WriteForbidden:
        return False
    return True


def test_only_output_setpoint_mode_strobes_and_settings_are_on_the_list() -> None:
    """S10."""
    names = {permit.name for permit in build_write_list(GUARDED).permits}
    assert names == {
        *("op", "op_request", "sp", "mode", "holder_request", "heartbeat", "sequence"),
        *("gain", "integral", "derivative"),
    }


def test_the_operators_own_tags_and_what_the_plc_tells_are_never_on_the_list() -> None:
    """S10."""
    for name in ("pv", "enable", "stop", "holder", "guard_state", "guard_timeout_s", "boot_count", "test_active"):
        assert not allows(GUARDED, name, 1)


def test_settings_are_on_the_list_only_where_writing_them_is_allowed() -> None:
    loop = replace(PLAIN, is_writing_settings_allowed=False)
    assert {permit.name for permit in build_write_list(loop).permits} == {"op", "sp", "mode"}


@pytest.mark.parametrize("name", ["op", "op_request"])
@pytest.mark.parametrize(
    ("raw", "is_allowed"),
    [
        (20.0, True),
        (80.0, True),
        (50.0, True),
        (19.999, False),
        (80.001, False),
        (nan, False),
        (inf, False),
        (True, False),
    ],
)
def test_the_output_keeps_to_the_loops_own_limits(name: str, raw: float, is_allowed: bool) -> None:
    """S1, S10."""
    assert allows(GUARDED, name, raw) is is_allowed


def test_a_number_is_judged_as_the_register_will_hold_it() -> None:
    assert allows(PLAIN, "op", 80.0 + 1e-9)  # the single next to it is 80
    assert not allows(PLAIN, "op", 80.0 + 1e-5)


@pytest.mark.parametrize(
    ("raw", "is_allowed"), [(0.0, True), (150.0, True), (-0.1, False), (150.1, False), (nan, False)]
)
def test_the_setpoint_keeps_to_its_span(raw: float, is_allowed: bool) -> None:
    assert allows(PLAIN, "sp", raw) is is_allowed


@pytest.mark.parametrize(
    ("raw", "is_allowed"), [(0, True), (1, True), (2, False), (-1, False), (0.0, False), (True, False)]
)
def test_a_mode_is_one_of_the_codes_to_write_even_where_more_can_be_read(raw: RawValue, is_allowed: bool) -> None:
    assert allows(PLAIN, "mode", raw) is is_allowed


def test_a_mode_may_lie_in_a_coil() -> None:
    loop = with_tags(PLAIN, {"mode": ModbusTag(RegisterTable.COIL, 3, DataType.BOOL)})
    assert allows(loop, "mode", True)
    assert not allows(loop, "mode", 1)
    only_manual = replace(loop, mode_codes=ModeCodes(read=(), write=((LoopMode.MAN, 0),)))
    assert not allows(only_manual, "mode", True)


@pytest.mark.parametrize(
    ("name", "raw", "is_allowed"),
    [
        ("holder_request", 0, True),
        ("holder_request", 2**32 - 1, True),
        ("holder_request", 2**32, False),
        ("heartbeat", 65535, True),
        ("heartbeat", 65536, False),
        ("heartbeat", -1, False),
        ("sequence", 0, True),
        ("sequence", 65536, False),
    ],
)
def test_strobes_are_unsigned_numbers_of_their_size(name: str, raw: int, is_allowed: bool) -> None:
    assert allows(GUARDED, name, raw) is is_allowed


@pytest.mark.parametrize(
    ("name", "raw", "is_allowed"),
    [
        ("gain", 0.2, True),
        ("gain", 20.0, True),
        ("gain", 20.01, False),
        ("gain", 0.0, False),
        ("gain", -2.0, False),
        ("integral", 900.0, True),
        ("integral", 0.0, True),  # off
        ("integral", 0.5, False),
        ("integral", 901.0, False),
        ("derivative", 0.0, True),
        ("derivative", nan, False),
    ],
)
def test_a_setting_keeps_to_its_fields_range_and_its_off_value(name: str, raw: float, is_allowed: bool) -> None:
    assert allows(PLAIN, name, raw) is is_allowed


def test_a_direct_acting_block_with_signed_gain_takes_negative_gains_only() -> None:
    signed = replace(PLAIN, block=replace(PLAIN.block, sign=SignConvention.SIGNED_GAIN), action=ControlAction.DIRECT)
    assert allows(signed, "gain", -2.0)
    assert not allows(signed, "gain", 2.0)
    assert not allows(signed, "gain", -20.01)


def test_a_block_without_an_off_value_has_only_its_range() -> None:
    assert not allows(replace(PLAIN, block=replace(PLAIN.block, integral_off=None)), "integral", 0.0)


def test_a_range_wider_than_the_type_ends_with_the_type() -> None:
    wide = replace(PLAIN, block=replace(PLAIN.block, gain_range=FieldRange(0.0, 1e6)))
    loop = with_tags(wide, {"gain": replace(holding(40, DataType.INT), scale=0.01)})
    assert allows(loop, "gain", 32767)
    assert not allows(loop, "gain", 32768)
    assert not allows(loop, "gain", -1)


@given(
    st.floats(0.0, 40.0),
    st.floats(60.0, 100.0),
    st.sampled_from((DataType.INT, DataType.UINT, DataType.REAL)),
    st.integers(0, 27648),
    st.booleans(),
)
def test_no_permitted_output_lies_beyond_its_limits_by_more_than_half_a_count(
    low_pct: float, high_pct: float, kind: DataType, counts: int, is_inverted: bool
) -> None:
    """S1."""
    scale = 100.0 / 27648
    tag = replace(holding(4, kind), scale=-scale if is_inverted else scale, offset=100.0 if is_inverted else 0.0)
    limits = replace(PLAIN.limits, op_low_pct=low_pct, op_high_pct=high_pct)
    loop = with_tags(replace(PLAIN, limits=limits), {"op": tag})
    op_pct = to_eu(tag, counts)
    resolution_pct = scale if kind is not DataType.REAL else 1e-4
    if allows(loop, "op", counts):
        assert low_pct - 0.51 * resolution_pct <= op_pct <= high_pct + 0.51 * resolution_pct
    else:
        assert not low_pct + 1e-9 <= op_pct <= high_pct - 1e-9


@pytest.mark.parametrize(("first", "last"), [(5, 5), (0, 4), (4, 5), (0, 65535)])
def test_a_range_that_is_never_written_wins_over_every_permit(first: int, last: int) -> None:
    """S10."""
    barred = (AddressRange(RegisterTable.HOLDING, first, last),)
    loop = at_endpoint(PLAIN, replace(ENDPOINT, never_written=barred))
    with pytest.raises(WriteForbidden, match=f"holding {first} .. {last} .* never written"):
        build_write_list(loop).check("op", LOOP_TAGS["op"], 50.0)


@pytest.mark.parametrize(
    "beside",
    [
        AddressRange(RegisterTable.HOLDING, 6, 9),
        AddressRange(RegisterTable.HOLDING, 0, 3),
        AddressRange(RegisterTable.COIL, 4, 5),
    ],
)
def test_a_range_beside_a_tag_or_in_another_table_does_not_bar_it(beside: AddressRange) -> None:
    assert allows(at_endpoint(PLAIN, replace(ENDPOINT, never_written=(beside,))), "op", 50.0)


def test_the_same_name_at_another_address_is_refused() -> None:
    """S10."""
    with pytest.raises(WriteForbidden, match="another place"):
        build_write_list(PLAIN).check("op", holding(5, DataType.REAL), 50.0)


def test_a_table_that_can_only_be_read_is_never_on_the_list() -> None:
    for table in (RegisterTable.INPUT, RegisterTable.DISCRETE):
        loop = with_tags(PLAIN, {"op": ModbusTag(table, 4, DataType.REAL)})
        assert not allows(loop, "op", 50.0)


def test_a_loop_without_a_tag_has_no_permit_for_it() -> None:
    loop = without_tags(PLAIN, "derivative", "sp", "mode")
    assert {permit.name for permit in build_write_list(loop).permits} == {"op", "gain", "integral"}


def test_a_refusal_names_loop_tag_and_rule() -> None:
    with pytest.raises(WriteForbidden, match=r"TIC-204: 'op' may be 20\.0 \.\. 80\.0 raw, not 81\.0"):
        build_write_list(PLAIN).check("op", LOOP_TAGS["op"], 81.0)
    with pytest.raises(WriteForbidden, match="'mode' may be 0 or 1 raw, not 7"):
        build_write_list(PLAIN).check("mode", LOOP_TAGS["mode"], 7)


def test_the_list_holds_for_opc_ua_nodes_too() -> None:
    node = OpcUaTag("ns=2;s=TIC-204.OP", DataType.REAL)
    controller = replace(PLAIN.controller, endpoint=OpcUaEndpoint("opc.tcp://127.0.0.1:4840"))
    loop = with_tags(replace(PLAIN, controller=controller), {"op": node})
    assert allows(loop, "op", 80.0)
    assert not allows(loop, "op", 80.5)
    with pytest.raises(WriteForbidden, match="another place"):
        build_write_list(loop).check("op", OpcUaTag("ns=2;s=TIC-205.OP", DataType.REAL), 50.0)
