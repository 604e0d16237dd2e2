from collections.abc import Mapping
from dataclasses import replace
from math import inf, nan

import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.config.types import DataType, GuardCodes, LoopConfig, ModbusTag, RegisterTable
from autotune.errors import WriteForbidden
from autotune.experiment.commands import ClaimLoop, DriveOutput, ReleaseLoop, SetMode, SetSetpoint
from autotune.field.codec import from_words, to_words
from autotune.field.link import RawValue, Reading, ReadReport
from autotune.field.modbus.requests import plan_writes
from autotune.field.translate import (
    WireCommand,
    field_to_raw,
    held_fields,
    sample_tags,
    settings_tags,
    settings_to_raw,
    to_block_fields,
    to_eu,
    to_raw,
    to_sample,
)
from autotune.field.write_list import build_write_list
from autotune.loop.limits import WatchLimit
from autotune.loop.mode import LoopMode
from autotune.loop.quality import Quality
from autotune.loop.sample import GuardState, GuardView, Stamp, WatchReading
from autotune.loop.settings import BlockFields
from tests.field.loops import ENDPOINT, GUARDED, PLAIN, holding, with_tags, without_tags

SENT = Stamp(100.0, 100.05)
WATCHED = replace(
    with_tags(
        GUARDED,
        {
            "watch.divert": ModbusTag(RegisterTable.DISCRETE, 10, DataType.BOOL),
            "watch.steam": replace(holding(51, DataType.UINT), scale=0.1),
        },
    ),
    watch=(WatchLimit("divert", 1.0, 1.0), WatchLimit("steam", 2.0, 6.0), WatchLimit("pump", 1.0, 1.0)),
)

AT_REST: dict[str, RawValue] = {
    "pv": 75.0,
    "sp": 72.0,
    "op": 40.0,
    "mode": 1,
    "plc_clock_ms": 4_294_967_290,
    "boot_count": 3,
    "guard_state": 1,
    "holder": 4711,
    "heartbeat_echo": 12,
    "enable": 1,
    "stop": 0,
    "guard_alarm": 0,
    "guard_timeout_s": 2.0,
    "op_effect_count": 5,
    "op_effect_ms": 4_294_967_000,
    "watch.divert": True,
    "watch.steam": 41,
}


def report(changes: Mapping[str, Reading | RawValue] | None = None, *, without: tuple[str, ...] = ()) -> ReadReport:
    readings = {
        name: entry if isinstance(entry, Reading) else Reading(entry, Quality.GOOD)
        for name, entry in {**AT_REST, **(changes or {})}.items()
        if name not in without
    }
    return ReadReport(readings, SENT)


def test_a_sample_asks_for_what_the_loop_has_and_never_for_our_own_strobes() -> None:
    assert sample_tags(PLAIN) == ("pv", "sp", "op", "mode", "plc_clock_ms", "boot_count")
    assert set(sample_tags(WATCHED)) == set(AT_REST)
    assert sample_tags(without_tags(PLAIN, "plc_clock_ms", "boot_count", "sp")) == ("pv", "op", "mode")


def test_a_sample_is_in_percent_of_span_with_mode_guard_and_watch() -> None:
    sample = to_sample(WATCHED, report())
    assert (sample.pv_pct, sample.sp_pct, sample.op_pct) == (50.0, 48.0, 40.0)
    assert (sample.pv_quality, sample.op_quality) == (Quality.GOOD, Quality.GOOD)
    assert sample.mode is LoopMode.AUTO
    assert sample.plc_clock_ms == 4_294_967_290
    assert sample.boot_count == 3
    assert sample.guard == GuardView(
        state=GuardState.ARMED,
        holder=4711,
        heartbeat_echo=12,
        is_enabled=True,
        is_stop_pressed=False,
        is_alarm=False,
        timeout_s=2.0,
        op_effect_count=5,
        op_effect_ms=4_294_967_000,
    )
    assert sample.watch == (
        WatchReading("divert", 1.0, Quality.GOOD),
        WatchReading("steam", 41 * 0.1, Quality.GOOD),
        WatchReading("pump", None, Quality.BAD),
    )


