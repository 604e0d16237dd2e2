"""A record as arrays."""

from dataclasses import replace

import pytest

from autotune.identify.waveforms import waveforms
from autotune.loop.mode import ControlAction
from autotune.loop.record import OutputEffect, Record, RecordedSample, TimeBase
from autotune.loop.sample import Stamp


def record_of(rest_pct: list[float], **changes: object) -> Record:
    """Samples each second up to t = 0, when the output moves from 40 to 45 %; then two more."""
    levels = [*rest_pct, 52.0, 53.0]
    record = Record(
        action=ControlAction.REVERSE,
        time_base=TimeBase.OUR_CLOCK,
        samples=tuple(
            RecordedSample(Stamp(i - len(rest_pct) - 0.2, i - len(rest_pct) + 0.2), pv) for i, pv in enumerate(levels)
        ),
        effects=(OutputEffect(Stamp.at(-100.0), 40.0), OutputEffect(Stamp(0.0, 0.6), 45.0)),
        centre_pct=40.0,
        reference_pct=50.0,
        relay_from_s=-0.5,
        hysteresis_pct=0.1,
        noise_pct=0.1,
        drift_pct_per_s=0.0,
        scan_s=1.0,
        plc_scan_s=0.1,
    )
    return replace(record, **changes)  # type: ignore[arg-type]  # each test names the fields it changes


def test_pv_counts_from_its_mean_at_rest_and_op_from_its_centre() -> None:
    signals = waveforms(record_of([51.0] * 9))
    assert list(signals.pv_pct[-2:]) == [1.0, 2.0]
    assert list(signals.op_pct) == [0.0, 5.0]
    assert signals.rest_sd_pct == pytest.approx(0.1 / 3)


def test_a_baseline_too_short_leaves_the_reference_with_the_noise_of_one_sample() -> None:
    signals = waveforms(record_of([51.0] * 3, drift_pct_per_s=-0.3))
    assert list(signals.pv_pct[-2:]) == [2.0, 3.0]
    assert signals.rest_sd_pct == 0.1
    assert signals.drift_doubt_pct_per_s == 0.3


def test_a_direct_acting_loop_is_counted_with_a_positive_gain() -> None:
    assert list(waveforms(record_of([51.0] * 9, action=ControlAction.DIRECT)).pv_pct[-2:]) == [-1.0, -2.0]


def test_stamps_stand_at_their_middles_and_half_their_widths_is_in_doubt() -> None:
    signals = waveforms(record_of([51.0] * 9))
    assert signals.sample_s[-1] == pytest.approx(1.0)
    assert signals.effect_s[-1] == pytest.approx(0.3)
    assert signals.delay_hull_s == pytest.approx((0.4 + 0.6) / 2)


def test_a_slope_at_rest_within_its_noise_leaves_the_noise_in_doubt() -> None:
    standard_error = 0.1 / 60**0.5  # nine samples a second apart: sum of squares about their middle is 60
    assert waveforms(record_of([51.0] * 9)).drift_doubt_pct_per_s == pytest.approx(standard_error)
    clear = record_of([51.0] * 9, drift_pct_per_s=-0.05)
    assert waveforms(clear).drift_doubt_pct_per_s == 0.05


def test_nothing_recorded_is_no_fault() -> None:
    signals = waveforms(record_of([], samples=(), effects=()))
    assert signals.delay_hull_s == 0.0
    assert len(signals.sample_s) == 0
