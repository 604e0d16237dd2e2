"""The machine's relay on exact plants, against a recursion of our own making and against printed limit cycles."""

import itertools
import json
from collections.abc import Callable
from dataclasses import replace
from math import floor, pi
from pathlib import Path
from statistics import fmean

import numpy as np
import pytest
from scipy.signal import cont2discrete

from autotune.experiment.plan import ConvergencePlan, RelayPlan
from autotune.experiment.state import Experiment
from autotune.loop.mode import ControlAction
from tests.experiment.bench import LIMITS, Matrix, Plant, bench, first_order, plan_for, three_lags

CHECKS = {
    check["id"]: check
    for check in json.loads((Path(__file__).parents[1] / "reference" / "checks.json").read_text(encoding="utf-8"))
}
DISCARDED = 4
"""Cycles left out of the means, until the start has died away."""


def exact_hold(plant: Plant, held_s: float) -> tuple[Matrix, Matrix]:
    """State transition and input gain over a hold, by scipy's own discretisation."""
    size = len(plant.b)
    if held_s == 0.0:
        return np.eye(size), np.zeros(size)
    phi, gamma, *_ = cont2discrete((plant.a, plant.b.reshape(-1, 1), plant.c.reshape(1, -1), np.zeros((1, 1))), held_s)
    return phi, gamma[:, 0]


def sampled_relay(
    plant: Plant, scan_s: float, latency_s: float, up_pct: float, down_pct: float, hysteresis_pct: float, cycles: int
) -> tuple[float, float]:
    """Mean period and swing of a sampled relay: x+ = Phi x + Phi(h-f) Gam(f) u[k-q-1] + Gam(h-f) u[k-q].

    q whole scans and the fraction f make up dead time and latency (Astrom and Wittenmark, Computer-Controlled
    Systems, sampling with a dead time).
    """
    whole = floor((plant.delay_s + latency_s) / scan_s + 1e-9)
    fraction_s = max(0.0, plant.delay_s + latency_s - whole * scan_s)
    phi, _ = exact_hold(plant, scan_s)
    phi_late, gamma_late = exact_hold(plant, scan_s - fraction_s)
    _, gamma_early = exact_hold(plant, fraction_s)
    x, inputs, is_high = np.zeros(len(plant.b)), [0.0] * (whole + 2), True
    ups, highs, lows = [0], [0.0], [0.0]
    inputs[-1] = up_pct
    for k in range(1, 10**6):
        x = phi @ x + phi_late @ gamma_early * inputs[-2 - whole] + gamma_late * inputs[-1 - whole]
        pv = float(plant.c @ x)
        highs[-1], lows[-1] = max(highs[-1], pv), min(lows[-1], pv)
        if is_high and pv > hysteresis_pct:
            is_high = False
        elif not is_high and pv < -hysteresis_pct:
            is_high = True
            ups.append(k)
            highs.append(pv)
            lows.append(pv)
        inputs.append(up_pct if is_high else -down_pct)
        if len(ups) > cycles:
            break
    periods = [scan_s * (after - before) for before, after in itertools.pairwise(ups)]
    swings = [0.5 * (high - low) for high, low in zip(highs, lows, strict=True)][:-1]
    return fmean(periods[DISCARDED:]), fmean(swings[DISCARDED:])


def run(
    plant: Plant,
    scan_s: float,
    *,
    latency_s: float = 0.0,
    up_pct: float = 10.0,
    down_pct: float = 10.0,
    hysteresis_pct: float = 0.0,
    cycles: int = 12,
    action: ControlAction = ControlAction.REVERSE,
) -> Experiment:
    """A test of exactly so many cycles; a latency of the wire delays every write."""
    plan = plan_for(
        replace(LIMITS, cycles_at_most=cycles, op_move_s=10.0 * scan_s, dead_time_s=plant.delay_s + latency_s),
        RelayPlan(up_pct, down_pct, hysteresis_pct=hysteresis_pct),
        convergence=ConvergencePlan(cycles_to_agree=10**3),
        scan_s=scan_s,
        look_around_s=10 * scan_s,
        baseline_s=10 * scan_s,
        action=action,
    )
    made = bench(plan, plant, latency_s=latency_s)
    return made.run()


def seen(experiment: Experiment) -> tuple[float, float]:
    cycles = experiment.whole_cycles[DISCARDED:]
    assert len(cycles) >= 8
    return fmean(cycle.period_s for cycle in cycles), fmean(cycle.pv_amplitude_pct for cycle in cycles)


