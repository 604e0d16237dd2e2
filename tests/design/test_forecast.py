"""What settings would do, against step-by-step simulation of the described block, closed forms and python-control."""

from dataclasses import replace
from math import exp, inf, pi, sqrt
from typing import Any

import control
import numpy as np
import pytest

from autotune.design.block_response import block_equation
from autotune.design.draws import draws_on_grid
from autotune.design.forecast import Forecast, ForecastBench, check_declared, forecast, forecast_bench
from autotune.design.held import held_plant
from autotune.design.limit_cycle import limit_cycle
from autotune.design.loop_grid import seen_plant
from autotune.design.optimum import LoopBench, loop_bench
from autotune.design.responses import (
    closed_loop,
    horizon_scans,
    load_figures,
    load_iae_pct_s,
    noise_gain_ratio,
    setpoint_figures,
)
from autotune.identify.describing_function import backlash
from autotune.identify.model import ModelWithDraws, ProcessModel
from autotune.loop.mode import ControlAction
from autotune.loop.outcome import Refusal
from autotune.loop.pid_block import PidLaw, at_rest, pid_law, step
from autotune.loop.settings import AntiWindup, BlockDescription, PidForm, PidSettings
from tests.design.plants import THREE_LAGS, checks, plant

BLOCK = BlockDescription(PidForm.IDEAL, scan_s=0.1, anti_windup=AntiWindup.STOP)
PI = PidSettings(PidForm.IDEAL, 1.2, 2.5, None)


def _bench(model: ProcessModel, block: BlockDescription = BLOCK) -> LoopBench:
    return loop_bench(seen_plant(model, block.scan_s), block)


def _ready(
    model: ModelWithDraws,
    block: BlockDescription = BLOCK,
    noise_pct: float | None = None,
    dead_band_pct: float | None = None,
) -> ForecastBench:
    bench = _bench(model.best, block)
    return forecast_bench(bench, model, draws_on_grid(model, bench.plant), noise_pct, dead_band_pct)


def _foreseen(ready: ForecastBench, settings: PidSettings = PI) -> Forecast:
    found = forecast(ready, settings)
    assert isinstance(found, Forecast), found
    return found


def _law(settings: PidSettings) -> PidLaw:
    law = pid_law(BLOCK, settings, ControlAction.REVERSE, -1e6, 1e6)
    assert isinstance(law, PidLaw)
    return law


def _simulated(
    settings: PidSettings, scans: int, sp_pct: float, load_pct: float, dead_band_pct: float = 0.0
) -> tuple[np.ndarray[Any, Any], np.ndarray[Any, Any]]:
    """(1 + s)^-3 by python-control's hold, the block scan by scan, and a valve with backlash between them."""
    held = control.c2d(control.tf2ss(control.tf([1.0], [1.0, 3.0, 3.0, 1.0])), 0.1, "zoh")
    law, state = _law(settings), np.zeros(3)
    block = at_rest(law, 0.0, 0.0, 0.0)
    pvs, ops, valve = [], [], 0.0
    for _ in range(scans):
        pv = float((held.C @ state).item())
        block, op = step(law, block, sp_pct, pv)
        pvs.append(pv)
        ops.append(op)
        valve = min(max(valve, op - dead_band_pct / 2.0), op + dead_band_pct / 2.0)
        state = held.A @ state + held.B[:, 0] * (valve + load_pct)
    return np.array(pvs), np.array(ops)


