"""The robust optimum against brute force, scipy and its own limits; the averaging level against closed forms."""

import json
from dataclasses import replace
from functools import cache
from math import inf, pi
from typing import Any

import numpy as np
import pytest
from scipy.optimize import brentq

from autotune.design.averaging import (
    averaging_p,
    averaging_pi,
    damping_ratio,
    least_rate_pct_per_s,
    outflow_overshoot_ratio,
)
from autotune.design.choices import Caution, Purpose
from autotune.design.draws import DrawsOnGrid, draws_on_grid, quantile_ratio
from autotune.design.gain_intervals import LoopLimits, admissible_tops
from autotune.design.loop_grid import seen_plant
from autotune.design.margins import margins
from autotune.design.model_laws import load_table, setpoint_table
from autotune.design.optimum import LoopBench, best_pi, best_pid, iae_pct_s, keeps, loop_bench
from autotune.design.responses import load_figures, setpoint_figures
from autotune.design.robust import (
    GUARDED_SENSITIVITY,
    PEAK_SENSITIVITY,
    RobustOptimum,
    guarded_sensitivity,
    robust_optimum,
)
from autotune.identify.closed_forms import Fotd
from autotune.identify.model import ModelWithDraws, ProcessModel
from autotune.loop.outcome import Refusal
from autotune.loop.settings import BlockDescription, PidForm, PidSettings
from tests.design.plants import REFERENCE, THREE_LAGS, checks, plant

IDEAL = BlockDescription(PidForm.IDEAL)
CALM = LoopLimits(1.4, 1.4)


def _bench(model: ProcessModel, scans: int = 100, block: BlockDescription = IDEAL, period_s: float = 0.0) -> LoopBench:
    continuous = seen_plant(model, None)
    scan_s = (period_s or 2.0 * pi / continuous.ultimate_rad_per_s) / scans
    return loop_bench(seen_plant(model, scan_s), replace(block, scan_s=scan_s))


@cache
def _batch() -> dict[str, dict[str, Any]]:
    batch = json.loads((REFERENCE / "reference_batch.json").read_text(encoding="utf-8"))["processes"]
    return {entry["id"]: entry for entry in batch}


@cache
def _optima() -> dict[str, Any]:
    optima: dict[str, Any] = json.loads((REFERENCE / "settings_optima.json").read_text(encoding="utf-8"))["optima"]
    return optima


def _of_batch(name: str) -> LoopBench:
    entry = _batch()[name]
    model = plant(
        *entry["lags_s"],
        gain=entry["gain"],
        dead_time_s=entry["dead_time_s"],
        zeros_s=(entry["zero_s"],) if entry["zero_s"] else (),
        integrators=int(entry["integrating"]),
        quadratic=tuple(entry["quadratic"]) if entry["quadratic"] else None,
    )
    return _bench(model, period_s=entry["ultimate_period_s"])


@pytest.mark.parametrize(
    "name",
    [
        *("P1 T=0.02", "P1 T=1.0", "P1 T=50", "P2 T=1", "P3 T=0.1", "P4 n=5"),
        *("P5 a=0.3", "P6 L1=0.5", "P7 T=2 L1=0.5", "P8 a=0.5", "P9 T=0.5"),
    ],
)
def test_pi_and_pid_are_as_good_as_brute_force(name: str) -> None:
    """Optima by ``tests/reference/settings_optima.py`` on the batch of Astrom and Hagglund 2004, kappa <= 4."""
    name = name if name in _optima() else name.replace("1.0", "1")
    bench = _of_batch(name)
    pi_found = best_pi(bench, CALM)
    assert pi_found is not None
    pid_found = best_pid(bench, CALM, pi_found)
    for found, letters in ((pi_found, "PI"), (pid_found, "PID")):
        assert found.iae_pct_s <= 1.005 * _optima()[name][letters]["iae"]
        held = margins(bench.plant, bench.block, found.settings)
        assert held.is_stable
        assert held.peak_sensitivity == pytest.approx(1.4, rel=0.005)
        assert (held.peak_complementary_sensitivity or inf) <= 1.4 * 1.005