@pytest.mark.parametrize("latency_scans", [0.0, 0.4, 1.0, 2.0])
@pytest.mark.parametrize(
    ("make", "scan_s"),
    [
        (three_lags, 0.0363),
        (lambda: three_lags(delay_s=0.31), 0.1),
        (lambda: first_order(2.0, 10.0, 3.0), 0.25),
    ],
)
def test_period_and_swing_agree_with_the_exact_hold_recursion(
    make: Callable[[], Plant], scan_s: float, latency_scans: float
) -> None:
    latency_s = latency_scans * scan_s
    period_s, swing_pct = seen(run(make(), scan_s, latency_s=latency_s, down_pct=7.0, hysteresis_pct=0.2))
    expected_s, expected_pct = sampled_relay(make(), scan_s, latency_s, 10.0, 7.0, 0.2, cycles=12)
    assert period_s == pytest.approx(expected_s, rel=0.005)
    assert swing_pct == pytest.approx(expected_pct, rel=0.005)


def test_direct_action_mirrors_the_oscillation() -> None:
    up = run(three_lags(), 0.1, up_pct=10.0, down_pct=7.0, hysteresis_pct=0.2)
    plant = three_lags(gain=-1.0)
    mirrored = run(plant, 0.1, up_pct=10.0, down_pct=7.0, hysteresis_pct=0.2, action=ControlAction.DIRECT)
    assert seen(mirrored) == pytest.approx(seen(up), rel=1e-6)


@pytest.mark.parametrize(("latency_scans", "period_pct", "gain_pct"), [(0.0, 2.5, -5.5), (1.0, 6.5, -13.0)])
def test_sampling_alone_lengthens_the_period_and_lowers_the_rough_gain(
    latency_scans: float, period_pct: float, gain_pct: float
) -> None:
    """RL-11 is the limit cycle of a continuous relay; at Tu/100 a sampled one differs by a computed amount."""
    check = CHECKS["RL-11"]["expected"]
    scan_s = check["Tu_exact"] / 100.0
    experiment = run(three_lags(), scan_s, latency_s=latency_scans * scan_s)
    period_s, swing_pct = seen(experiment)
    gain = 4.0 * 10.0 / (pi * swing_pct)
    assert 100.0 * (period_s / check["period"] - 1.0) == pytest.approx(period_pct, abs=0.5)
    assert 100.0 * (gain / check["Ku_DF"] - 1.0) == pytest.approx(gain_pct, abs=0.5)


def test_a_fast_scan_comes_near_the_limit_cycle_of_a_continuous_relay() -> None:
    check = CHECKS["RL-05"]
    inputs, expected = check["inputs"], check["expected"]
    plant = first_order(inputs["K"], inputs["T"], inputs["L"])
    made = run(plant, 0.02, up_pct=inputs["d"], down_pct=inputs["d"], hysteresis_pct=inputs["eps"])
    period_s, swing_pct = seen(made)
    assert period_s == pytest.approx(expected["period"], rel=0.01)
    assert swing_pct == pytest.approx(expected["a"], rel=0.01)


def test_unequal_steps_come_near_the_printed_limit_cycle_of_a_biased_relay() -> None:
    check = CHECKS["RL-08"]
    inputs, expected = check["inputs"], check["expected"]
    plant = first_order(inputs["K"], inputs["T"], inputs["L"])
    up, down = inputs["mu"] + inputs["mu0"], inputs["mu"] - inputs["mu0"]
    period_s, swing_pct = seen(run(plant, 0.02, up_pct=up, down_pct=down, hysteresis_pct=inputs["eps"]))
    assert period_s == pytest.approx(expected["Tu1"] + expected["Tu2"], rel=0.01)
    assert swing_pct == pytest.approx(0.5 * (expected["Au"] - expected["Ad"]), rel=0.01)


def test_the_observed_dead_time_is_that_of_the_plant() -> None:
    experiment = run(first_order(2.0, 10.0, 3.0), 0.1, hysteresis_pct=0.2)
    assert experiment.cycles.lag_s == pytest.approx(3.0, abs=0.11)


def test_every_sample_of_a_test_counts_in_the_time_of_its_cycles() -> None:
    experiment = run(three_lags(), 0.1, hysteresis_pct=0.2)
    starts = [cycle.from_s for cycle in experiment.whole_cycles]
    assert [cycle.from_s + cycle.period_s for cycle in experiment.whole_cycles][:-1] == pytest.approx(starts[1:])
