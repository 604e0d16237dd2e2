"""The process against closed forms, scipy's exact simulation and exact relay limit cycles."""

import json
from math import exp, pi, sin, sqrt
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import linalg, signal

from simulator.process import Process, ProcessSpec, matrix_exponential

REFERENCE = Path(__file__).parents[1] / "reference"
BATCH = json.loads((REFERENCE / "reference_batch.json").read_text())["processes"]
CHECKS = {check["id"]: check for check in json.loads((REFERENCE / "checks.json").read_text())}


def spec_of(row: dict[str, object]) -> ProcessSpec:
    return ProcessSpec(
        gain=row["gain"],  # type: ignore[arg-type]  # a row of JSON
        lags_s=tuple(row["lags_s"]),  # type: ignore[arg-type]  # a row of JSON
        dead_time_s=row["dead_time_s"],  # type: ignore[arg-type]  # a row of JSON
        zero_s=row["zero_s"],  # type: ignore[arg-type]  # a row of JSON
        quadratic=tuple(row["quadratic"]) if row["quadratic"] else None,  # type: ignore[arg-type]  # a row of JSON
        integrating=bool(row["integrating"]),
    )


def transfer_function(spec: ProcessSpec) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.float64]]:
    """G(s) without its dead time, by multiplying polynomials."""
    numerator = spec.gain * np.array([spec.zero_s, 1.0] if spec.zero_s else [1.0])
    denominator = np.array([1.0])
    for lag_s in spec.lags_s:
        denominator = np.polymul(denominator, [lag_s, 1.0])
    if spec.quadratic:
        denominator = np.polymul(denominator, [*spec.quadratic, 1.0])
    if spec.integrating:
        denominator = np.polymul(denominator, [1.0, 0.0])
    return numerator, denominator


@pytest.mark.parametrize("row", BATCH, ids=lambda row: row["id"])
def test_each_process_of_the_reference_batch_answers_as_scipy_simulates_it(row: dict[str, object]) -> None:
    spec, grid_s = spec_of(row), 0.01
    delay = round(spec.dead_time_s / grid_s)
    assert delay * grid_s == pytest.approx(spec.dead_time_s, abs=1e-12)
    changes = {0: 3.0, 7: -2.0, 8: 1.0, 40: 0.0, 133: 5.0}
    steps = 400
    inputs = np.zeros(steps)
    for at, level in changes.items():
        inputs[at:] = level
    delayed = np.concatenate([np.zeros(delay), inputs])[:steps]
    times_s = np.arange(steps) * grid_s
    _, expected, _ = signal.lsim(transfer_function(spec), delayed, times_s, interp=False)
    process = Process(spec)
    outputs = []
    for step in range(steps):
        process.advance_to(step * grid_s)
        if step in changes:
            process.set_input(step * grid_s, changes[step])
        outputs.append(process.output_pct)
    np.testing.assert_allclose(outputs, expected, atol=2e-7 * max(1.0, float(np.abs(expected).max())))


@pytest.mark.parametrize("scale", [0.0, 1e-6, 0.3, 1.0, 7.0, 300.0])
def test_the_matrix_exponential_is_scipys(scale: float) -> None:
    chance = np.random.default_rng(11)
    for size in (1, 3, 8):
        stable = scale * (chance.normal(size=(size, size)) - 4.0 * np.eye(size))
        np.testing.assert_allclose(matrix_exponential(stable), linalg.expm(stable), rtol=1e-10, atol=1e-12)


def test_a_first_order_lag_with_dead_time_follows_its_closed_form_at_any_instant() -> None:
    process = Process(ProcessSpec(gain=2.0, lags_s=(10.0,), dead_time_s=3.0), input_pct=40.0, output_pct=60.0)
    process.advance_to(1.7)
    process.set_input(1.7, 45.0)
    for t_s in (2.0, 4.7, 4.7001, 9.123456789, 200.0):
        process.advance_to(t_s)
        since_s = max(0.0, t_s - 4.7)
        assert process.output_pct == pytest.approx(60.0 + 10.0 * (1.0 - exp(-since_s / 10.0)), abs=1e-9)


def test_a_process_without_any_lag_passes_its_input_on_after_the_dead_time() -> None:
    process = Process(ProcessSpec(gain=1.5, dead_time_s=2.0))
    process.set_input(0.0, 10.0)
    process.advance_to(1.999)
    assert process.output_pct == 0.0
    process.advance_to(2.0)
    assert process.output_pct == 15.0


def test_a_zero_on_a_single_lag_lets_the_step_through_at_once() -> None:
    # (1 + 2 s) / (1 + s): 2 at the instant of the step, 1 at the end.
    process = Process(ProcessSpec(gain=1.0, lags_s=(1.0,), zero_s=2.0))
    process.set_input(0.0, 1.0)
    assert process.output_pct == pytest.approx(2.0)
    process.advance_to(0.5)
    assert process.output_pct == pytest.approx(1.0 + exp(-0.5), abs=1e-12)


