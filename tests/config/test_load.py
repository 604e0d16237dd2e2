"""What a right file becomes: percent of span, wire addresses from 0, and the tightest of loop and site."""

from pathlib import Path

import pytest

from autotune.config.bundled import bundled_path
from autotune.config.load import load
from autotune.config.types import (
    AddressRange,
    Configuration,
    DataType,
    LoopConfig,
    ModbusEndpoint,
    ModbusTag,
    Ne43,
    Order,
    RegisterTable,
)
from autotune.confirmed_write.plan import FieldLimit
from autotune.experiment.plan import ConvergencePlan, RelayPlan
from autotune.loop.mode import ControlAction, LoopMode
from autotune.loop.settings import BlockDescription, FieldRange, GainKind, IntegralKind, PidForm


@pytest.fixture(scope="module")
def example() -> Configuration:
    return load(bundled_path("example-modbus.toml"))


def loop_of(configuration: Configuration, name: str) -> LoopConfig:
    loop = configuration.loop(name)
    assert loop is not None
    return loop


def test_the_example_has_two_loops_of_one_controller(example: Configuration) -> None:
    assert [loop.name for loop in example.loops] == ["TIC-204", "FIC-101"]
    (controller,) = example.controllers
    assert controller.endpoint == ModbusEndpoint(
        host="192.168.10.21",
        port=502,
        device_id=1,
        request_timeout_s=0.5,
        connect_gap_s=1.0,
        never_written=(AddressRange(RegisterTable.HOLDING, 9000, 9499),),  # 9001 .. 9500 counted from 1
    )
    assert (controller.plc_scan_s, controller.io_time_s) == (0.05, 0.02)
    assert example.data_dir == example.file.parent / "autotune-data"
    assert example.loop("TIC-999") is None


def test_engineering_limits_become_percent_of_span(example: Configuration) -> None:
    limits = loop_of(example, "TIC-204").limits  # span 0 .. 120 degC: 1 % is 1.2 degC
    assert limits.pv_low_pct == pytest.approx(70 / 1.2)
    assert limits.pv_high_pct == pytest.approx(88 / 1.2)
    assert limits.pv_rate_pct_per_s == pytest.approx(4 / 1.2)
    assert limits.pv_deviation_pct == pytest.approx(8 / 1.2)
    assert limits.drift_pct_per_s == pytest.approx(0.1 / 1.2)


def test_the_output_range_is_the_tightest_of_loop_and_site(example: Configuration) -> None:
    assert (loop_of(example, "TIC-204").limits.op_low_pct, loop_of(example, "TIC-204").limits.op_high_pct) == (5, 90)
    wider = load(bundled_path("example-modbus.toml"), {"loop.TIC-204.limits.op_low_pct": 0.0})
    assert loop_of(wider, "TIC-204").limits.op_low_pct == 5.0


def test_addresses_count_from_0_on_the_wire_with_the_loops_offset(example: Configuration) -> None:
    loop = loop_of(example, "TIC-204")
    assert loop.tag("pv") == ModbusTag(RegisterTable.HOLDING, 100, DataType.REAL)
    assert loop.tag("watch.juice-pump-running") == ModbusTag(RegisterTable.DISCRETE, 111, DataType.BOOL)
    assert loop.tag("watch.header-pressure") == ModbusTag(
        RegisterTable.INPUT, 119, DataType.INT, scale=2.34375e-4, offset=-1.5, ne43=Ne43(6400.0, 32000.0)
    )
    assert loop.tag("nothing") is None
    flow = loop_of(example, "FIC-101")
    assert flow.tag("sp") == ModbusTag(RegisterTable.HOLDING, 300, DataType.DINT, word_order=Order.LITTLE, scale=0.1)
    assert flow.tag("watch.drive-in-remote") == ModbusTag(RegisterTable.INPUT, 309, DataType.BOOL, bit=3)


def test_modes_are_told_both_ways(example: Configuration) -> None:
    codes = loop_of(example, "TIC-204").mode_codes
    assert dict(codes.read)[2] is LoopMode.CAS
    assert dict(codes.read)[6] is LoopMode.LOCAL
    assert dict(codes.write) == {LoopMode.MAN: 0, LoopMode.AUTO: 1, LoopMode.CAS: 2, LoopMode.REMOTE: 3}
    flow = loop_of(example, "FIC-101").mode_codes
    modes = (LoopMode.MAN, LoopMode.AUTO, LoopMode.CAS, LoopMode.REMOTE)
    assert dict(flow.read) == dict(zip((1, 2, 3, 4), modes, strict=True))
    assert dict(flow.write) == dict(zip(modes, (11, 12, 13, 14), strict=True))


def test_a_block_holds_only_what_is_told(example: Configuration) -> None:
    assert loop_of(example, "FIC-101").block == BlockDescription(
        form=PidForm.SERIES,
        gain_kind=GainKind.PROPORTIONAL_BAND,
        integral_kind=IntegralKind.REPEATS_PER_MIN,
        integral_off=0.0,
        has_derivative=False,
        derivative_off=None,
        derivative_filter_ratio=None,
    )
    block = loop_of(example, "TIC-204").block
    assert (block.gain_range, block.panel_labels) == (FieldRange(0.01, 100.0), ("GAIN", "TI", "TD"))


