"""The rehearsal's configuration says about the soft plant what the soft plant is."""

import tomllib
from typing import Any

import pytest

from autotune.config.bundled import bundled_path
from autotune.config.load import load
from autotune.config.places import GUARD_WRITES
from autotune.config.types import LoopConfig, ModbusTag, RegisterTable
from autotune.loop.mode import ControlAction, LoopMode
from simulator.registers import BLOCK_SIZE, REGISTERS, WATCH_OFFSET
from simulator.rig import find_rig

RIG: dict[str, Any] = tomllib.loads(find_rig("juice-skid").read_text("utf-8"))
PLANT: dict[str, dict[str, Any]] = {loop["name"]: loop for loop in RIG["loop"]}
LOOPS = {loop.name: loop for loop in load(bundled_path("rehearsal.toml")).loops}
NAMES = list(PLANT)


def place(loop: LoopConfig, name: str) -> tuple[RegisterTable, int, str]:
    tag = loop.tag(name)
    assert isinstance(tag, ModbusTag)
    return tag.table, tag.address, tag.type.value


def test_all_loops_of_the_skid_are_described_in_its_order() -> None:
    assert list(LOOPS) == NAMES


def test_the_controller_has_the_scan_and_the_word_order_of_the_plant() -> None:
    for loop in LOOPS.values():
        assert loop.controller.plc_scan_s == RIG["plc_scan_s"]
        tag = loop.tag("pv")
        assert isinstance(tag, ModbusTag)
        assert tag.word_order.value == RIG["word_order"]


@pytest.mark.parametrize("name", NAMES)
def test_every_tag_lies_where_the_plant_has_it(name: str) -> None:
    loop, base = LOOPS[name], BLOCK_SIZE * NAMES.index(name)
    registers = {one.name: one for one in REGISTERS}
    tags = [tag for tag, _ in loop.tags if not tag.startswith("watch.")]
    assert len(tags) == 23
    for tag in tags:
        assert place(loop, tag) == (RegisterTable.HOLDING, base + registers[tag].offset, registers[tag].type), tag
    assert all(registers[tag].is_writable for tag in (*GUARD_WRITES, "mode", "gain", "integral", "derivative"))


@pytest.mark.parametrize("name", NAMES)
def test_every_watch_entry_lies_where_the_plant_has_it(name: str) -> None:
    loop, base = LOOPS[name], BLOCK_SIZE * NAMES.index(name)
    expected = {
        f"watch.{entry}": (RegisterTable.HOLDING, base + WATCH_OFFSET + number, "UINT")
        for number, entry in enumerate(PLANT[name].get("watch", {}))
    }
    if name == "TIC-310":
        expected["watch.TIC-311-in-cascade"] = place(LOOPS["TIC-311"], "mode")
    assert {tag: place(loop, tag) for tag, _ in loop.tags if tag.startswith("watch.")} == expected
    for limit in loop.watch:
        assert limit.low_eu == limit.high_eu == PLANT[name].get("watch", {}).get(limit.name, 2)


@pytest.mark.parametrize("name", NAMES)
def test_the_loop_and_its_block_are_as_the_plant_is_built(name: str) -> None:
    loop, plant = LOOPS[name], PLANT[name]
    block, built = loop.block, plant["block"]
    assert (loop.pv_span.low_eu, loop.pv_span.high_eu) == (plant["pv_low_eu"], plant["pv_high_eu"])
    assert (loop.pv_span.unit, loop.unit) == (plant["pv_unit"], plant["unit"])
    assert loop.action is ControlAction(built.get("action", "reverse"))
    told = {
        "form": block.form.value,
        "gain_kind": block.gain_kind.value,
        "gain_per": block.gain_per.value,
        "integral_kind": block.integral_kind.value,
        "integral_off": block.integral_off,
        "derivative_kind": block.derivative_kind.value,
        "derivative_off": block.derivative_off,
        "derivative_on": block.derivative_on.value,
        "derivative_filter_ratio": block.derivative_filter_ratio,
        "setpoint_weight": block.setpoint_weight,
        "sign": block.sign.value,
        "algorithm": block.algorithm.value,
        "anti_windup": block.anti_windup.value,
        "sp_tracks_in_manual": block.sp_tracks_in_manual,
        "scan_s": block.scan_s,
    }
    standard = {
        "gain_kind": "gain",
        "gain_per": "percent",
        "integral_kind": "time in s",
        "integral_off": 0.0,
        "derivative_kind": "time in s",
        "derivative_off": 0.0,
        "derivative_on": "PV",
        "derivative_filter_ratio": 10.0,
        "setpoint_weight": 1.0,
        "sign": "action flag",
        "algorithm": "positional",
        "anti_windup": "conditional",
        "sp_tracks_in_manual": False,
        "scan_s": RIG["plc_scan_s"],
    }
    assert told == standard | {key: built[key] for key in built if key in told}


@pytest.mark.parametrize("name", NAMES)
def test_a_test_stays_inside_the_plants_own_guard(name: str) -> None:
    loop, guard = LOOPS[name], PLANT[name]["guard"]
    limits = loop.limits
    assert loop.guard_timeout_s == guard.get("timeout_s", 2.0)
    assert guard["op_low_pct"] <= limits.op_low_pct < limits.op_high_pct <= guard["op_high_pct"]
    assert guard["pv_low_eu"] < loop.pv_span.to_eu(limits.pv_low_pct)
    assert loop.pv_span.to_eu(limits.pv_high_pct) < guard["pv_high_eu"]


@pytest.mark.parametrize("name", NAMES)
def test_the_plant_at_rest_lies_inside_the_limits_with_room_for_both_steps(name: str) -> None:
    loop, plant = LOOPS[name], PLANT[name]
    limits = loop.limits
    assert limits.pv_low_pct < loop.pv_span.to_pct(plant["sp_eu"]) < limits.pv_high_pct
    assert limits.op_low_pct <= plant["op_pct"] - loop.relay.step_down_pct
    assert plant["op_pct"] + loop.relay.step_up_pct <= limits.op_high_pct


@pytest.mark.parametrize("name", NAMES)
def test_the_settings_as_found_lie_inside_their_limits(name: str) -> None:
    built, limits = PLANT[name]["block"], dict(LOOPS[name].field_limits)
    for field in ("gain", "integral"):
        low, high = limits[field].low, limits[field].high
        assert low is not None
        assert high is not None
        assert low <= built[field] <= high


@pytest.mark.parametrize("name", NAMES)
def test_the_mode_that_is_found_can_be_given_back(name: str) -> None:
    codes = LOOPS[name].mode_codes
    found = LoopMode(PLANT[name].get("mode", "AUTO"))
    assert {mode: code for code, mode in codes.read}[found] == dict(codes.write)[found]
