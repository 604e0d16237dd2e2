"""An event-timed relay on exact plants, and what the textbook and the Fourier integral read from it.

The recursion (scipy expm) shares no formula with the room under test; the values stand in
tests/reference/checks.json with their sources.
"""

from functools import cache
from math import cos, degrees, pi, sin

import pytest

from autotune.identify.closed_forms import Fotd, relay_cycle_fotd, relay_cycle_integrator
from autotune.identify.cycles import usable_cycles, whole_cycles
from autotune.identify.describing_function import describing_function_point
from autotune.identify.fourier import harmonic_points
from autotune.identify.waveforms import waveforms
from autotune.loop.record import Record
from tests.identify.exact_relay import Plant, checks, timed_record, timed_relay

THREE_LAGS = Plant("three equal lags", lags_s=(1.0, 1.0, 1.0))


@cache
def three_lags_record(hysteresis_pct: float) -> Record:
    return timed_record(THREE_LAGS, 1.0, -1.0, hysteresis_pct, switches=24, grid_s=0.01, kick_s=1.0)


@pytest.mark.parametrize("check", ["RL-01", "RL-02", "RL-03", "RL-04", "RL-05", "RL-06"])
def test_a_lag_with_dead_time_swings_as_its_closed_form(check: str) -> None:
    given, expected = checks()[check]["inputs"], checks()[check]["expected"]
    plant = Plant(check, gain=given["K"], lags_s=(given["T"],), dead_time_s=given["L"])
    grid_s = expected["period"] / 100
    swing, _, _ = timed_relay(plant, given["d"], -given["d"], given["eps"], switches=12, grid_s=grid_s)
    assert swing.period_s == pytest.approx(expected["period"], rel=1e-7)
    assert swing.amplitude_pct == pytest.approx(expected["a"], rel=1e-7)
    ours = relay_cycle_fotd(Fotd(given["K"], given["T"], given["L"]), given["d"], given["d"], given["eps"])
    assert swing.period_s == pytest.approx(ours.period_s, rel=1e-9)


@pytest.mark.parametrize("check", ["RL-08", "RL-09"])
def test_unequal_steps_swing_as_their_closed_form(check: str) -> None:
    given, expected = checks()[check]["inputs"], checks()[check]["expected"]
    plant = Plant(check, gain=given["K"], lags_s=(given["T"],), dead_time_s=given["L"])
    up, down = given["mu0"] + given["mu"], given["mu0"] - given["mu"]
    swing, _, _ = timed_relay(plant, up, down, given["eps"], switches=12, grid_s=0.05)
    assert swing.after_up_s == pytest.approx(expected["Tu1"], rel=1e-7)
    assert swing.after_down_s == pytest.approx(expected["Tu2"], rel=1e-7)
    assert swing.high_pct == pytest.approx(expected["Au"], rel=1e-7)
    assert swing.low_pct == pytest.approx(expected["Ad"], rel=1e-7)


def test_an_integrator_swings_as_its_closed_form() -> None:
    given, expected = checks()["RL-10"]["inputs"], checks()["RL-10"]["expected"]
    plant = Plant("integrator", gain=given["k"], dead_time_s=given["L"], is_integrating=True)
    swing, _, _ = timed_relay(plant, given["d"], -given["d"], given["eps"], switches=12, grid_s=0.05)
    ours = relay_cycle_integrator(given["k"], given["L"], given["d"], given["eps"])
    assert swing.period_s == pytest.approx(expected["period"], rel=1e-7)
    assert swing.amplitude_pct == pytest.approx(ours.pv_amplitude_pct, rel=1e-9)


