"""The one entry: what it refuses, and the cautions beside what it finds."""

import pickle
from dataclasses import replace

import numpy as np
import pytest

from autotune.identify.findings import Findings
from autotune.identify.measure import measure
from autotune.loop.mode import ControlAction
from autotune.loop.outcome import Refusal
from autotune.loop.record import Record, TimeBase
from autotune.loop.sample import Stamp
from tests.identify.exact_relay import Bench, Plant, reference_batch, sampled_relay

PLANT = next(plant for plant in reference_batch() if plant.name == "P1 T=1")
BENCH = Bench(baseline_periods=4.0)


def found(record: Record) -> Findings:
    outcome = measure(record)
    assert isinstance(outcome, Findings), outcome
    return outcome


def refused(record: Record) -> Refusal:
    outcome = measure(record)
    assert isinstance(outcome, Refusal), outcome
    return outcome


def with_pv(record: Record, pv_pct: "np.ndarray") -> Record:
    samples = tuple(replace(s, pv_pct=float(pv)) for s, pv in zip(record.samples, pv_pct, strict=True))
    return replace(record, samples=samples)


def pv_of(record: Record) -> "np.ndarray":
    return np.array([sample.pv_pct for sample in record.samples])


def times_of(record: Record) -> "np.ndarray":
    return np.array([sample.taken.middle_s for sample in record.samples])


def says(findings: Findings, words: str) -> bool:
    return any(words in caution for caution in findings.cautions)


def test_a_good_test_is_found_with_all_its_parts_and_only_the_caution_about_the_valve() -> None:
    findings = found(sampled_relay(PLANT, BENCH, 1))
    assert findings.time_base is TimeBase.PLC_CLOCK
    assert len(findings.cycles) == 4
    assert findings.static_gain is not None
    assert findings.static_gain.low < 1.0 < findings.static_gain.high
    assert findings.describing_function.method == "describing function"
    assert findings.fourier.method == "Fourier"
    assert len(findings.cautions) == 1
    assert "each 1 % of dead band would make the gain read 11 % high" in findings.cautions[0]  # 1/(1 - 1/10)


def test_a_direct_acting_loop_differs_only_in_the_sign_of_its_static_gain() -> None:
    record = sampled_relay(PLANT, BENCH, 1)
    plain = found(record)
    mirrored = found(replace(with_pv(record, 100 - pv_of(record)), action=ControlAction.DIRECT))
    assert mirrored.ultimate.ultimate_gain.best == pytest.approx(plain.ultimate.ultimate_gain.best)
    assert plain.static_gain is not None
    assert mirrored.static_gain is not None
    assert mirrored.static_gain.best == pytest.approx(-plain.static_gain.best)


def test_findings_travel_between_processes() -> None:
    findings = found(sampled_relay(PLANT, BENCH, 1))
    arrived = pickle.loads(pickle.dumps(findings))  # noqa: S301  # our own bytes
    assert arrived == findings


def test_too_few_cycles_are_refused() -> None:
    refusal = refused(sampled_relay(PLANT, replace(BENCH, switches=2)))
    assert refusal.code == "TOO_FEW_CYCLES"
    assert refusal.reason.startswith("0 whole cycles")


def test_of_a_short_test_the_first_cycle_is_read_too_and_said_to_hold_the_way_from_rest() -> None:
    findings = found(sampled_relay(PLANT, replace(BENCH, switches=4), 1))
    assert len(findings.cycles) == 2
    assert says(findings, "The test was short")
    assert findings.ultimate.ultimate_gain.low <= PLANT.ultimate_gain <= findings.ultimate.ultimate_gain.high


def test_nothing_recorded_is_refused() -> None:
    record = sampled_relay(PLANT, BENCH)
    assert refused(replace(record, samples=(), effects=())).code == "TOO_FEW_CYCLES"


def test_a_scan_too_slow_for_the_period_is_refused() -> None:
    record = sampled_relay(PLANT, BENCH)
    assert refused(replace(record, samples=record.samples[::8])).code == "SCAN_TOO_SLOW"


def test_a_swing_hidden_by_noise_is_refused() -> None:
    record = sampled_relay(PLANT, BENCH)
    assert refused(replace(record, noise_pct=1.5)).code == "SWING_IN_NOISE"


def test_a_record_whose_noise_is_not_a_number_is_refused() -> None:
    assert refused(replace(sampled_relay(PLANT, BENCH), noise_pct=float("nan"))).code == "SWING_IN_NOISE"


def test_stamps_wider_than_the_period_allows_are_refused() -> None:
    record = sampled_relay(PLANT, BENCH)
    wide = tuple(replace(s, taken=Stamp(s.taken.middle_s - 0.5, s.taken.middle_s + 0.5)) for s in record.samples)
    effects = tuple(replace(e, effect=Stamp(e.effect.middle_s - 0.5, e.effect.middle_s + 0.5)) for e in record.effects)
    record = replace(record, samples=wide, effects=effects, time_base=TimeBase.OUR_CLOCK)
    assert refused(record).code == "STAMPS_TOO_COARSE"