@pytest.mark.parametrize("settings", [PI, PidSettings(PidForm.IDEAL, 2.0, 3.0, 0.7)])
def test_setpoint_and_load_figures_are_those_of_the_block_scan_by_scan(settings: PidSettings) -> None:
    bench = _bench(THREE_LAGS, replace(BLOCK))
    held = held_plant(THREE_LAGS, 0.1)
    loop = closed_loop(held, block_equation(BLOCK, settings, 0.1))
    assert bench.plant.held is not None
    for sp_pct, load_pct in ((1.0, 0.0), (0.0, 1.0)):
        pv, op = _simulated(settings, 600, sp_pct, load_pct)
        figures = setpoint_figures(loop, 600) if sp_pct else load_figures(loop, 600, None)
        error = sp_pct - pv
        assert figures.iae_pct_s == pytest.approx(0.1 * float(np.sum(np.abs(error))), rel=1e-9)
        assert figures.travel_pct == pytest.approx(float(np.sum(np.abs(np.diff(op, prepend=0.0)))), rel=1e-9)
        peak = 100.0 * max(0.0, float(np.max(pv)) - 1.0) if sp_pct else float(np.max(np.abs(pv)))
        assert figures.overshoot_pct == pytest.approx(peak, abs=1e-9)
        scale = 1.0 if sp_pct else float(np.max(np.abs(pv)))
        outside = np.flatnonzero(np.abs(error) > 0.02 * scale)
        assert figures.settling_time_s == pytest.approx((outside[-1] + 1) * 0.1)
        assert figures.op_peak_pct == pytest.approx(float(np.max(np.abs(op))))


def test_a_quarter_decay_comes_out_of_the_response() -> None:
    """RB-06: overshoot 50 % for zeta 0.2155 on s^2 + s + K, sampled finely."""
    zeta = checks()["RB-06"]["expected"]["zeta"]
    model = plant(1.0, integrators=1)
    scan_s = 1e-3
    block = replace(BLOCK, scan_s=scan_s)
    loop = closed_loop(
        held_plant(model, scan_s),
        block_equation(block, PidSettings(PidForm.IDEAL, 1.0 / (4.0 * zeta**2), None), scan_s),
    )
    figures = setpoint_figures(loop, 20_000)
    assert figures.overshoot_pct == pytest.approx(50.0, abs=0.5)
    assert figures.reversals > 4


def test_the_integral_of_the_error_after_a_load_is_ti_over_k() -> None:
    """Elementary: in the end the integral term holds the load; a horizon that is too short gets its tail back."""
    settings = PidSettings(PidForm.IDEAL, 0.5, 5.0, None)
    loop = closed_loop(held_plant(THREE_LAGS, 0.1), block_equation(BLOCK, settings, 0.1))
    assert load_iae_pct_s(loop, 5000, None) == pytest.approx(10.0, rel=1e-6)
    assert load_iae_pct_s(loop, 150, 10.0) == pytest.approx(10.0, rel=1e-6)
    assert load_figures(loop, 150, 10.0).iae_pct_s == pytest.approx(10.0, rel=1e-6)
    assert load_iae_pct_s(loop, 150, None) < 9.9


def test_a_horizon_ends_however_slow_the_integral_is() -> None:
    """A rule on a plant that nearly integrates can ask for days."""
    assert horizon_scans(0.1, 10.0, 1e9) == 4000
    assert horizon_scans(0.1, 10.0, 1.0) == horizon_scans(0.1, 10.0, None) == 1200


def test_without_integral_the_offset_stays_and_settling_counts_from_it() -> None:
    loop = closed_loop(held_plant(THREE_LAGS, 0.1), block_equation(BLOCK, PidSettings(PidForm.IDEAL, 1.0, None), 0.1))
    figures = load_figures(loop, 600, None)
    assert figures.settling_time_s is not None
    assert figures.settling_time_s < 15.0
    assert setpoint_figures(loop, 600).settling_time_s is None


def test_a_response_that_never_leaves_the_band_has_settled_at_once() -> None:
    """A load step that PV doesn't see within the horizon."""
    model = plant(1.0, dead_time_s=100.0)
    loop = closed_loop(held_plant(model, 0.1), block_equation(BLOCK, PI, 0.1))
    assert load_figures(loop, 50, None).settling_time_s == 0.0


