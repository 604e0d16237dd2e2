"""Integrals against quadrature, scatter, drift and the few properties that no closed form shows."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.integrate import quad

from autotune.identify.cycles import usable_cycles, whole_cycles
from autotune.identify.fourier import harmonic_points, held_integral, joined_integral
from autotune.identify.waveforms import Waveforms, waveforms
from autotune.loop.mode import ControlAction
from tests.identify.exact_relay import Bench, Plant, reference_batch, sampled_relay

PLANT = next(plant for plant in reference_batch() if plant.name == "P1 T=1")


def exact(plant: Plant, w: float) -> complex:
    s = 1j * w
    (lag_s,) = plant.lags_s
    return complex(plant.gain * np.exp(-s * plant.dead_time_s) / (1 + s * lag_s))


def by_quadrature(at_s: np.ndarray, level: np.ndarray, w: float, from_s: float, to_s: float, *, holds: bool) -> complex:
    def height(t: float) -> float:
        return float(level[np.searchsorted(at_s, t, side="right") - 1]) if holds else float(np.interp(t, at_s, level))

    edges = [t for t in at_s if from_s < t < to_s]
    parts = [
        quad(lambda t, turn=turn: height(t) * turn(w * t), a, b)[0]
        for turn in (np.cos, np.sin)
        for a, b in zip([from_s, *edges], [*edges, to_s], strict=True)
    ]
    half = len(parts) // 2
    return complex(sum(parts[:half]), -sum(parts[half:]))


def test_the_integral_of_a_held_output_is_exact() -> None:
    at, level = np.array([-1.0, 0.3, 1.1, 2.7, 9.0]), np.array([0.0, 3.0, -2.0, 5.0, 7.0])
    ours = held_integral(at, level, 0.1, 4.0, np.array([0.7, 3.0]))
    assert list(ours) == pytest.approx([by_quadrature(at, level, w, 0.1, 4.0, holds=True) for w in (0.7, 3.0)])


def test_the_integral_of_joined_samples_is_exact_up_to_the_loss_that_is_put_back() -> None:
    at = np.sort(np.random.default_rng(2).uniform(0.0, 4.0, 30))
    level = np.random.default_rng(3).normal(size=30)
    from_s, to_s, w = 0.5, 3.5, 2.0
    steps = np.diff(np.concatenate(([from_s], at[(at > from_s) & (at < to_s)], [to_s])))
    kept = float(np.sinc(w * steps / (2 * np.pi)) ** 2 @ steps) / 3.0
    ours = complex(joined_integral(at, level, from_s, to_s, np.array([w]))[0])
    assert ours * kept == pytest.approx(by_quadrature(at, level, w, from_s, to_s, holds=False), rel=1e-7)


def test_what_straight_lines_take_from_a_sinusoid_is_put_back() -> None:
    at = np.arange(
        0.0, 10.01, 0.5
    )  # 20 samples a period of 10 s: the lines take 0.8 % of the fundamental, 7 % of harmonic 3
    for harmonic in (1, 3):
        w = harmonic * 2 * np.pi / 10
        whole = joined_integral(at, np.cos(w * at), 0.0, 10.0, np.array([w]))[0]
        assert whole == pytest.approx(5.0, rel=1e-9)


@pytest.mark.parametrize("noise_ratio", [0.0, 0.02, 0.1])
def test_the_point_of_a_sampled_test_is_the_plant_alone_within_its_scatter(noise_ratio: float) -> None:
    off = []
    for seed in range(20):
        signals = waveforms(sampled_relay(PLANT, Bench(noise_ratio=noise_ratio), seed))
        point = harmonic_points(signals, usable_cycles(whole_cycles(signals)))[0]
        error = np.log(point.gain * np.exp(1j * point.phase_rad) / exact(PLANT, point.frequency_rad_per_s))
        off += [abs(error.real) / point.gain_sd_ratio, abs(error.imag) / point.phase_sd_rad]
    assert np.mean(np.array(off) < 1.96) >= 0.95


def test_a_point_counts_for_a_positive_gain_whichever_way_the_controller_acts() -> None:
    record = sampled_relay(PLANT, Bench(), 1)
    mirrored = replace(
        record,
        action=ControlAction.DIRECT,
        samples=tuple(replace(sample, pv_pct=100.0 - sample.pv_pct) for sample in record.samples),
    )
    points = [harmonic_points(s, usable_cycles(whole_cycles(s)))[0] for s in (waveforms(record), waveforms(mirrored))]
    assert points[0].gain == pytest.approx(points[1].gain)
    assert points[0].phase_rad == pytest.approx(points[1].phase_rad)
    assert -np.pi < points[0].phase_rad < -np.pi / 2


def test_a_drift_is_no_part_of_the_oscillation() -> None:
    signals = waveforms(sampled_relay(PLANT, Bench(noise_ratio=0.0)))
    cycles = usable_cycles(whole_cycles(signals))
    drifting = replace(signals, pv_pct=signals.pv_pct + 0.2 * signals.sample_s)
    plain, drifted = harmonic_points(signals, cycles)[0], harmonic_points(drifting, cycles)[0]
    assert drifted.gain == pytest.approx(plain.gain, rel=2e-3)
    assert drifted.phase_rad == pytest.approx(plain.phase_rad, abs=2e-3)


def test_a_point_past_half_a_turn_is_counted_on() -> None:
    """PV delayed by 0.7 of a period to a square output: -252 degrees, not +108."""
    at = np.arange(0.0, 20.0, 0.05)
    signals = Waveforms(
        sample_s=at,
        pv_pct=np.sin(2 * np.pi * (at / 4 - 0.7)),
        effect_s=np.arange(0.0, 20.0, 2.0),
        op_pct=np.tile([5.0, -5.0], 5),
        noise_pct=0.0,
        drift_doubt_pct_per_s=0.0,
        rest_sd_pct=0.0,
        delay_hull_s=0.0,
    )
    point = harmonic_points(signals, usable_cycles(whole_cycles(signals)))[0]
    assert np.degrees(point.phase_rad) == pytest.approx(-252.0, abs=0.1)


def test_one_cycle_shows_no_scatter() -> None:
    signals = waveforms(sampled_relay(PLANT, Bench()))
    with pytest.raises(ValueError, match="at least two cycles"):
        harmonic_points(signals, whole_cycles(signals)[:1])
