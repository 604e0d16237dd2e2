"""The static gain from the means of an asymmetric test."""

from dataclasses import replace

import numpy as np
import pytest

from autotune.identify.cycles import usable_cycles, whole_cycles
from autotune.identify.findings import OscillationPoint
from autotune.identify.fourier import harmonic_points
from autotune.identify.static_gain import Balance, balance, static_gain
from autotune.identify.waveforms import waveforms
from autotune.loop.record import Record
from tests.identify.exact_relay import Bench, Plant, checks, reference_batch, sampled_relay, timed_record

LONG_REST = Bench(baseline_periods=4.0)


def means_and_point(record: Record) -> tuple[Balance, OscillationPoint]:
    signals = waveforms(record)
    cycles = usable_cycles(whole_cycles(signals))
    return balance(signals, cycles), harmonic_points(signals, cycles)[0]


def test_the_integrals_of_rl_08_give_its_static_gain() -> None:
    given, expected = checks()["RL-08"]["inputs"], checks()["RL-08"]["expected"]
    plant = Plant("RL-08", gain=given["K"], lags_s=(given["T"],), dead_time_s=given["L"])
    up, down = given["mu0"] + given["mu"], given["mu0"] - given["mu"]
    means, point = means_and_point(timed_record(plant, up, down, given["eps"], switches=14, grid_s=0.01))
    assert means.mean_op_pct == pytest.approx(expected["mean_u"], rel=1e-5)
    gain = static_gain(means, point, 1)
    assert gain is not None
    assert gain.best == pytest.approx(expected["K_from_integrals"], rel=1e-4)
    assert gain.low < expected["K_from_integrals"] < gain.high


def test_a_direct_acting_loop_has_a_negative_static_gain() -> None:
    given = checks()["RL-08"]["inputs"]
    plant = Plant("RL-08", gain=given["K"], lags_s=(given["T"],), dead_time_s=given["L"])
    means, point = means_and_point(timed_record(plant, 1.2, -0.8, 0.1, switches=14, grid_s=0.05))
    up, down = static_gain(means, point, 1), static_gain(means, point, -1)
    assert up is not None
    assert down is not None
    assert (down.low, down.best, down.high) == (-up.high, -up.best, -up.low)


def test_the_interval_holds_the_static_gain_of_the_batch_and_is_withheld_from_integrators() -> None:
    covered, given = [], 0
    for plant in reference_batch()[::3]:
        means, point = means_and_point(sampled_relay(plant, LONG_REST, seed=7))
        gain = static_gain(means, point, 1)
        if plant.is_integrating:
            assert gain is None, plant.name
        elif gain is not None:
            given += 1
            covered.append(gain.low <= plant.gain <= gain.high)
    assert given >= 15
    assert np.mean(covered) >= 0.95


def test_equal_steps_tell_no_static_gain() -> None:
    plant = next(plant for plant in reference_batch() if plant.name == "P1 T=1")
    assert static_gain(*means_and_point(sampled_relay(plant, Bench(bias_ratio=0.0))), 1) is None


def test_a_drifting_pv_tells_no_static_gain() -> None:
    plant = next(plant for plant in reference_batch() if plant.name == "P1 T=1")
    means, point = means_and_point(sampled_relay(plant, LONG_REST))
    assert static_gain(means, point, 1) is not None
    doubtful = replace(means, mean_pv_sd_pct=abs(means.mean_pv_pct))
    assert static_gain(doubtful, point, 1) is None
