"""The guard's Structured Text does what the soft plant's guard does, scan for scan."""

import math
import random
from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import pytest

from autotune.config.bundled import bundled_path
from simulator.guard import Guard, GuardInputs, GuardLimits
from tests.config.structured_text import FunctionBlock, parse

TEXT = bundled_path("plc-guard.st").read_text("utf-8")
LIMITS = GuardLimits(op_low_pct=10.0, op_high_pct=90.0, pv_low_eu=40.0, pv_high_eu=95.0, timeout_s=2.0, enable_s=60.0)
NAN = float("nan")

START = GuardInputs(
    clock_ms=2**32 - 5000,  # the clock wraps on the way
    is_enable_pressed=False,
    is_stop_pressed=False,
    holder_request=0,
    heartbeat=0,
    sequence=0,
    op_request_pct=0.0,
    pv_eu=78.0,
    is_pv_failed=False,
    op_pct=45.0,
    sp_eu=78.0,
    mode=1,
)


def function_block() -> FunctionBlock:
    block = parse(TEXT[TEXT.index("FUNCTION_BLOCK") : TEXT.index("END_FUNCTION_BLOCK") + len("END_FUNCTION_BLOCK")])
    block.variables |= {
        "pv_low": LIMITS.pv_low_eu,
        "pv_high": LIMITS.pv_high_eu,
        "op_low": LIMITS.op_low_pct,
        "op_high": LIMITS.op_high_pct,
        "enable_time": int(1000 * LIMITS.enable_s),
    }
    block.initial = dict(block.variables)
    return block


@dataclass(slots=True)
class Pair:
    """The text and the soft plant's guard on the same loop; both see the same and have to write the same."""

    text: FunctionBlock
    guard: Guard
    seen: GuardInputs = START

    @classmethod
    def new(cls) -> "Pair":
        return cls(function_block(), Guard(LIMITS))

    def scan(self, seen: GuardInputs) -> None:
        writes = self.guard.scan(seen)
        after = (
            seen.op_pct if writes.op_pct is None else writes.op_pct,
            seen.sp_eu if writes.sp_eu is None else writes.sp_eu,
            seen.mode if writes.mode is None else writes.mode,
        )
        told = self.text.call(
            enable=seen.is_enable_pressed,
            stop=seen.is_stop_pressed,
            holder_request=seen.holder_request,
            heartbeat=seen.heartbeat,
            sequence=seen.sequence,
            op_request=seen.op_request_pct,
            plc_clock_ms=seen.clock_ms,
            pv=seen.pv_eu,
            pv_failed=seen.is_pv_failed,
            block_mode=seen.mode,
            block_op=seen.op_pct,
            block_sp=seen.sp_eu,
        )
        assert (told["block_op"], told["block_sp"], told["block_mode"]) == after
        assert self._registers_of_the_text() == self._registers_of_the_plant()
        self.seen = replace(seen, op_pct=after[0], sp_eu=after[1], mode=after[2])

    def step(self, passed_ms: int = 50, **changes: object) -> None:
        """One scan later, with some inputs changed."""
        later = (self.seen.clock_ms + passed_ms) % 2**32
        self.scan(replace(self.seen, clock_ms=later, **changes))  # type: ignore[arg-type]

    def restart(self) -> None:
        self.text.restart()
        self.guard = Guard(LIMITS)

    def _registers_of_the_text(self) -> dict[str, object]:
        names = ("guard_state", "guard_alarm", "holder", "heartbeat_echo", "enabled", "test_active")
        return {name: self.text.variables[name] for name in (*names, "op_effect_ms", "op_effect_count")}

    def _registers_of_the_plant(self) -> dict[str, object]:
        guard = self.guard
        return {
            "guard_state": int(guard.state),
            "guard_alarm": guard.is_alarm,
            "holder": guard.holder,
            "heartbeat_echo": guard.heartbeat_echo,
            "enabled": guard.is_enabled,
            "test_active": guard.is_test_active,
            "op_effect_ms": guard.op_effect_ms,
            "op_effect_count": guard.op_effect_count,
        }


def armed_in_manual() -> Pair:
    """Enabled, held by token 7, in manual at 45 %, nothing passed on yet."""
    pair = Pair.new()
    pair.step()
    pair.step(is_enable_pressed=True)
    pair.step(is_enable_pressed=False, holder_request=7, heartbeat=1)
    pair.step(mode=0, heartbeat=2)
    assert pair.text.variables["guard_state"] == 1
    return pair