def test_the_plans_of_a_test_take_what_is_told_and_keep_the_rest(example: Configuration) -> None:
    flow = loop_of(example, "FIC-101")
    assert flow.relay == RelayPlan(step_up_pct=6.0, step_down_pct=4.0)
    assert flow.convergence == ConvergencePlan()
    assert loop_of(example, "TIC-204").relay.wanted_swing_pct == 1.5
    assert flow.action is ControlAction.REVERSE


def test_settings_limits_are_the_tightest_of_loop_and_site(example: Configuration) -> None:
    limits = dict(loop_of(example, "TIC-204").field_limits)
    assert limits["gain"] == FieldLimit(0.1, 10.0, 3.0)
    assert limits["integral"] == FieldLimit(2.0, 1800.0, 5.0)  # the factor is the site's
    assert dict(loop_of(example, "FIC-101").field_limits)["gain"] == FieldLimit(10.0, 1000.0, 5.0)  # the site's


def test_consent_and_writing_are_as_told(example: Configuration) -> None:
    guarded, bare = loop_of(example, "TIC-204"), loop_of(example, "FIC-101")
    assert (guarded.has_guard, guarded.allows_no_guard, guarded.guard_timeout_s) == (True, False, 5.0)
    assert (bare.has_guard, bare.allows_no_guard, bare.guard_timeout_s) == (False, True, None)
    assert (guarded.is_writing_settings_allowed, guarded.write_in_manual) == (True, True)
    assert not bare.is_writing_settings_allowed


def test_writing_in_automatic_has_to_be_told() -> None:
    overrides = {f"loop.{name}.write_settings": "in automatic" for name in ("TIC-204", "LIC-102")}
    rehearsal = load(bundled_path("rehearsal.toml"), overrides)
    assert [loop.name for loop in rehearsal.loops if not loop.write_in_manual] == ["TIC-204", "LIC-102"]


def test_an_override_replaces_what_the_file_says() -> None:
    rehearsal = load(bundled_path("rehearsal.toml"), {"controller.skid.port": 50213, "data_dir": "elsewhere"})
    endpoints = {loop.controller.endpoint for loop in rehearsal.loops}
    assert [endpoint.port for endpoint in endpoints if isinstance(endpoint, ModbusEndpoint)] == [50213]
    assert rehearsal.data_dir.name == "elsewhere"
    blocks = load(bundled_path("rehearsal.toml"), {"block.ideal-seconds.setpoint_weight": 0.5})
    assert loop_of(blocks, "TIC-204").block.setpoint_weight == 0.5


def test_a_configuration_may_lie_in_several_files(tmp_path: Path) -> None:
    text = bundled_path("rehearsal.toml").read_text("utf-8")
    head, *loops = text.split("[[loop]]\n")
    (tmp_path / "main.toml").write_text(
        head.replace("schema_version = 1", 'schema_version = 1\ninclude = ["loops/a.toml", "loops/b.toml"]'), "utf-8"
    )
    (tmp_path / "loops").mkdir()
    for name, some in (("a", loops[:2]), ("b", loops[2:])):
        lines = "schema_version = 1\n" + "".join(f"[[loop]]\n{one}" for one in some)
        (tmp_path / "loops" / f"{name}.toml").write_text(lines, "utf-8")
    divided, whole = load(tmp_path / "main.toml"), load(bundled_path("rehearsal.toml"))
    assert divided.digest == whole.digest
    assert divided.loops == whole.loops
    assert [Path(file).name for file, _ in divided.sources] == ["main.toml", "a.toml", "b.toml"]


def test_a_file_may_begin_with_a_byte_order_mark(tmp_path: Path) -> None:
    path = tmp_path / "marked.toml"
    path.write_bytes(b"\xef\xbb\xbf" + bundled_path("rehearsal.toml").read_bytes())
    assert load(path).digest == load(bundled_path("rehearsal.toml")).digest


def test_other_loops_may_read_what_one_loop_writes() -> None:
    rehearsal = load(bundled_path("rehearsal.toml"))
    watched = loop_of(rehearsal, "TIC-310").tag("watch.TIC-311-in-cascade")
    assert watched == loop_of(rehearsal, "TIC-311").tag("mode")


def test_a_masters_output_may_be_its_slaves_setpoint() -> None:
    overrides = {"loop.TIC-311.tags.sp.address": 20_000 - 500, "loop.TIC-310.tags.op.address": 20_000 - 400}
    cascade = load(bundled_path("rehearsal.toml"), overrides)
    assert loop_of(cascade, "TIC-310").tag("op") == loop_of(cascade, "TIC-311").tag("sp")


def test_bits_of_one_register_are_different_places(tmp_path: Path) -> None:
    text = bundled_path("example-modbus.toml").read_text("utf-8")
    more = """
[[loop.watch]]
name = "drive-{bit}"
meaning = "a bit of the same word"
low_eu = 1
high_eu = 1
tag = {{ table = "input", address = 310, type = "BOOL", bit = {bit} }}
"""
    (tmp_path / "site-limits.toml").write_bytes(bundled_path("site-limits.toml").read_bytes())
    path = tmp_path / "bits.toml"
    path.write_text(text + more.format(bit=4) + more.format(bit=15), "utf-8")
    assert len(loop_of(load(path), "FIC-101").watch) == 3