def test_pv_was_sampled_between_the_request_less_scan_and_io_time_and_the_reply() -> None:
    sample = to_sample(PLAIN, report())
    assert sample.t_s == SENT.latest_s
    assert sample.taken == Stamp(SENT.earliest_s - 0.1 - 0.02, SENT.latest_s)
    without_scan = replace(PLAIN, controller=replace(PLAIN.controller, plc_scan_s=None, io_time_s=0.0))
    assert to_sample(without_scan, report()).taken == SENT


@pytest.mark.parametrize(
    ("pv_eu", "quality"),
    [
        (0.0, Quality.SUSPECT),
        (150.0, Quality.SUSPECT),
        (149.9999999, Quality.SUSPECT),
        (-3.0, Quality.SUSPECT),
        (155.0, Quality.SUSPECT),
        (0.001, Quality.GOOD),
        (149.99, Quality.GOOD),
    ],
)
def test_a_pv_clipped_at_an_end_of_its_span_is_suspect(pv_eu: float, quality: Quality) -> None:
    assert to_sample(PLAIN, report({"pv": pv_eu})).pv_quality is quality


def test_a_worse_quality_is_not_improved_to_suspect() -> None:
    assert to_sample(PLAIN, report({"pv": Reading(150.0, Quality.UNCERTAIN)})).pv_quality is Quality.UNCERTAIN


def test_what_can_not_be_read_is_none_and_bad() -> None:
    bad = Reading(None, Quality.BAD)
    lost = dict.fromkeys(AT_REST, bad)
    for sample in (to_sample(WATCHED, report(lost)), to_sample(WATCHED, report(without=tuple(AT_REST)))):
        assert (sample.pv_pct, sample.sp_pct, sample.op_pct) == (None, None, None)
        assert (sample.pv_quality, sample.op_quality) == (Quality.BAD, Quality.BAD)
        assert sample.mode is LoopMode.NOT_KNOWN
        assert (sample.plc_clock_ms, sample.boot_count) == (None, None)
        assert sample.guard == GuardView(GuardState.NOT_KNOWN)
        assert {watch.quality for watch in sample.watch} == {Quality.BAD}


def test_a_scale_that_overflows_leaves_no_number() -> None:
    loop = with_tags(PLAIN, {"pv": replace(holding(0, DataType.LREAL), scale=1e300)})
    sample = to_sample(loop, report({"pv": 1e300}))
    assert (sample.pv_pct, sample.pv_quality) == (None, Quality.BAD)


def test_a_loop_without_guard_has_no_guard_view() -> None:
    assert to_sample(PLAIN, report()).guard is None


@pytest.mark.parametrize(
    ("code", "state"),
    [(10, GuardState.IDLE), (11, GuardState.ARMED), (12, GuardState.GAVE_BACK), (0, GuardState.NOT_KNOWN)],
)
def test_guard_states_follow_the_declared_codes(code: int, state: GuardState) -> None:
    loop = replace(GUARDED, guard_codes=GuardCodes(idle=10, armed=11, gave_back=12))
    guard = to_sample(loop, report({"guard_state": code})).guard
    assert guard is not None
    assert guard.state is state


@pytest.mark.parametrize(("code", "mode"), [(0, LoopMode.MAN), (2, LoopMode.CAS), (9, LoopMode.NOT_KNOWN)])
def test_a_mode_code_that_is_not_listed_is_not_known(code: int, mode: LoopMode) -> None:
    assert to_sample(PLAIN, report({"mode": code})).mode is mode


def test_a_mode_in_a_coil_reads_as_zero_or_one() -> None:
    loop = with_tags(PLAIN, {"mode": ModbusTag(RegisterTable.COIL, 0, DataType.BOOL)})
    assert to_sample(loop, report({"mode": True})).mode is LoopMode.AUTO