def test_noise_on_op_is_that_of_a_long_simulation() -> None:
    settings = PidSettings(PidForm.IDEAL, 2.0, 3.0, 0.7)
    loop = closed_loop(held_plant(THREE_LAGS, 0.1), block_equation(BLOCK, settings, 0.1))
    noise = np.random.default_rng(7).standard_normal(40_000)
    op = control.forced_response(
        control.tf(
            np.pad(loop.op_from_noise, (0, len(loop.denominator) - len(loop.op_from_noise))), loop.denominator, 0.1
        ),
        inputs=noise,
    ).outputs
    assert noise_gain_ratio(loop, 2000) == pytest.approx(float(np.std(op)), rel=0.03)


def _drawn() -> ModelWithDraws:
    rng = np.random.default_rng(2)
    draws = tuple(plant(a, b, c, gain=d) for a, b, c, d in np.exp(0.1 * rng.standard_normal((25, 4))))
    return ModelWithDraws(THREE_LAGS, draws)


def test_bands_hold_nine_of_ten_draws_and_the_best_estimate() -> None:
    found = _foreseen(_ready(_drawn(), noise_pct=0.1))
    for band in (
        found.peak_sensitivity,
        found.overshoot_pct,
        found.setpoint_iae_pct_s,
        found.load_peak_pct,
        found.load_iae_pct_s,
    ):
        assert band is not None
        assert band.low <= band.best <= band.high
        assert band.level == 0.9
    assert found.peak_sensitivity is not None
    assert found.peak_sensitivity.low < found.peak_sensitivity.best < found.peak_sensitivity.high
    assert found.setpoint is not None
    assert found.overshoot_pct is not None
    assert found.overshoot_pct.best == found.setpoint.overshoot_pct
    assert found.unstable_share_ratio == 0.0
    assert found.op_noise_pct == pytest.approx(0.12, rel=0.1)  # K = 1.2: a little more through the loop
    assert found.limit_cycle is None
    assert found.warnings == ()


def test_without_draws_a_band_is_the_best_estimate() -> None:
    found = _foreseen(_ready(ModelWithDraws(THREE_LAGS)))
    assert found.load_iae_pct_s is not None
    assert found.load_iae_pct_s.low == found.load_iae_pct_s.high
    assert found.load_iae_pct_s.level is None
    assert found.op_noise_pct is None


def test_unstable_settings_are_named_and_have_no_figures() -> None:
    found = _foreseen(_ready(_drawn()), PidSettings(PidForm.IDEAL, 9.0, 2.0, None))
    assert not found.margins.is_stable
    assert found.setpoint is None
    assert found.peak_sensitivity is None
    assert found.unstable_share_ratio == pytest.approx(1.0)
    assert "Unstable on the identified model" in found.warnings[0]


def test_settings_near_instability_are_named_with_the_share_of_draws_that_run_away() -> None:
    found = _foreseen(_ready(_drawn()), PidSettings(PidForm.IDEAL, 4.4, 3.0, None))
    assert found.margins.is_stable
    assert 0.0 < found.unstable_share_ratio < 1.0
    assert any("of what the model may be instead" in sentence for sentence in found.warnings)
    assert any("Near instability" in sentence for sentence in found.warnings)
    assert any("executions of the block may be lost" in sentence for sentence in found.warnings)


@pytest.mark.parametrize(
    ("block", "settings", "code"),
    [
        (replace(BLOCK, scan_s=None), PI, "SCAN_NOT_DECLARED"),
        (replace(BLOCK, anti_windup=AntiWindup.NOT_DECLARED), PI, "ANTI_WINDUP_NOT_DECLARED"),
        (replace(BLOCK, form=PidForm.SERIES), PidSettings(PidForm.IDEAL, 1.0, 1.0, 1.0), "SERIES_CANNOT_HOLD"),
    ],
)
def test_what_decides_a_forecast_and_is_not_declared_refuses_it(
    block: BlockDescription, settings: PidSettings, code: str
) -> None:
    refusal = check_declared(block, settings)
    assert isinstance(refusal, Refusal)
    assert refusal.code == code