@pytest.mark.parametrize(
    ("plant", "hysteresis_pct", "expected"),
    [
        (THREE_LAGS, 0.0, checks()["RL-11"]["expected"]),
        (THREE_LAGS, 0.05, checks()["RL-12"]["expected"]),
        (Plant("two lags and dead time", lags_s=(1.0, 1.0), dead_time_s=1.0), 0.0, checks()["RL-13"]["expected"]),
        (Plant("four lags", lags_s=(1.0,) * 4), 0.0, checks()["RL-14"]["expected"]["(s+1)^-4"]),
        (
            Plant("two lags and an integrator", lags_s=(1.0, 1.0), is_integrating=True),
            0.0,
            checks()["RL-14"]["expected"]["1/(s(s+1)^2)"],
        ),
    ],
    ids=["RL-11", "RL-12", "RL-13", "RL-14 four lags", "RL-14 integrating"],
)
def test_plants_of_higher_order_swing_as_the_exact_relay_condition_says(
    plant: Plant, hysteresis_pct: float, expected: dict[str, float]
) -> None:
    swing, _, _ = timed_relay(plant, 1.0, -1.0, hysteresis_pct, switches=40, grid_s=0.01, kick_s=1.0)
    assert swing.period_s == pytest.approx(expected["period"], rel=1e-4)
    assert swing.amplitude_pct == pytest.approx(expected["a"], rel=1e-4)


def test_with_hysteresis_the_textbook_reads_the_gain_of_rl_12_at_its_phase() -> None:
    expected = checks()["RL-12"]["expected"]
    record = three_lags_record(0.05)
    point = describing_function_point(usable_cycles(whole_cycles(waveforms(record)), 6), 0.05)
    assert 1 / point.gain == pytest.approx(expected["Ku_4d_pi_a"], rel=2e-4)
    assert degrees(point.phase_rad) == pytest.approx(expected["DF_phase_deg"], abs=0.02)


def test_with_hysteresis_the_fourier_point_is_the_plant_itself_as_in_rl_12() -> None:
    expected = checks()["RL-12"]["expected"]
    signals = waveforms(three_lags_record(0.05))
    point = harmonic_points(signals, usable_cycles(whole_cycles(signals), 6))[0]
    assert 1 / point.gain == pytest.approx(expected["true_inv_abs_G"], rel=1e-4)
    assert degrees(point.phase_rad) == pytest.approx(expected["phase_deg"], abs=0.01)


def test_the_fourier_point_of_a_relay_waveform_is_exact_as_in_rl_15() -> None:
    given, expected = checks()["RL-15"]["inputs"], checks()["RL-15"]["expected"]
    plant = Plant("RL-15", gain=given["K"], lags_s=(given["T"],), dead_time_s=given["L"])
    signals = waveforms(timed_record(plant, given["d"], -given["d"], 0.0, switches=12, grid_s=0.002))
    point = harmonic_points(signals, usable_cycles(whole_cycles(signals)))[0]
    assert point.frequency_rad_per_s == pytest.approx(given["w"], rel=1e-6)
    assert point.gain * cos(point.phase_rad) == pytest.approx(expected["G_re"], abs=1e-5)
    assert point.gain * sin(point.phase_rad) == pytest.approx(expected["G_im"], abs=1e-5)


def test_the_harmonics_of_a_relay_waveform_are_points_of_the_plant_too() -> None:
    signals = waveforms(three_lags_record(0.0))
    for point in harmonic_points(signals, usable_cycles(whole_cycles(signals), 6)):
        exact = 1 / (1 + 1j * point.frequency_rad_per_s) ** 3
        seen = point.gain * complex(cos(point.phase_rad), sin(point.phase_rad))
        assert abs(seen / exact - 1) < 0.005, point.method


def test_equal_steps_hold_no_even_harmonics() -> None:
    signals = waveforms(three_lags_record(0.0))
    points = harmonic_points(signals, usable_cycles(whole_cycles(signals), 6))
    assert [point.method for point in points] == ["Fourier", "Fourier, harmonic 3", "Fourier, harmonic 5"]
    assert points[0].frequency_rad_per_s == pytest.approx(2 * pi / checks()["RL-11"]["expected"]["period"], rel=1e-4)