def test_an_undamped_quadratic_swings_without_end() -> None:
    # 1 / (s^2 + 1): the step response is 1 - cos t.
    process = Process(ProcessSpec(gain=1.0, quadratic=(1.0, 0.0)))
    process.set_input(0.0, 1.0)
    process.advance_to(7.0 * pi)
    assert process.output_pct == pytest.approx(2.0, abs=1e-10)


def test_at_rest_nothing_moves() -> None:
    process = Process(
        ProcessSpec(gain=1.6, lags_s=(3.0, 0.6), dead_time_s=0.5, integrating=True), input_pct=45.0, output_pct=65.0
    )
    process.set_input(0.0, 45.0)
    process.advance_to(1000.0)
    assert process.output_pct == 65.0


def test_a_load_step_acts_like_an_input_that_nobody_commands() -> None:
    spec = ProcessSpec(gain=2.0, lags_s=(1.0,), dead_time_s=0.5)
    loaded, fed = Process(spec), Process(spec)
    loaded.set_input(0.0, 3.0)
    loaded.add_load_step(1.0, 4.0)
    loaded.set_input(2.0, 1.0)
    for t_s, level in ((0.0, 3.0), (1.0, 7.0), (2.0, 5.0)):
        fed.set_input(t_s, level)
    for process in (loaded, fed):
        process.advance_to(3.3)
    assert loaded.output_pct == pytest.approx(fed.output_pct, abs=1e-12)


def test_a_sinusoidal_load_gives_the_closed_form_of_a_driven_lag() -> None:
    gain, lag_s, dead_time_s, amplitude_pct, period_s = 2.0, 1.5, 0.4, 3.0, 2.0
    process = Process(ProcessSpec(gain=gain, lags_s=(lag_s,), dead_time_s=dead_time_s))
    process.set_load_sine(1.0, amplitude_pct, period_s)
    w = 2.0 * pi / period_s
    for t_s in (1.2, 1.4, 1.9, 3.33, 17.0):
        process.advance_to(t_s)
        since_s = max(0.0, t_s - 1.0 - dead_time_s)
        driven = sin(w * since_s) - w * lag_s * np.cos(w * since_s) + w * lag_s * exp(-since_s / lag_s)
        expected = gain * amplitude_pct / (1.0 + (w * lag_s) ** 2) * driven
        assert process.output_pct == pytest.approx(expected, abs=1e-10)


def test_a_drift_adds_a_ramp_to_the_output_and_keeps_what_has_drifted() -> None:
    process = Process(ProcessSpec(gain=1.0, lags_s=(1.0,)), output_pct=50.0)
    process.advance_to(10.0)
    process.set_output_drift(0.5)
    process.advance_to(14.0)
    assert process.output_pct == pytest.approx(52.0)
    process.set_output_drift(0.0)
    process.advance_to(20.0)
    assert process.output_pct == pytest.approx(52.0)


@given(stops=st.lists(st.floats(0.0, 6.0), max_size=8))
def test_where_one_stops_on_the_way_does_not_matter(stops: list[float]) -> None:
    spec = ProcessSpec(gain=1.3, lags_s=(1.0, 0.2), dead_time_s=0.7, zero_s=-0.3, quadratic=(0.09, 0.2))
    straight, stopping = Process(spec), Process(spec)
    for process in (straight, stopping):
        process.set_input(0.0, 5.0)
        process.set_input(0.1, -5.0)
        process.set_load_sine(0.1, 2.0, 1.1)
    for stop_s in sorted(stops):
        stopping.advance_to(stop_s)
    for process in (straight, stopping):
        process.advance_to(6.0)
    assert stopping.output_pct == pytest.approx(straight.output_pct, abs=1e-9)


def test_a_copy_lives_its_own_life() -> None:
    process = Process(ProcessSpec(gain=1.0, lags_s=(1.0,), dead_time_s=0.5))
    process.set_input(0.0, 1.0)
    process.advance_to(0.2)
    twin = process.copy()
    twin.set_input(0.2, 9.0)
    twin.advance_to(5.0)
    assert process.t_s == 0.2
    assert process.output_pct == 0.0
    process.advance_to(5.0)
    assert process.output_pct == pytest.approx(1.0 - exp(-4.5), abs=1e-12)


def test_time_never_runs_back() -> None:
    process = Process(ProcessSpec(gain=1.0, lags_s=(1.0,), dead_time_s=1.0))
    process.set_input(2.0, 1.0)
    with pytest.raises(ValueError, match="too late"):
        process.set_input(1.0, 1.0)
    process.advance_to(3.0)
    with pytest.raises(ValueError, match="too late"):
        process.set_input(2.5, 1.0)
    with pytest.raises(ValueError, match="go back"):
        process.advance_to(2.9)


