"""What readings alone say about a loop, code by code, and how sure the action is (no false claims)."""

import random
from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import pytest

from autotune.config.types import LoopConfig
from autotune.loop.limits import WatchLimit
from autotune.loop.mode import ControlAction, LoopMode
from autotune.loop.quality import Quality
from autotune.loop.sample import GuardState, GuardView, Sample, Stamp, WatchReading
from autotune.service.readiness import Level, ReadinessFinding, action_correlation, judge_samples
from simulator.block import Action, BlockSpec, Settings
from simulator.controller import PidBlock
from tests.fakes.plant import WITH_GUARD, WITHOUT_GUARD

GUARD = GuardView(GuardState.IDLE, holder=0, is_enabled=True, is_stop_pressed=False)
SAMPLE = Sample(
    t_s=0.0,
    taken=Stamp.at(0.0),
    pv_pct=50.0,
    pv_quality=Quality.GOOD,
    sp_pct=50.0,
    op_pct=45.0,
    op_quality=Quality.GOOD,
    mode=LoopMode.AUTO,
    guard=GUARD,
    plc_clock_ms=1000,
)
PROVED = replace(WITH_GUARD, proves_writable=True)
DIVERT = WatchLimit("divert_valve_closed", 1.0, 1.0, "the divert valve sends juice back")


def look(count: int = 10, **changes: Any) -> tuple[Sample, ...]:
    return tuple(
        replace(SAMPLE, **{"t_s": 0.1 * number, "plc_clock_ms": 1000 + 100 * number, **changes})
        for number in range(count)
    )


def judged(loop: LoopConfig, samples: Sequence[Sample]) -> dict[str, ReadinessFinding]:
    findings = judge_samples(loop, samples)
    assert len({one.code for one in findings}) == len(findings)
    return {one.code: one for one in findings}


def test_a_loop_at_rest_is_fit_and_shows_nothing_of_its_action() -> None:
    assert {code: one.level for code, one in judged(PROVED, look()).items()} == {"ACTION_NOT_SHOWN": Level.NOTE}


WATCHING = replace(PROVED, watch=(DIVERT,))
UNGUARDED = replace(WITHOUT_GUARD, proves_writable=True)

TABLE: list[tuple[str, LoopConfig, dict[str, Any], str, Level, str]] = [
    ("in manual", PROVED, {"mode": LoopMode.MAN}, "LOOP_IN_MANUAL", Level.CAUTION, "ask the operator"),
    ("in cascade", PROVED, {"mode": LoopMode.CAS}, "MODE_NOT_TESTABLE", Level.STOP, "at the panel"),
    ("mode unknown", PROVED, {"mode": LoopMode.NOT_KNOWN}, "MODE_NOT_TESTABLE", Level.STOP, "[loop.mode_codes]"),
    ("PV bad", PROVED, {"pv_pct": None, "pv_quality": Quality.BAD}, "PV_QUALITY", Level.STOP, "mend the measurement"),
    ("PV forced", PROVED, {"pv_quality": Quality.FORCED}, "PV_QUALITY", Level.STOP, "mend the measurement"),
    ("no SP", PROVED, {"sp_pct": None}, "SP_NOT_READ", Level.STOP, "check its tag"),
    ("no OP", PROVED, {"op_pct": None}, "OP_NOT_READ", Level.STOP, "check its tag"),
    ("SP below", PROVED, {"sp_pct": -0.6}, "SP_OUT_OF_SPAN", Level.STOP, "compare span"),
    ("OP above", PROVED, {"op_pct": 100.6}, "OP_OUT_OF_SPAN", Level.STOP, "compare span"),
    ("OP not a number", PROVED, {"op_pct": float("nan")}, "OP_OUT_OF_SPAN", Level.STOP, "compare span"),
    ("no guard allowed", UNGUARDED, {"guard": None}, "NO_GUARD", Level.CAUTION, "plc-guard.st"),
    ("no guard", replace(UNGUARDED, allows_no_guard=False), {"guard": None}, "NO_GUARD", Level.STOP, "plc-guard.st"),
    ("armed", PROVED, {"guard": replace(GUARD, state=GuardState.ARMED, holder=9)}, "GUARD_NOT_IDLE", Level.STOP, "end"),
    ("gave back", PROVED, {"guard": replace(GUARD, state=GuardState.GAVE_BACK)}, "GUARD_NOT_IDLE", Level.STOP, "ackno"),
    ("stop", PROVED, {"guard": replace(GUARD, is_stop_pressed=True)}, "GUARD_STOPPED", Level.STOP, "release it"),
    (
        "not enabled",
        PROVED,
        {"guard": replace(GUARD, is_enabled=False)},
        "GUARD_NOT_ENABLED",
        Level.STOP,
        "test enable",
    ),
    ("no clock", PROVED, {"plc_clock_ms": None}, "NO_PLC_CLOCK", Level.NOTE, "add both tags"),
    ("clock stands", PROVED, {"plc_clock_ms": 7}, "PLC_CLOCK_STANDS", Level.STOP, "set the PLC to run"),
    ("unproved", WITH_GUARD, {}, "SETTINGS_NOT_PROVED", Level.NOTE, "prove_writable"),
    (
        "watch",
        WATCHING,
        {"watch": (WatchReading("divert_valve_closed", 0.0, Quality.GOOD),)},
        "WATCH",
        Level.STOP,
        "bring it there",
    ),
    (
        "watch bad",
        WATCHING,
        {"watch": (WatchReading("divert_valve_closed", None, Quality.BAD),)},
        "WATCH",
        Level.STOP,
        "bring it there",
    ),
    (
        "watch doubtful",
        WATCHING,
        {"watch": (WatchReading("divert_valve_closed", 1.0, Quality.UNCERTAIN),)},
        "WATCH",
        Level.STOP,
        "bring it there",
    ),
]