def test_every_gap_between_forbidden_gains_is_found() -> None:
    """By trying: a gain is admissible exactly below a top, down to the gap's foot; on a loop with two gaps."""
    bench = _bench(plant(quadratic=(1.0, 0.3), gain=1.0, integrators=1, dead_time_s=0.1))
    controller = bench.terms.response(4.0, 1.0)
    loop = bench.plant.gain * controller
    limits = LoopLimits(1.6, 1.6, 5.0)
    tops = admissible_tops(loop, controller, limits)

    def is_admissible(gain: float) -> bool:
        distance = np.abs(1.0 + gain * loop)
        return bool(
            np.max(1.0 / distance) <= 1.6
            and np.max(gain * np.abs(loop) / distance) <= 1.6
            and np.max(gain * np.abs(controller) / distance) <= 5.0
        )

    gains = np.geomspace(1e-6, 1e3, 4000)
    allowed = np.array([is_admissible(float(gain)) for gain in gains])
    ends = gains[:-1][allowed[:-1] & ~allowed[1:]]
    assert len(ends) >= 1
    for end in ends:
        assert np.min(np.abs(np.log(tops / end))) < 0.01
    assert not np.any(np.isinf(tops))  # noise bounds the gain from above


def test_nothing_forbidden_leaves_the_gain_without_a_bound() -> None:
    assert admissible_tops(np.array([1.0 + 0.0j]), np.ones(1, dtype=complex), CALM).tolist() == [inf]


def test_noise_on_op_bounds_the_gain() -> None:
    bench = _bench(THREE_LAGS)
    free = best_pi(bench, CALM)
    bound = best_pi(bench, LoopLimits(1.4, 1.4, 0.5))
    assert free is not None
    assert bound is not None
    assert free.settings.controller_gain > 0.6
    assert bound.settings.controller_gain < 0.55
    assert keeps(bench, LoopLimits(1.4, 1.4, 0.5), bound.settings)
    assert not keeps(bench, LoopLimits(1.4, 1.4, 0.5), free.settings)
    assert keeps(bench, CALM, free.settings)
    assert not keeps(bench, CALM, replace(free.settings, controller_gain=20.0))


def test_an_optimum_needs_a_scan() -> None:
    with pytest.raises(ValueError, match="scan"):
        loop_bench(seen_plant(THREE_LAGS, None), IDEAL)


def test_a_plant_that_no_pi_can_hold_calmly_is_refused() -> None:
    """Two integrators under a PI: the phase never rises above -180 degrees, so that no gain is stable."""
    double = ProcessModel((1.0,), (1.0, 0.0, 0.0), 0.5)
    bench = _bench(double, period_s=4.0)
    draws = draws_on_grid(ModelWithDraws(double), bench.plant)
    refusal = robust_optimum(bench, draws, Purpose.REGULATE, Caution.MIDDLE)
    assert isinstance(refusal, Refusal)
    assert refusal.code == "NO_ADMISSIBLE_GAIN"


def test_a_quick_block_is_simulated_at_a_scan_worth_computing() -> None:
    """A scan of Tu/5000: the response of the longer one, less its hold's delay, has the same error."""
    quick, slow = _bench(plant(3.0, 1.0, dead_time_s=1.0), 5000), _bench(plant(3.0, 1.0, dead_time_s=1.0), 200)
    assert quick.simulated.scan_s == pytest.approx(slow.simulated.scan_s, rel=0.01)
    settings = PidSettings(PidForm.IDEAL, 1.0, 4.0, None)
    assert iae_pct_s(quick, settings) == pytest.approx(iae_pct_s(slow, settings), rel=0.01)


