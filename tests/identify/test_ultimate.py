"""The ultimate point: covered by its interval, better than the textbook's reading, and every width explained."""

from dataclasses import replace

import numpy as np
import pytest

from autotune.identify.cycles import usable_cycles, whole_cycles
from autotune.identify.findings import OscillationPoint, UltimatePoint
from autotune.identify.fourier import harmonic_points
from autotune.identify.ultimate import infer
from autotune.identify.waveforms import waveforms
from autotune.loop.record import Record, TimeBase
from autotune.loop.sample import Stamp
from tests.benchmarks.identification import fresh_plants, run, well_conditioned
from tests.identify.exact_relay import Bench, Plant, reference_batch, sampled_relay


def plant_named(name: str) -> Plant:
    return next(plant for plant in reference_batch() if plant.name == name)


def ultimate_of_record(record: Record) -> UltimatePoint:
    """By the shapes through the Fourier points alone."""
    signals = waveforms(record)
    cycles = usable_cycles(whole_cycles(signals))
    return infer(signals, cycles, harmonic_points(signals, cycles))


def restamped(record: Record, early_s: float, late_s: float) -> Record:
    """Our clock's stamps: each sample and effect surely lies from ``early_s`` before to ``late_s`` after the truth."""

    def hull(stamp: Stamp) -> Stamp:
        return Stamp(stamp.middle_s - early_s, stamp.middle_s + late_s)

    return replace(
        record,
        time_base=TimeBase.OUR_CLOCK,
        samples=tuple(replace(sample, taken=hull(sample.taken)) for sample in record.samples),
        effects=tuple(replace(effect, effect=hull(effect.effect)) for effect in record.effects),
    )


def test_a_slice_of_the_reference_batch_is_covered_and_read_far_better_than_by_the_textbook() -> None:
    row = run("slice", well_conditioned()[::17], Bench(), seeds=1)
    assert row.refused == 0
    assert len(row.gain_missed) <= 1  # of seven intervals of 95 %
    assert len(row.period_missed) <= 1
    assert row.gain_error_median_pct <= 0.6
    assert row.period_error_median_pct <= 0.3
    assert row.textbook_gain_error_median_pct > 20.0  # scan Tu/40 and one scan of latency, read as plant
    assert row.textbook_period_error_median_pct > 10.0


def test_plants_that_are_none_of_the_shapes_are_covered() -> None:
    row = run("fresh", fresh_plants(6, seed=5), Bench(), seeds=1)
    assert len(row.gain_missed) <= 1  # of six intervals of 95 %
    assert len(row.period_missed) <= 1


def test_a_drift_that_the_baseline_did_not_show_is_covered() -> None:
    row = run("drift", well_conditioned()[::24], Bench(drift_ratio=0.05), seeds=1)
    assert len(row.gain_missed) <= 1  # of five intervals of 95 %
    assert len(row.period_missed) <= 1


def test_more_noise_never_makes_a_surer_reading() -> None:
    plant = plant_named("P4 n=4")

    def half_width(noise_ratio: float) -> float:
        widths = [
            np.log(u.ultimate_gain.high / u.ultimate_gain.low)
            for u in (ultimate_of_record(sampled_relay(plant, Bench(noise_ratio=noise_ratio), s)) for s in range(5))
        ]
        return float(np.median(widths))

    assert half_width(0.005) < half_width(0.02) < half_width(0.1)


@pytest.mark.parametrize("name", ["P1 T=1", "P2 T=1", "P4 n=4", "P6 L1=0.5"])
def test_wherever_in_our_clocks_stamps_the_truth_lies_the_interval_holds_it(name: str) -> None:
    plant = plant_named(name)
    record = sampled_relay(plant, Bench(), 3)
    hull_s = record.scan_s / 2
    for early_s, late_s in ((hull_s, 0.0), (0.0, hull_s), (hull_s / 2, hull_s / 2)):
        # the samples' truth at one end and the effects' at the other is the worst that stamps can hide
        mixed = replace(restamped(record, early_s, late_s), effects=restamped(record, late_s, early_s).effects)
        ultimate = ultimate_of_record(mixed)
        assert ultimate.ultimate_gain.low <= plant.ultimate_gain <= ultimate.ultimate_gain.high
        assert ultimate.ultimate_period_s.low <= plant.ultimate_period_s <= ultimate.ultimate_period_s.high


def test_unknown_delay_counts_as_plant_at_the_low_end_of_the_gain_and_as_none_at_the_high_end() -> None:
    record = sampled_relay(plant_named("P4 n=4"), Bench(), 3)
    plain, hulls = ultimate_of_record(record), ultimate_of_record(restamped(record, 0.05, 0.05))
    assert hulls.ultimate_gain.best == pytest.approx(plain.ultimate_gain.best)
    assert hulls.ultimate_gain.low < plain.ultimate_gain.low
    assert hulls.ultimate_gain.high > plain.ultimate_gain.high
    assert hulls.ultimate_period_s.high > plain.ultimate_period_s.high
    assert any("without the PLC's clock 100 ms either way" in cause for cause in hulls.because)
    assert not any("clock" in cause for cause in plain.because)


def test_every_cause_of_the_width_is_named_with_its_size() -> None:
    causes = ultimate_of_record(sampled_relay(plant_named("P4 n=4"), Bench(), 3)).because
    assert causes[0].startswith("the test swung at -1")
    assert "the ultimate point lies at -180" in causes[0]
    assert "scatter over 4 cycles: +-" in causes[1]
    assert "no plant is exactly one of the shapes: +-1.5 % in gain" in causes[2]


def test_a_plant_almost_without_dead_time_leaves_the_high_end_open_and_says_so() -> None:
    plant = Plant("two lags", lags_s=(10.0, 1.0), dead_time_s=0.005, ultimate_period_s=2.0)
    causes = ultimate_of_record(sampled_relay(plant, Bench(noise_ratio=0.05), 1)).because
    assert any("the high end of the gain is where the search ended" in cause for cause in causes)


def test_harmonics_that_no_plant_has_widen_the_interval_and_raise_a_suspicion() -> None:
    signals = waveforms(sampled_relay(plant_named("P4 n=4"), Bench(), 3))
    cycles = usable_cycles(whole_cycles(signals))
    points = harmonic_points(signals, cycles)

    def spoilt(point: OscillationPoint) -> OscillationPoint:
        return replace(point, phase_rad=point.phase_rad + 2.0) if point.method == "Fourier, harmonic 2" else point

    plain = infer(signals, cycles, points)
    odd = infer(signals, cycles, tuple(spoilt(point) for point in points))
    assert any("was widened by as much" in cause for cause in odd.because)
    assert any("sticking valve" in cause for cause in odd.because)
    assert not any("sticking valve" in cause for cause in plain.because)


def test_the_fundamental_alone_is_enough_but_tells_less() -> None:
    plant = plant_named("P4 n=4")
    signals = waveforms(sampled_relay(plant, Bench(), 3))
    cycles = usable_cycles(whole_cycles(signals))
    points = harmonic_points(signals, cycles)
    all_points, one = infer(signals, cycles, points), infer(signals, cycles, points[:1])
    assert one.ultimate_gain.low <= plant.ultimate_gain <= one.ultimate_gain.high
    assert one.ultimate_gain.high / one.ultimate_gain.low > all_points.ultimate_gain.high / all_points.ultimate_gain.low