def state_of(pair: Pair) -> int:
    return int(pair.text.variables["guard_state"])


def test_without_enable_nobody_gets_the_loop() -> None:
    pair = Pair.new()
    pair.step()
    pair.step(holder_request=7)
    assert (state_of(pair), pair.text.variables["holder"]) == (0, 0)


def test_a_newer_move_is_passed_on_and_stamped() -> None:
    pair = armed_in_manual()
    pair.step(sequence=1, op_request_pct=55.0, heartbeat=3)
    assert pair.seen.op_pct == 55.0
    assert pair.text.variables["op_effect_ms"] == pair.seen.clock_ms
    assert pair.text.variables["op_effect_count"] == 1


@pytest.mark.parametrize("sequence", [0, 2**15, 2**16 - 1])
def test_a_move_that_is_not_newer_lands_nowhere(sequence: int) -> None:
    pair = armed_in_manual()
    pair.step(sequence=sequence, op_request_pct=55.0)
    assert pair.seen.op_pct == 45.0


@pytest.mark.parametrize("op_request_pct", [9.9, 90.1, NAN, math.inf])
def test_a_move_outside_the_guards_limits_lands_nowhere(op_request_pct: float) -> None:
    pair = armed_in_manual()
    pair.step(sequence=1, op_request_pct=op_request_pct)
    assert pair.seen.op_pct == 45.0


def test_another_holders_move_lands_nowhere() -> None:
    pair = armed_in_manual()
    pair.step(sequence=1, op_request_pct=55.0, holder_request=9)
    assert pair.seen.op_pct == 45.0


TROUBLES: dict[str, Callable[[Pair], None]] = {
    "no heartbeat": lambda pair: pair.step(passed_ms=2001),
    "stop": lambda pair: pair.step(is_stop_pressed=True),
    "PV too high": lambda pair: pair.step(pv_eu=95.5),
    "PV too low": lambda pair: pair.step(pv_eu=39.5),
    "PV not a number": lambda pair: pair.step(pv_eu=NAN),
}


@pytest.mark.parametrize("trouble", TROUBLES)
def test_in_trouble_the_loop_goes_back_as_found(trouble: str) -> None:
    pair = armed_in_manual()
    pair.step(sequence=1, op_request_pct=55.0, heartbeat=3)
    TROUBLES[trouble](pair)
    assert (pair.seen.op_pct, pair.seen.sp_eu, pair.seen.mode) == (45.0, 78.0, 1)
    assert (state_of(pair), pair.text.variables["guard_alarm"], pair.text.variables["enabled"]) == (2, True, False)


def test_a_heartbeat_just_in_time_is_in_time() -> None:
    pair = armed_in_manual()
    pair.step(passed_ms=2000)
    assert state_of(pair) == 1


@pytest.mark.parametrize("taken", [{"mode": 1}, {"op_pct": 60.0}])
def test_a_loop_that_a_person_took_is_left_alone(taken: dict[str, float]) -> None:
    pair = armed_in_manual()
    pair.step(sequence=1, op_request_pct=55.0, heartbeat=3)
    pair.step(50, heartbeat=4, **taken)
    pair.step(passed_ms=2001)
    assert state_of(pair) == 2
    assert (pair.seen.op_pct, pair.seen.mode) == (taken.get("op_pct", 55.0), taken.get("mode", 0))


def test_a_move_that_meets_a_persons_output_in_the_same_scan_is_not_passed_on() -> None:
    pair = armed_in_manual()
    pair.step(sequence=1, op_request_pct=55.0, heartbeat=3)
    pair.step(50, heartbeat=4, op_pct=60.0, sequence=2, op_request_pct=38.0)
    assert pair.seen.op_pct == 60.0


def test_onto_a_failed_measurement_manual_is_kept() -> None:
    pair = armed_in_manual()
    pair.step(sequence=1, op_request_pct=55.0, heartbeat=3)
    pair.step(pv_eu=NAN, is_pv_failed=True)
    assert (pair.seen.op_pct, pair.seen.mode) == (45.0, 0)


def test_after_giving_back_a_person_has_to_enable_again() -> None:
    pair = armed_in_manual()
    pair.step(is_stop_pressed=True)
    pair.step(is_stop_pressed=False, is_enable_pressed=True)
    assert state_of(pair) == 2  # the token still asks
    pair.step(is_enable_pressed=False, holder_request=0)
    pair.step(is_enable_pressed=True)
    assert (state_of(pair), pair.text.variables["guard_alarm"]) == (0, False)