@pytest.mark.parametrize("criterion", ["IAE", "ITAE"])
def test_the_tables_for_lags_with_dead_time_are_near_the_numerical_optimum(criterion: str) -> None:
    """TR-LOP-OPT: costs of table and printed optimum on this room's own exact responses, L/T = 0.5."""
    expected = checks()["TR-LOP-OPT"]["expected"]
    bench = _bench(plant(1.0, dead_time_s=0.5), 200)
    fotd = Fotd(1.0, 1.0, 0.5)
    load = {"IAE": ((0.984, -0.986), (0.608, -0.707)), "ITAE": ((0.859, -0.977), (0.674, -0.68))}[criterion]
    setpoint = {"IAE": ((0.758, -0.861), (1.02, -0.323)), "ITAE": ((0.586, -0.916), (1.03, -0.165))}[criterion]

    def cost(kind: str, gain: float, ti_s: float) -> float:
        loop = bench.loop(PidSettings(PidForm.IDEAL, gain, ti_s, None))
        top = loop.pv_from_load if kind == "load" else loop.pv_from_sp
        error = np.abs(loop.step(top, 4000) - (0.0 if kind == "load" else 1.0))
        weight = np.arange(4000) * loop.scan_s if criterion == "ITAE" else 1.0
        return float(np.sum(weight * error))

    for kind, terms in (("load", load_table(fotd, *load, None)), ("sp", setpoint_table(fotd, *setpoint, None))):
        table, best = expected[f"{kind}_{criterion}_table"], expected[f"{kind}_{criterion}_opt"]
        assert [terms[0], terms[1]] == pytest.approx(table, rel=1e-3)
        ratio = cost(kind, *table) / cost(kind, *best)
        assert ratio == pytest.approx(expected[f"{kind}_{criterion}_cost_ratio"], rel=0.01)


LAGGING = plant(10.0, 3.0, gain=2.0, dead_time_s=2.0)


def _drawn(spread: float = 0.06, count: int = 20) -> ModelWithDraws:
    rng = np.random.default_rng(4)
    draws = tuple(
        plant(10.0 * a, 3.0 * b, gain=2.0 * c, dead_time_s=2.0 * d)
        for a, b, c, d in np.exp(spread * rng.standard_normal((count, 4)))
    )
    return ModelWithDraws(LAGGING, draws)


def _optimum(
    purpose: Purpose,
    caution: Caution = Caution.MIDDLE,
    model: ModelWithDraws | None = None,
    block: BlockDescription = IDEAL,
    noise_pct: float | None = None,
) -> tuple[LoopBench, DrawsOnGrid, RobustOptimum]:
    bench = _bench(LAGGING, block=block)
    draws = draws_on_grid(model or _drawn(), bench.plant)
    found = robust_optimum(bench, draws, purpose, caution, noise_pct)
    assert isinstance(found, RobustOptimum)
    return bench, draws, found


def test_caution_is_paid_in_error_and_bought_in_margin() -> None:
    errors = []
    for caution in Caution:
        bench, draws, found = _optimum(Purpose.REGULATE, caution)
        errors.append(found.iae_pct_s)
        held = margins(bench.plant, bench.block, found.settings).peak_sensitivity
        assert held is not None
        assert held <= PEAK_SENSITIVITY * 1.003
        if caution is Caution.BRISK:
            assert found.guarded_sensitivity is None
        else:
            assert found.guarded_sensitivity is not None
            assert found.guarded_sensitivity <= GUARDED_SENSITIVITY
            assert guarded_sensitivity(bench, draws, caution, found.settings) == found.guarded_sensitivity
    assert errors == sorted(errors)
    assert errors[-1] > errors[0]


def test_draws_that_no_back_off_can_guard_are_told() -> None:
    """One draw of five runs away under any gain: the share that is guarded includes it."""
    wild = ProcessModel((1e6,), (1.0, 1.0, 0.0), 50.0)
    model = ModelWithDraws(LAGGING, (LAGGING, LAGGING, LAGGING, LAGGING, wild))
    _, _, found = _optimum(Purpose.REGULATE, Caution.CAREFUL, model)
    assert found.guarded_sensitivity is not None
    assert found.guarded_sensitivity > GUARDED_SENSITIVITY


