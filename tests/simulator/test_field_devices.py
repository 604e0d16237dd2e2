"""Valves and transmitters."""

from math import exp, isnan

import numpy as np
import pytest

from simulator.transmitter import Transmitter, TransmitterFault, TransmitterSpec
from simulator.valve import Valve, ValveFault, ValveSpec


def test_a_plain_valve_stands_where_it_is_told_within_its_end_stops() -> None:
    valve = Valve(ValveSpec(), position_pct=40.0)
    assert valve.move(1.0, 55.0) == 55.0
    assert valve.move(2.0, 130.0) == 100.0
    assert valve.move(3.0, -5.0) == 0.0


def test_a_slow_valve_moves_no_faster_than_its_rate() -> None:
    valve = Valve(ValveSpec(rate_pct_per_s=2.0), position_pct=40.0)
    assert valve.move(1.0, 60.0) == pytest.approx(42.0)
    assert valve.move(1.5, 60.0) == pytest.approx(43.0)
    assert valve.move(2.5, 42.5) == pytest.approx(42.5)


def test_lost_motion_is_felt_at_each_reversal_and_only_there() -> None:
    valve = Valve(ValveSpec(dead_band_pct=2.0), position_pct=50.0)
    assert valve.move(1.0, 50.9) == 50.0
    assert valve.move(2.0, 53.0) == 52.0
    assert valve.move(3.0, 54.0) == 53.0
    assert valve.move(4.0, 52.5) == 53.0
    assert valve.move(5.0, 51.0) == 52.0


def test_a_stuck_valve_stays_and_a_freed_one_follows_again() -> None:
    valve = Valve(ValveSpec(), position_pct=50.0)
    valve.fault = ValveFault.STUCK
    assert valve.move(1.0, 80.0) == 50.0
    valve.fault = ValveFault.NONE
    assert valve.move(2.0, 80.0) == 80.0


def test_noise_has_the_deviation_asked_for_and_repeats_with_its_seed() -> None:
    readings = [
        [transmitter.read(0.05 * step, 50.0) for step in range(1, 4001)]
        for transmitter in (Transmitter(TransmitterSpec(noise_pct=0.5), seed=7, reading_pct=50.0) for _ in range(2))
    ]
    assert readings[0] == readings[1]
    # The deviation of 4000 normal draws scatters by 1 / sqrt(2 x 4000) = 1.1 %; the mean by 0.5 / sqrt(4000).
    assert float(np.std(readings[0])) == pytest.approx(0.5, rel=0.05)
    assert float(np.mean(readings[0])) == pytest.approx(50.0, abs=0.03)


def test_the_filter_is_a_first_order_lag_of_the_measured_signal() -> None:
    transmitter = Transmitter(TransmitterSpec(filter_time_s=2.0), seed=1, reading_pct=20.0)
    transmitter.read(0.5, 30.0)
    transmitter.read(1.25, 30.0)
    assert transmitter.reading_pct == pytest.approx(30.0 - 10.0 * exp(-1.25 / 2.0))


def test_resolution_rounds_and_the_signal_range_clips() -> None:
    transmitter = Transmitter(TransmitterSpec(resolution_pct=0.25), seed=1)
    assert transmitter.read(1.0, 50.13) == 50.25
    assert transmitter.read(2.0, 250.0) == 103.125  # 20.5 mA, NAMUR NE 43
    assert not transmitter.is_failed


@pytest.mark.parametrize(
    ("fault", "current_ma"),
    # Signal currents of NAMUR NE 43: 3.6 mA and 21 mA tell a failure.
    [(TransmitterFault.HIGH, 21.0), (TransmitterFault.LOW, 3.6)],
)
def test_a_failed_transmitter_drives_to_its_failure_current(fault: TransmitterFault, current_ma: float) -> None:
    transmitter = Transmitter(TransmitterSpec(), seed=1, reading_pct=50.0)
    transmitter.fault = fault
    assert transmitter.read(2.0, 80.0) == pytest.approx(100.0 * (current_ma - 4.0) / 16.0)
    assert transmitter.is_failed
    transmitter.fault = TransmitterFault.NONE
    assert transmitter.read(5.0, 80.0) == 80.0
    assert not transmitter.is_failed


def test_a_reading_that_is_no_number_is_a_failure_and_a_stuck_one_looks_healthy() -> None:
    transmitter = Transmitter(TransmitterSpec(), seed=1, reading_pct=50.0)
    transmitter.fault = TransmitterFault.STUCK
    assert transmitter.read(1.0, 80.0) == 50.0
    assert not transmitter.is_failed
    transmitter.fault = TransmitterFault.NAN
    assert isnan(transmitter.read(4.0, 80.0))
    assert transmitter.is_failed


@pytest.mark.parametrize(
    "parameters", [{"low_pct": 50.0, "high_pct": 50.0}, {"rate_pct_per_s": 0.0}, {"dead_band_pct": -1.0}]
)
def test_a_valve_that_cannot_exist_is_refused(parameters: dict[str, float]) -> None:
    with pytest.raises(ValueError, match="valve"):
        ValveSpec(**parameters)


def test_a_transmitter_that_cannot_exist_is_refused() -> None:
    with pytest.raises(ValueError, match="transmitter"):
        TransmitterSpec(noise_pct=-0.1)