def test_a_clock_without_unsigned_type_counts_on_modulo_2_32() -> None:
    assert to_sample(PLAIN, report({"plc_clock_ms": -6})).plc_clock_ms == 2**32 - 6


@pytest.mark.parametrize(
    ("loop", "command", "raws"),
    [
        (GUARDED, ClaimLoop(4711, 1, 7), {"sequence": 7, "holder_request": 4711, "heartbeat": 1}),
        (GUARDED, ReleaseLoop(), {"holder_request": 0}),
        (PLAIN, SetMode(LoopMode.MAN), {"mode": 0}),
        (PLAIN, SetMode(LoopMode.AUTO), {"mode": 1}),
        (PLAIN, SetSetpoint(48.0), {"sp": 72.0}),
        (PLAIN, DriveOutput(45.0, 4711, 2, 3), {"op": 45.0}),
        (
            GUARDED,
            DriveOutput(45.0, 4711, 2, 3),
            {"holder_request": 4711, "heartbeat": 2, "op_request": 45.0, "sequence": 3},
        ),
    ],
)
def test_each_command_is_these_raw_values_and_all_of_them_may_be_written(
    loop: LoopConfig, command: WireCommand, raws: dict[str, RawValue]
) -> None:
    assert to_raw(loop, command) == raws
    write_list = build_write_list(loop)
    for name, raw in raws.items():
        tag = loop.tag(name)
        assert tag is not None
        write_list.check(name, tag, raw)


@pytest.mark.parametrize("command", [ClaimLoop(4711, 1), DriveOutput(45.0, 4711, 2, 3), ReleaseLoop()])
def test_what_the_guard_is_told_goes_in_one_request(command: WireCommand) -> None:
    writes = [
        (name, tag, raw)
        for name, raw in to_raw(GUARDED, command).items()
        if isinstance(tag := GUARDED.tag(name), ModbusTag)
    ]
    assert len(plan_writes(ENDPOINT, writes)) == 1


def test_where_the_strobes_lie_apart_the_sequence_goes_last() -> None:
    """A guard that saw a newer sequence first would pass on the former output."""
    assert list(to_raw(GUARDED, DriveOutput(45.0, 4711, 2, 3)))[-1] == "sequence"


def test_a_mode_in_a_coil_is_requested_as_true_or_false() -> None:
    loop = with_tags(PLAIN, {"mode": ModbusTag(RegisterTable.COIL, 0, DataType.BOOL)})
    assert to_raw(loop, SetMode(LoopMode.AUTO)) == {"mode": True}


@pytest.mark.parametrize(
    ("command", "reason"),
    [
        (SetMode(LoopMode.CAS), "no code"),
        (SetSetpoint(nan), "finite"),
        (DriveOutput(inf, 1, 1, 1), "finite"),
        (DriveOutput(nan, 1, 1, 1), "finite"),
    ],
)
def test_what_can_not_be_told_to_the_controller_is_refused(command: WireCommand, reason: str) -> None:
    with pytest.raises(WriteForbidden, match=reason):
        to_raw(PLAIN, command)


def test_a_missing_tag_is_named() -> None:
    with pytest.raises(WriteForbidden, match="TIC-204 has no tag 'sp'"):
        to_raw(without_tags(PLAIN, "sp"), SetSetpoint(50.0))
    with pytest.raises(WriteForbidden, match="no tag 'mode'"):
        to_raw(with_tags(without_tags(PLAIN, "mode"), {}), SetMode(LoopMode.MAN))
    with pytest.raises(WriteForbidden, match="no tag 'derivative'"):
        settings_to_raw(without_tags(PLAIN, "derivative"), BlockFields(1.0, 10.0, 2.0))