def test_many_different_steps_do_not_fill_the_memory() -> None:
    process = Process(ProcessSpec(gain=1.0, lags_s=(1.0,)))
    process.set_input(0.0, 1.0)
    t_s = 0.0
    for count in range(1100):
        t_s += 1e-3 + count * 1e-7
        process.advance_to(t_s)
    assert process.output_pct == pytest.approx(1.0 - exp(-t_s), abs=1e-9)


@pytest.mark.parametrize(
    "parameters",
    [
        {"lags_s": (0.0,)},
        {"lags_s": (-1.0,)},
        {"dead_time_s": -0.1},
        {"gain": float("nan")},
        {"lags_s": (float("inf"),)},
        {"quadratic": (0.0, 1.0)},
        {"zero_s": 1.0},
    ],
)
def test_a_process_that_cannot_exist_is_refused(parameters: dict[str, object]) -> None:
    with pytest.raises(ValueError, match=r"must|needs"):
        ProcessSpec(**{"gain": 1.0, **parameters})  # type: ignore[arg-type]  # wrong on purpose


def relay_switches(
    process: Process, amplitude_pct: float, hysteresis_pct: float, look_s: float, half_cycles: int
) -> tuple[list[float], Process]:
    """Drive ``process`` by an exact relay; returns its switching instants (s) and a copy taken at the last of them."""
    level, t_s = amplitude_pct, 0.0
    switches: list[float] = []
    process.set_input(0.0, level)
    while len(switches) < half_cycles:
        before = process.copy()
        t_s += look_s
        process.advance_to(t_s)
        sign = 1.0 if level > 0.0 else -1.0
        if sign * process.output_pct <= hysteresis_pct:
            continue
        early_s, late_s = before.t_s, t_s
        for _ in range(60):
            middle_s = 0.5 * (early_s + late_s)
            twin = before.copy()
            twin.advance_to(middle_s)
            if sign * twin.output_pct > hysteresis_pct:
                late_s = middle_s
            else:
                early_s = middle_s
        process = before.copy()
        process.advance_to(late_s)
        level, t_s = -level, late_s
        process.set_input(t_s, level)
        switches.append(t_s)
    return switches, process


@pytest.mark.parametrize("check_id", ["RL-01", "RL-05"])
def test_a_lag_with_dead_time_under_a_relay_reaches_the_exact_limit_cycle(check_id: str) -> None:
    # Source: the closed form of Tsypkin's method, named in checks.json.
    given_, expected = CHECKS[check_id]["inputs"], CHECKS[check_id]["expected"]
    process = Process(ProcessSpec(gain=given_["K"], lags_s=(given_["T"],), dead_time_s=given_["L"]))
    switches, process = relay_switches(process, given_["d"], given_["eps"], given_["L"] / 7.0, 40)
    assert switches[-1] - switches[-3] == pytest.approx(expected["period"], rel=1e-7)
    process.advance_to(switches[-1] + given_["L"])  # the turning point is when the switch arrives
    assert abs(process.output_pct) == pytest.approx(expected["a"], rel=1e-7)


def test_an_integrator_with_dead_time_under_a_relay_reaches_the_exact_limit_cycle() -> None:
    given_, expected = CHECKS["RL-10"]["inputs"], CHECKS["RL-10"]["expected"]
    process = Process(ProcessSpec(gain=given_["k"], dead_time_s=given_["L"], integrating=True))
    switches, process = relay_switches(process, given_["d"], given_["eps"], 0.1, 12)
    assert switches[-1] - switches[-3] == pytest.approx(expected["period"], rel=1e-8)
    process.advance_to(switches[-1] + given_["L"])
    assert abs(process.output_pct) == pytest.approx(expected["a"], rel=1e-9)


def test_three_equal_lags_under_an_ideal_relay_reach_the_exact_limit_cycle() -> None:
    given_, expected = CHECKS["RL-11"]["inputs"], CHECKS["RL-11"]["expected"]
    process = Process(ProcessSpec(gain=1.0, lags_s=(1.0, 1.0, 1.0)))
    switches, process = relay_switches(process, given_["d"], 0.0, 0.05, 80)
    assert switches[-1] - switches[-3] == pytest.approx(expected["period"], rel=1e-8)
    swing = []
    for step in range(1, 1000):
        twin = process.copy()
        twin.advance_to(switches[-1] + step * expected["period"] / 2000.0)
        swing.append(abs(twin.output_pct))
    assert max(swing) == pytest.approx(expected["a"], rel=1e-5)
    assert expected["Tu_exact"] == pytest.approx(2.0 * pi / sqrt(3.0))