def test_weights_count() -> None:
    ratios, shares = np.array([3.0, 1.0, 2.0]), np.array([0.05, 0.6, 0.35])
    assert quantile_ratio(ratios, shares, 0.5) == 1.0
    assert quantile_ratio(ratios, shares, 0.9) == 2.0
    assert quantile_ratio(ratios, shares, 1.0) == 3.0


def test_the_least_error_after_an_upset_is_for_regulate() -> None:
    """No published PI or PID of the same Ms on this plant has less, and the purposes order as their names say."""
    figures = {}
    for purpose in (Purpose.REGULATE, Purpose.FOLLOW, Purpose.GENTLE):
        bench, _, found = _optimum(purpose, Caution.BRISK)
        loop = bench.loop(found.settings)
        lasting = (found.settings.integral_time_s or inf) / found.settings.controller_gain
        figures[purpose] = (setpoint_figures(loop, bench.scans), load_figures(loop, bench.scans, lasting))
    regulate, follow, gentle = (figures[purpose] for purpose in (Purpose.REGULATE, Purpose.FOLLOW, Purpose.GENTLE))
    assert regulate[1].iae_pct_s < min(follow[1].iae_pct_s, gentle[1].iae_pct_s)
    assert follow[0].iae_pct_s < min(regulate[0].iae_pct_s, gentle[0].iae_pct_s)
    assert follow[0].overshoot_pct <= 1.0
    assert gentle[0].travel_pct + gentle[1].travel_pct < min(
        regulate[0].travel_pct + regulate[1].travel_pct, follow[0].travel_pct + follow[1].travel_pct
    )


@pytest.mark.parametrize("purpose", [Purpose.FOLLOW, Purpose.GENTLE])
def test_an_integrating_loop_gets_times_within_reach(purpose: Purpose) -> None:
    """Without overshoot an integrator would like no integral at all; and a short one leaves no admissible gain."""
    model = plant(1.0, gain=0.3, dead_time_s=1.0, integrators=1)
    bench = _bench(model)
    found = robust_optimum(bench, draws_on_grid(ModelWithDraws(model), bench.plant), purpose, Caution.BRISK)
    assert isinstance(found, RobustOptimum)
    assert (found.settings.integral_time_s or inf) <= 60.0 * bench.period_s
    assert keeps(bench, LoopLimits(1.401, 1.401), found.settings)


def test_derivative_is_chosen_by_what_it_buys_and_that_is_said() -> None:
    _, _, lagging = _optimum(Purpose.REGULATE)
    assert lagging.settings.derivative_time_s is not None
    assert "Derivative lessens the error after an upset by" in lagging.because
    bench, _, follow = _optimum(Purpose.FOLLOW)
    assert follow.settings.derivative_time_s is not None
    assert "setpoint step" in follow.because
    dead = plant(0.1, dead_time_s=2.0)
    bench = _bench(dead)
    found = robust_optimum(bench, draws_on_grid(ModelWithDraws(dead), bench.plant), Purpose.REGULATE, Caution.MIDDLE)
    assert isinstance(found, RobustOptimum)
    assert found.settings.derivative_time_s is None
    assert "only" in found.because
    _, _, without = _optimum(Purpose.REGULATE, block=replace(IDEAL, has_derivative=False))
    assert without.because == "The block has no derivative."
    _, _, noisy = _optimum(Purpose.REGULATE, noise_pct=3.0)
    assert noisy.settings.derivative_time_s is None
    assert noisy.settings.controller_gain <= 0.5 / 3.0 * 1.05
    _, _, gentle = _optimum(Purpose.GENTLE)
    assert gentle.settings.derivative_time_s is None