def test_permission_runs_out_but_a_running_test_goes_on() -> None:
    pair = armed_in_manual()
    for heartbeat in range(3, 50):
        pair.step(passed_ms=1500, heartbeat=heartbeat)
    assert (state_of(pair), pair.text.variables["enabled"]) == (1, False)
    pair.step(holder_request=0)
    pair.step(holder_request=7)
    assert state_of(pair) == 0


def test_the_first_scan_writes_nothing_and_counts_the_restart() -> None:
    pair = armed_in_manual()
    boots = pair.text.variables["boot_count"]
    pair.step(sequence=1, op_request_pct=55.0, heartbeat=3)
    pair.restart()
    pair.step(sequence=2, op_request_pct=60.0, is_enable_pressed=True)
    pair.step()
    assert (pair.seen.op_pct, state_of(pair), pair.text.variables["holder"]) == (55.0, 0, 0)
    assert pair.text.variables["boot_count"] == boots + 1


def test_only_the_count_of_restarts_is_retained() -> None:
    assert function_block().retained == {"boots"}


def test_the_timeout_is_told_in_seconds() -> None:
    pair = Pair.new()
    pair.step()
    assert pair.text.variables["guard_timeout_s"] == LIMITS.timeout_s


def _random_changes(chance: random.Random, pair: Pair) -> Iterator[tuple[str, object]]:
    seen = pair.seen
    if chance.random() < 0.2:
        yield "is_enable_pressed", not seen.is_enable_pressed
    yield "is_stop_pressed", chance.random() < 0.01
    if chance.random() < 0.15:
        yield "holder_request", chance.choice([0, 7, 7, 7, 9])
    if chance.random() < 0.8:
        yield "heartbeat", (seen.heartbeat + 1) % 2**16
    if chance.random() < 0.3:
        yield "sequence", (seen.sequence + chance.choice([1, 1, 1, 2, 2**15 - 1, 2**15, 2**16 - 1])) % 2**16
    if chance.random() < 0.3:
        yield "op_request_pct", chance.choice([20.0, 40.0, 55.5, 10.0, 90.0, 9.0, 91.0, NAN, math.inf])
    yield "pv_eu", chance.choice([78.0] * 60 + [40.0, 95.0, 39.0, NAN])
    yield "is_pv_failed", chance.random() < 0.05
    if chance.random() < 0.1:
        yield "mode", chance.choice([0, 0, 0, 1, 2])
    if chance.random() < 0.02:
        yield "op_pct", chance.choice([30.0, 45.0, 60.0])


def test_a_long_random_walk_finds_no_difference() -> None:
    chance = random.Random(204)
    pair = Pair.new()
    moves: Counter[tuple[int, int]] = Counter()
    passed_on = given_back = 0
    for _ in range(20_000):
        if chance.random() < 0.001:
            pair.restart()
        before, op_pct, count = state_of(pair), pair.seen.op_pct, pair.guard.op_effect_count
        changes = dict(_random_changes(chance, pair))
        pair.step(chance.choice([50] * 40 + [2500, 61_000]), **changes)
        moves[before, state_of(pair)] += 1
        passed_on += pair.guard.op_effect_count > count
        given_back += (before, state_of(pair)) == (1, 2) and pair.seen.op_pct != changes.get("op_pct", op_pct)
    visited = {(0, 0), (0, 1), (1, 1), (1, 0), (1, 2), (2, 2), (2, 0)}
    assert visited <= {move for move, times in moves.items() if times >= 20}
    assert min(passed_on, given_back) >= 20


def test_a_damaged_state_holds_nothing_and_writes_nothing() -> None:
    pair = armed_in_manual()
    pair.text.variables["guard_state"] = 7
    told = pair.text.call(block_op=45.0, sequence=9, op_request=50.0)
    assert (told["guard_state"], told["holder"], told["guard_alarm"], told["block_op"]) == (2, 0, True, 45.0)


def test_a_text_that_is_not_understood_is_refused() -> None:
    with pytest.raises(ValueError, match="not understood"):
        parse("FUNCTION_BLOCK A\nWHILE x DO\nEND_FUNCTION_BLOCK")
    with pytest.raises(ValueError, match="unknown name: y"):
        parse("FUNCTION_BLOCK A\nVAR\nx : UINT;\nEND_VAR\nx := y;\nEND_FUNCTION_BLOCK")
