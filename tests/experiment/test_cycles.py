"""Cycle by cycle."""

import json
import math
from dataclasses import replace
from pathlib import Path

import pytest

from autotune.experiment.cycles import (
    Cycles,
    RelayCycle,
    has_converged,
    start_cycles,
    with_move_up,
    with_new_steps,
    with_sample,
    with_switch,
)
from autotune.experiment.plan import ConvergencePlan

PLAN = ConvergencePlan(cycles_to_agree=3, agreement_pct=5.0, cycles_to_discard=1)
CHECKS = json.loads((Path(__file__).parents[1] / "reference" / "checks.json").read_text(encoding="utf-8"))


def cycle(
    period_s: float = 4.0, swing_pct: float = 2.0, mean_pct: float = 40.0, *, is_usable: bool = True
) -> RelayCycle:
    return RelayCycle(0.0, period_s, swing_pct, mean_pct, 5.0, is_usable)


def triangles(count: int, period_s: float = 4.0, swing_pct: float = 2.0) -> Cycles:
    """Cycles of a triangular PV about 40 %, up-switch at each minimum crossing, sampled ten times a second."""
    cycles, switched_s, is_high = start_cycles(0.0, 40.0, is_up=True), 0.0, True
    steps = round(period_s * 10)
    for k in range(1, count * steps + 1):
        t_s = 0.1 * k
        turn = (k % steps) / steps
        pv_pct = 40.0 + swing_pct * (
            4.0 * turn if turn < 0.25 else 2.0 - 4.0 * turn if turn < 0.75 else 4.0 * turn - 4.0
        )
        push = 1.0 if is_high else -1.0
        cycles = with_sample(cycles, t_s, pv_pct, -push * (pv_pct - 40.0))
        if k % (steps // 2) == 0:
            cycles = with_switch(cycles, t_s, switched_s, push * (pv_pct - 40.0))
            switched_s, is_high = t_s, not is_high
            if is_high:
                cycles = with_move_up(cycles, PLAN, t_s, pv_pct, 5.0)
    return cycles


def test_period_swing_and_mean_of_a_cycle_are_those_of_the_signal() -> None:
    cycles = triangles(4)
    assert [seen.period_s for seen in cycles.whole] == pytest.approx([4.0] * 4)
    assert [seen.pv_amplitude_pct for seen in cycles.whole] == pytest.approx([2.0] * 4)
    assert [seen.pv_mean_pct for seen in cycles.whole] == pytest.approx([40.0] * 4, abs=0.01)
    assert [seen.from_s for seen in cycles.whole] == pytest.approx([0.0, 4.0, 8.0, 12.0])


def test_the_rough_gain_is_the_describing_function_of_a_relay() -> None:
    check = next(check for check in CHECKS if check["id"] == "DF-01")
    seen = RelayCycle(0.0, 1.0, check["inputs"]["a"], 0.0, check["inputs"]["d"], is_usable=True)
    assert seen.rough_ultimate_gain == pytest.approx(check["expected"]["N"], rel=1e-7)
    assert replace(seen, pv_amplitude_pct=0.0).rough_ultimate_gain is None


def test_the_first_cycles_never_count() -> None:
    assert [seen.is_usable for seen in triangles(4).whole] == [False, True, True, True]
    assert len(triangles(4).usable) == 3


def test_two_usable_cycles_are_enough_for_findings() -> None:
    assert not triangles(2).has_enough_for_findings
    assert triangles(3).has_enough_for_findings


def test_a_test_that_moves_down_first_counts_its_cycles_from_the_first_move_up() -> None:
    cycles = start_cycles(0.0, 40.0, is_up=False)
    cycles = with_move_up(cycles, PLAN, 2.0, 39.0, 5.0)
    assert cycles.whole == ()
    cycles = with_move_up(cycles, PLAN, 6.0, 39.0, 5.0)
    cycles = with_move_up(cycles, PLAN, 10.0, 39.0, 5.0)
    assert [(seen.from_s, seen.is_usable) for seen in cycles.whole] == [(2.0, False), (6.0, True)]


def test_two_moves_up_at_one_instant_are_no_cycle() -> None:
    cycles = with_move_up(start_cycles(1.0, 40.0, is_up=True), PLAN, 1.0, 40.0, 5.0)
    assert cycles.whole == ()


@pytest.mark.parametrize(("is_up", "usable"), [(True, [False, True]), (False, [False, False, True])])
def test_after_a_change_of_the_steps_cycles_are_discarded_anew(is_up: bool, usable: list[bool]) -> None:
    cycles = replace(with_new_steps(start_cycles(0.0, 40.0, is_up=True), is_up), whole=())
    for k in range(1, len(usable) + 1):
        cycles = with_move_up(cycles, PLAN, 4.0 * k, 40.0, 5.0)
    assert [seen.is_usable for seen in cycles.whole] == usable


def test_the_lag_is_the_time_from_a_switch_to_the_turn_and_needs_a_switch_before_it() -> None:
    cycles = start_cycles(0.0, 40.0, is_up=True)
    cycles = with_sample(cycles, 1.0, 41.0, -1.0)
    cycles = with_switch(cycles, 1.0, 0.0, against_pct=1.0)
    assert cycles.lag_s is None
    for t_s, against_pct in ((1.5, 1.4), (2.0, 1.6), (2.5, 1.3), (3.0, -0.5)):
        cycles = with_sample(cycles, t_s, 40.0 + against_pct, against_pct)
    cycles = with_switch(cycles, 3.0, 1.0, against_pct=0.5)
    assert cycles.lag_s == pytest.approx(1.0)
    assert cycles.half_s == pytest.approx(2.0)


def test_drift_is_the_move_of_the_mean_between_the_last_two_usable_cycles() -> None:
    assert Cycles(whole=(cycle(),)).drift_pct_per_s is None
    assert Cycles(whole=(cycle(), cycle(mean_pct=41.0))).drift_pct_per_s == pytest.approx(0.25)


@pytest.mark.parametrize(
    ("whole", "converged"),
    [
        ((cycle(), cycle(), cycle()), True),
        ((cycle(), cycle()), False),
        ((cycle(is_usable=False), cycle(), cycle()), False),
        ((cycle(4.0), cycle(4.1), cycle(4.2)), True),  # 0.2 s of 4.1 s are 4.9 %
        ((cycle(4.0), cycle(4.1), cycle(4.3)), False),
        ((cycle(swing_pct=2.0), cycle(swing_pct=2.1), cycle(swing_pct=2.0)), True),
        ((cycle(swing_pct=2.0), cycle(swing_pct=2.2), cycle(swing_pct=2.0)), False),
        ((cycle(9.0), cycle(), cycle(), cycle()), True),
    ],
)
def test_the_last_cycles_have_to_agree_in_period_and_swing(whole: tuple[RelayCycle, ...], converged: bool) -> None:
    assert has_converged(Cycles(whole=whole), PLAN, 0.0, 0.0) is converged


def test_what_scan_and_noise_hide_is_no_disagreement() -> None:
    assert has_converged(Cycles(whole=(cycle(4.0), cycle(4.1), cycle(4.3))), PLAN, 0.1, 0.0)
    swings = (cycle(swing_pct=2.0), cycle(swing_pct=2.2), cycle(swing_pct=2.0))
    assert has_converged(Cycles(whole=swings), PLAN, 0.0, 0.1)
    assert not has_converged(Cycles(whole=swings), PLAN, 0.0, math.nan)