def test_a_form_that_can_not_hold_the_optimum_gets_the_best_that_it_can() -> None:
    """A series block can't have Ti < 4 Td in the ideal form."""
    _, _, ideal = _optimum(Purpose.REGULATE, Caution.BRISK)
    bench, _, series = _optimum(Purpose.REGULATE, Caution.BRISK, block=BlockDescription(PidForm.SERIES))
    ti_s, td_s = ideal.settings.integral_time_s, ideal.settings.derivative_time_s
    assert ti_s is not None
    assert td_s is not None
    assert ti_s < 4.0 * td_s
    assert series.settings.form is PidForm.SERIES
    assert series.iae_pct_s > ideal.iae_pct_s
    assert series.iae_pct_s < 1.3 * ideal.iae_pct_s
    assert margins(bench.plant, bench.block, series.settings).peak_sensitivity == pytest.approx(1.4, rel=0.005)


def test_the_least_possible_outflow_rate_is_the_ramp_just_in_time() -> None:
    """LV-01: in the check's units an inflow q on an area A is 1/A per unit of flow."""
    check = checks()["LV-01"]["inputs"]
    assert least_rate_pct_per_s(1.0 / check["A"], check["y"], check["q"]) == pytest.approx(0.8)


def test_p_alone_fills_the_band() -> None:
    """LV-02."""
    check = checks()["LV-02"]
    design = averaging_p(0.2, check["inputs"]["y"], check["inputs"]["q"])
    assert design.settings.controller_gain == check["expected"]["K"]
    assert design.outflow_rate_pct_per_s == pytest.approx(0.2 * 2.0**2 / 0.5)


@pytest.mark.parametrize("i", [0, 1, 2])
def test_the_averaging_pi_fills_the_band_at_its_peak(i: int) -> None:
    """LV-03: natural frequency and maximum outflow rate for zeta 0.4, 0.5 and 1; and the overshoots beside it."""
    check = checks()["LV-03"]
    zeta = check["inputs"]["zeta"][i]
    overshoot = outflow_overshoot_ratio(zeta)
    assert overshoot == pytest.approx((0.36, 0.30, 0.135)[i], abs=0.005)
    design = averaging_pi(1.0, 1.0, 1.0, overshoot)
    gain, ti_s = design.settings.controller_gain, design.settings.integral_time_s
    assert ti_s is not None
    assert design.damping_ratio == pytest.approx(zeta, abs=1e-6)
    assert (gain / ti_s) ** 0.5 == pytest.approx(check["expected"]["w"][i], rel=1e-6)
    assert design.outflow_rate_pct_per_s == pytest.approx(check["expected"]["max_rate"][i], abs=1e-3)


def test_the_averaging_level_peaks_at_its_band_on_the_exact_response() -> None:
    vessel = plant(gain=0.02, integrators=1)
    design = averaging_pi(0.02, 8.0, 20.0)
    bench = loop_bench(seen_plant(vessel, 0.1), replace(IDEAL, scan_s=0.1))
    loop = bench.loop(design.settings)
    level = 20.0 * loop.step(loop.pv_from_load, 4000)
    outflow = -20.0 * loop.step(loop.op_from_load, 4000)
    assert np.max(level) == pytest.approx(8.0, rel=0.01)
    assert np.max(outflow) / 20.0 - 1.0 == pytest.approx(0.3, abs=0.01)
    assert np.max(np.diff(outflow[1:])) / 0.1 == pytest.approx(design.outflow_rate_pct_per_s, rel=0.02)


def test_overshoots_beyond_reach_are_brought_to_the_nearest() -> None:
    assert damping_ratio(0.9) == 0.2
    assert damping_ratio(0.0) == 10.0
    by_search = brentq(lambda zeta: outflow_overshoot_ratio(zeta) - 0.05, 1.0, 9.0)
    assert damping_ratio(0.05) == pytest.approx(by_search)
    assert averaging_pi(1.0, 1.0, 1.0, 0.05).outflow_rate_pct_per_s > 0.736