def test_a_pv_that_swings_with_the_output_follows_no_plant() -> None:
    record = sampled_relay(PLANT, BENCH, 1)
    steps = {e.effect.middle_s: e.op_pct for e in record.effects}
    op = [[op for at, op in steps.items() if at <= t][-1] for t in times_of(record)]
    assert refused(with_pv(record, np.array(op))).code == "PV_NOT_FOLLOWING"


def test_a_wrong_action_follows_no_plant() -> None:
    record = sampled_relay(PLANT, BENCH, 1)
    assert refused(replace(record, action=ControlAction.DIRECT)).code == "PV_NOT_FOLLOWING"


def test_coarse_sampling_is_said() -> None:
    assert says(found(sampled_relay(PLANT, replace(BENCH, scans_per_ultimate_period=14), 1)), "Sampling is coarse")


def test_high_noise_is_said() -> None:
    assert says(found(sampled_relay(PLANT, replace(BENCH, noise_ratio=0.12), 1)), "The noise is high")


def test_a_drift_is_said_to_be_removed() -> None:
    record = sampled_relay(PLANT, BENCH, 1)
    assert says(found(with_pv(record, pv_of(record) + 0.3 * times_of(record))), "this drift was removed")


def test_missing_samples_are_said() -> None:
    record = sampled_relay(PLANT, BENCH, 1)
    samples = record.samples[:-60] + record.samples[-50:]
    assert says(found(replace(record, samples=samples)), "No sample came for")


def test_a_pv_refreshed_more_slowly_than_read_is_said() -> None:
    record = sampled_relay(PLANT, BENCH, 1)
    held = np.repeat(pv_of(record)[::3], 3)[: len(record.samples)]
    assert says(found(with_pv(record, held)), "refreshed more slowly than it is read")


def test_a_swing_cut_by_the_span_is_said() -> None:
    record = sampled_relay(PLANT, BENCH, 1)
    assert says(found(with_pv(record, np.minimum(pv_of(record) + 48.0, 100.0))), "PV reached an end of its span")


def test_equal_steps_are_said_to_tell_no_static_gain() -> None:
    findings = found(sampled_relay(PLANT, replace(BENCH, bias_ratio=0.0), 1))
    assert findings.static_gain is None
    assert says(findings, "tells no static gain")


def test_a_static_gain_too_faint_is_said() -> None:
    findings = found(sampled_relay(PLANT, replace(BENCH, baseline_periods=0.2, noise_ratio=0.1), 1))
    assert findings.static_gain is None
    assert says(findings, "shows too faintly")


def test_cycles_that_differ_are_said() -> None:
    record = sampled_relay(PLANT, BENCH, 1)
    last = found(record).cycles[-1]
    times = times_of(record)
    grown = np.where(times > last.from_s, 1.3 * (pv_of(record) - 50.0) + 50.0, pv_of(record))
    assert says(found(with_pv(record, grown)), "PV's swing varied")
    samples = tuple(replace(s, taken=Stamp.at(_stretched(s.taken.middle_s, last.from_s))) for s in record.samples)
    effects = tuple(replace(e, effect=Stamp.at(_stretched(e.effect.middle_s, last.from_s))) for e in record.effects)
    assert says(found(replace(record, samples=samples, effects=effects)), "The period varied")


def _stretched(t_s: float, from_s: float) -> float:
    return t_s if t_s < from_s else from_s + 1.3 * (t_s - from_s)


def test_half_cycles_that_the_steps_do_not_explain_are_said() -> None:
    """A load that moves PV's rest off the relay's reference makes one half cycle long."""
    record = sampled_relay(
        Plant("loaded", lags_s=(1.0, 1.0), dead_time_s=0.5, ultimate_period_s=3.0), Bench(bias_ratio=0.0), 1
    )
    assert not says(found(record), "half cycles are unequal")
    cycle_s = found(record).cycles[0].period_s
    effects = tuple(
        replace(e, effect=Stamp.at(e.effect.middle_s + (0.3 * cycle_s if e.op_pct < 50.0 else 0.0)))
        for e in record.effects
    )
    assert says(found(replace(record, effects=effects)), "half cycles are unequal")


def test_steps_as_small_as_a_dead_band_are_said() -> None:
    assert says(found(sampled_relay(PLANT, replace(BENCH, amplitude_pct=0.4), 1)), "would not have moved")


def test_where_no_fitted_plant_has_an_ultimate_point_the_points_of_the_oscillation_speak_alone() -> None:
    plant = Plant("two lags alone", lags_s=(5.0, 1.0), ultimate_period_s=2.0)
    record = sampled_relay(plant, replace(BENCH, noise_ratio=0.0))
    effects = tuple(replace(e, effect=Stamp.at(e.effect.middle_s + record.scan_s / 4)) for e in record.effects)
    findings = found(replace(record, effects=effects, noise_pct=0.01))
    assert findings.model is None
    assert findings.ultimate.method == "plant shapes through the Fourier points"
    assert says(findings, "No fitted plant has an ultimate point")


def test_the_fitted_plant_stands_beside_its_ultimate_point() -> None:
    findings = found(sampled_relay(PLANT, BENCH, 1))
    assert findings.model is not None
    assert findings.ultimate.method == "plant fitted to the whole test"
    assert findings.model.best.dead_time_s == pytest.approx(1.0, rel=0.02)