def test_an_undeclared_anti_windup_refuses_the_whole_forecast() -> None:
    ready = _ready(ModelWithDraws(THREE_LAGS), replace(BLOCK, anti_windup=AntiWindup.NOT_DECLARED))
    refusal = forecast(ready, PI)
    assert isinstance(refusal, Refusal)
    assert refusal.code == "ANTI_WINDUP_NOT_DECLARED"


RINGING = PidSettings(PidForm.IDEAL, 3.2, 2.2, None)
"""Near instability on three lags (Ms 7.9): a dead band keeps it swinging."""


def test_a_dead_band_keeps_a_thin_loop_swinging_as_simulated() -> None:
    """-1/N of DF-08 against the loop; the block scan by scan with a valve of that backlash agrees within 5 %."""
    expected = checks()["DF-08"]["expected"]
    assert backlash(0.5, 1.0) == pytest.approx(complex(expected["re"], expected["im"]))
    cycle = limit_cycle(_bench(THREE_LAGS), RINGING, 1.0)
    assert cycle is not None
    pv, op = _simulated(RINGING, 6000, 0.0, 1.0, dead_band_pct=1.0)
    late_pv, late_op = pv[4000:] - np.mean(pv[4000:]), op[4000:]
    crossings = np.flatnonzero((late_pv[:-1] < 0.0) & (late_pv[1:] >= 0.0))
    assert len(crossings) > 10
    period_s = 0.1 * (crossings[-1] - crossings[0]) / (len(crossings) - 1)
    assert cycle.period_s == pytest.approx(period_s, rel=0.02)
    assert cycle.pv_amplitude_pct == pytest.approx(0.5 * float(np.ptp(late_pv)), rel=0.05)
    assert cycle.op_amplitude_pct == pytest.approx(0.5 * float(np.ptp(late_op)), rel=0.05)


def test_the_limit_cycle_is_a_crossing_that_pythons_control_finds_too() -> None:
    cycle = limit_cycle(_bench(THREE_LAGS, replace(BLOCK, scan_s=1e-3)), replace(RINGING, controller_gain=3.5), 1.0)
    loop = control.tf([3.5 * 2.2, 3.5], [2.2, 0.0]) * control.tf([1.0], [1.0, 3.0, 3.0, 1.0])
    nonlinear = control.friction_backlash_nonlinearity(1.0)
    crossings = control.describing_function_response(loop, nonlinear, np.geomspace(0.55, 40.0, 300)).intersections
    assert cycle is not None
    assert any(
        2.0 * pi / frequency == pytest.approx(cycle.period_s, rel=0.02)
        and amplitude == pytest.approx(cycle.op_amplitude_pct, rel=0.03)
        for amplitude, frequency in crossings
    )


def test_a_calm_loop_swallows_the_dead_band() -> None:
    assert limit_cycle(_bench(THREE_LAGS), PidSettings(PidForm.IDEAL, 0.6, 2.5, None), 1.0) is None


def test_a_limit_cycle_is_told_with_period_and_swing() -> None:
    found = _foreseen(_ready(ModelWithDraws(THREE_LAGS), dead_band_pct=1.0), RINGING)
    assert found.limit_cycle is not None
    assert "Repair the valve first" in found.warnings[-1]


def test_reversals_are_not_counted_for_ripple() -> None:
    """Closed form: a well damped second order turns back as often as its ring exceeds half a percent of the move."""
    zeta, w = 0.5, 1.0
    ring = exp(-pi * zeta / sqrt(1.0 - zeta**2))
    turns = sum(1 for k in range(1, 20) if ring**k > 0.005)
    model = plant(1.0 / (2.0 * zeta * w), gain=1.0, integrators=1)
    gain = w / (2.0 * zeta)
    scan_s = 0.01
    loop = closed_loop(
        held_plant(model, scan_s),
        block_equation(replace(BLOCK, scan_s=scan_s), PidSettings(PidForm.IDEAL, gain, None), scan_s),
    )
    assert abs(load_figures(loop, 4000, None).reversals - turns) <= 1
    assert inf > load_figures(loop, 4000, None).travel_pct > 1.0