def fields_report(gain: RawValue | None, integral: RawValue | None, derivative: RawValue | None) -> ReadReport:
    raws = {"gain": gain, "integral": integral, "derivative": derivative}
    quality = {True: Quality.BAD, False: Quality.GOOD}
    return ReadReport({name: Reading(raw, quality[raw is None]) for name, raw in raws.items()}, SENT)


def test_settings_are_the_controllers_own_numbers() -> None:
    loop = with_tags(PLAIN, {"integral": replace(holding(42, DataType.INT), scale=0.1)})
    assert settings_tags(loop) == ("gain", "integral", "derivative")
    assert to_block_fields(loop, fields_report(2.5, 125, 0.0)) == BlockFields(2.5, 12.5, 0.0)
    assert settings_to_raw(loop, BlockFields(2.5, 12.5, 0.0)) == {"gain": 2.5, "integral": 125, "derivative": 0.0}


def test_a_block_without_derivative_has_two_fields() -> None:
    loop = without_tags(PLAIN, "derivative")
    assert settings_tags(loop) == ("gain", "integral")
    assert to_block_fields(loop, fields_report(2.5, 125.0, None)) == BlockFields(2.5, 125.0, None)
    assert settings_to_raw(loop, BlockFields(2.5, 125.0, None)) == {"gain": 2.5, "integral": 125.0}


@pytest.mark.parametrize(("gain", "integral", "derivative"), [(None, 1.0, 1.0), (1.0, None, 1.0), (1.0, 1.0, None)])
def test_settings_with_one_field_that_is_no_number_are_no_settings(
    gain: float | None, integral: float | None, derivative: float | None
) -> None:
    assert to_block_fields(PLAIN, fields_report(gain, integral, derivative)) is None


def test_what_registers_will_hold_is_told_before_it_is_written() -> None:
    loop = with_tags(PLAIN, {"integral": replace(holding(42, DataType.INT), scale=0.1)})
    assert field_to_raw(loop, "integral", 12.34) == 123
    held = held_fields(loop, BlockFields(2.5, 12.34, 3.0))
    assert held == BlockFields(2.5, 123 * 0.1, 3.0)
    assert settings_to_raw(loop, held) == settings_to_raw(loop, BlockFields(2.5, 12.34, 3.0))
    assert held_fields(without_tags(loop, "derivative"), BlockFields(2.5, 12.0, None)).derivative is None


@given(st.floats(0.125, 20.0, width=32), st.integers(1, 900), st.floats(0.0, 300.0, width=32))
def test_settings_as_found_go_back_identically(gain: float, integral: int, derivative: float) -> None:
    """S4: what is put back is what was found, to the last bit."""
    loop = with_tags(PLAIN, {"integral": replace(holding(42, DataType.INT), scale=0.1)})
    fields = to_block_fields(loop, fields_report(gain, integral, derivative))
    assert fields is not None
    assert settings_to_raw(loop, fields) == {"gain": gain, "integral": integral, "derivative": derivative}


@given(st.sampled_from((DataType.REAL, DataType.INT, DataType.UINT)), st.integers(0, 27648), st.floats(0.0, 100.0))
def test_an_output_as_found_goes_back_identically(kind: DataType, counts: int, op_eu: float) -> None:
    """S3: the output handed back is the one that was found, to the last bit."""
    tag = holding(4, kind) if kind is DataType.REAL else replace(holding(4, kind), scale=100.0 / 27648)
    raw = from_words(tag, to_words(tag, op_eu if kind is DataType.REAL else counts))
    assert raw is not None
    loop = with_tags(PLAIN, {"op": tag})
    op_pct = to_sample(loop, report({"op": raw})).op_pct
    assert op_pct is not None
    assert to_raw(loop, DriveOutput(op_pct, 0, 0, 0)) == {"op": raw}


def test_engineering_units_are_at_hand_for_whoever_shows_a_raw_value() -> None:
    assert to_eu(replace(holding(0, DataType.INT), scale=0.1, offset=-20.0), 350) == 15.0