@pytest.mark.parametrize(
    ("loop", "changes", "code", "level", "remedy"), [row[1:] for row in TABLE], ids=[row[0] for row in TABLE]
)
def test_each_code_has_its_level_and_remedy(
    loop: LoopConfig, changes: dict[str, Any], code: str, level: Level, remedy: str
) -> None:
    findings = judged(loop, look(**changes))
    assert findings[code].level is level
    assert remedy in findings[code].remedy
    assert str(findings[code]) == f"{code}: {findings[code].text}; {findings[code].remedy}"


@pytest.mark.parametrize("edge_pct", [-0.5, 0.0, 100.0, 100.5])
def test_a_reading_at_an_end_of_its_span_is_no_fault(edge_pct: float) -> None:
    assert judged(PROVED, look(sp_pct=edge_pct, op_pct=edge_pct)).keys() == {"ACTION_NOT_SHOWN"}


@pytest.mark.parametrize("state", [GuardState.IDLE, GuardState.NOT_KNOWN])
def test_a_guard_that_is_free_or_tells_no_state_is_no_fault(state: GuardState) -> None:
    guard = GuardView(state)
    assert judged(PROVED, look(guard=guard)).keys() == {"ACTION_NOT_SHOWN"}


def test_three_readings_are_too_few_to_say_that_a_clock_stands() -> None:
    assert "PLC_CLOCK_STANDS" not in judged(PROVED, look(3, plc_clock_ms=7))


def test_a_watch_that_holds_or_is_unknown_to_the_file_is_no_fault() -> None:
    held = WatchReading("divert_valve_closed", 1.0, Quality.GOOD)
    other = WatchReading("not in the file", None, Quality.BAD)
    assert "WATCH" not in judged(WATCHING, look(watch=(held, other)))


def block_at_work(settings: Settings, action: Action, noise_pct: float, seed: int, count: int = 40) -> list[Sample]:
    """A block in automatic on a noisy PV, read at every second of its scans."""
    chance = random.Random(seed)
    block = PidBlock(BlockSpec(scan_s=0.05, action=action), settings, pv_pct=50.0, sp_pct=50.0, op_pct=50.0)
    samples = []
    for scan in range(2 * count):
        pv_pct = 50.0 + chance.gauss(0.0, noise_pct)
        block.execute(pv_pct)
        if scan % 2:
            samples.append(replace(SAMPLE, t_s=0.05 * scan, pv_pct=pv_pct, op_pct=block.op_pct, plc_clock_ms=50 * scan))
    return samples


TERMS = {"P": Settings(0.8, 0.0, 0.0), "PI": Settings(0.8, 9.0, 0.0), "PID": Settings(0.8, 9.0, 0.5)}


@pytest.mark.parametrize("terms", TERMS)
@pytest.mark.parametrize("action", list(Action))
@pytest.mark.parametrize("seed", range(5))
def test_the_action_of_a_block_at_work_shows_whatever_its_terms(terms: str, action: Action, seed: int) -> None:
    samples = block_at_work(TERMS[terms], action, 0.1, seed)
    correlation, pairs = action_correlation(samples)
    assert pairs == 39
    assert (correlation < -0.7) if action is Action.REVERSE else (correlation > 0.7)
    right = replace(PROVED, action=ControlAction(action.value))
    wrong_action = ControlAction.DIRECT if right.action is ControlAction.REVERSE else ControlAction.REVERSE
    assert not judged(right, samples).keys() & {"ACTION_REVERSED", "ACTION_NOT_SHOWN"}
    finding = judged(replace(PROVED, action=wrong_action), samples)["ACTION_REVERSED"]
    assert finding.level is Level.STOP
    assert f"{action.value}-acting" in finding.text


def noise(kind: str, chance: random.Random, count: int) -> list[float]:
    steps = [chance.gauss(0.0, 1.0) for _ in range(count)]
    if kind == "white":
        return [50.0 + 0.1 * step for step in steps]
    return [50.0 + 0.1 * sum(steps[: number + 1]) for number in range(count)]


@pytest.mark.parametrize("kind", ["white", "walk"])
@pytest.mark.parametrize("count", [12, 30, 60])
def test_unrelated_movements_are_claimed_to_show_an_action_in_less_than_one_of_500_looks(kind: str, count: int) -> None:
    chance = random.Random(2026)
    claims = 0
    for _ in range(1000):
        pv, op = noise(kind, chance, count), noise(kind, chance, count)
        samples = [
            replace(SAMPLE, pv_pct=pv_pct, op_pct=op_pct, plc_clock_ms=number)
            for number, (pv_pct, op_pct) in enumerate(zip(pv, op, strict=True))
        ]
        claims += "ACTION_NOT_SHOWN" not in judged(PROVED, samples)
    assert claims <= 2


def test_what_was_not_read_or_not_in_automatic_says_nothing_about_the_action() -> None:
    samples = block_at_work(TERMS["P"], Action.REVERSE, 0.1, 1)
    holes = [replace(one, pv_pct=None) if number % 2 else one for number, one in enumerate(samples)]
    assert action_correlation(holes) == (0.0, 0)
    assert action_correlation([replace(one, mode=LoopMode.MAN) for one in samples]) == (0.0, 0)
    assert action_correlation([replace(one, op_pct=50.0) for one in samples])[0] == 0.0
    assert "ACTION_NOT_SHOWN" not in judged(PROVED, [replace(one, mode=LoopMode.MAN) for one in samples])
