"""What a technician should know beside the findings, each a sentence with its number."""

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from autotune.identify.findings import Cycle
from autotune.identify.refusals import samples_per_cycle
from autotune.identify.static_gain import MEAN_OP_AT_LEAST_RATIO, Balance
from autotune.identify.waveforms import Waveforms
from autotune.loop.record import Record

# Common practice, no source, unless said otherwise.
SAMPLES_PER_CYCLE_ENOUGH = 20.0
GAP_AT_MOST_RATIO = 1 / 6  # of a period without a sample
PV_CHANGES_AT_LEAST_RATIO = 0.5  # of the samples
SWING_PER_NOISE_ENOUGH = 10.0
DRIFT_AT_MOST_RATIO = 0.05  # of the swing, per cycle
PERIODS_AGREE_RATIO = 0.1
SWINGS_AGREE_RATIO = 0.15
DUTY_SLACK_RATIO = 0.07
SPAN_END_PCT = 0.05
DEAD_BAND_PCT = 1.0  # the example in the sentence on valves


def cautions(
    record: Record, signals: Waveforms, cycles: tuple[Cycle, ...], means: Balance, *, has_static_gain: bool
) -> tuple[str, ...]:
    """All cautions that this record deserves, the gravest for the numbers first."""
    return (
        *_on_pv(record, signals, cycles),
        *_on_sampling(signals, cycles),
        *_on_steadiness(signals, cycles, means),
        *_on_static_gain(means, has_static_gain=has_static_gain),
        *_on_valve(means),
    )


def _on_pv(record: Record, signals: Waveforms, cycles: tuple[Cycle, ...]) -> Iterator[str]:
    pv_pct = np.array([sample.pv_pct for sample in record.samples])[_inside(signals, cycles)]
    if np.any((pv_pct <= SPAN_END_PCT) | (pv_pct >= 100 - SPAN_END_PCT)):
        yield "PV reached an end of its span: the swing is cut, and the gain reads too high."
    swing = _swing_pct(cycles)
    if swing < SWING_PER_NOISE_ENOUGH * record.noise_pct:
        yield (
            f"The noise is high: PV swung by only {swing / record.noise_pct:.1f} times its noise at rest; "
            "larger steps would tell more."
        )


def _on_sampling(signals: Waveforms, cycles: tuple[Cycle, ...]) -> Iterator[str]:
    samples = samples_per_cycle(signals, cycles)
    if samples < SAMPLES_PER_CYCLE_ENOUGH:
        yield f"Sampling is coarse: {samples:.0f} samples a cycle; {SAMPLES_PER_CYCLE_ENOUGH:.0f} or more are better."
    inside = _inside(signals, cycles)
    gap_s = float(np.max(np.diff(signals.sample_s[inside])))
    period_s = float(np.mean([cycle.period_s for cycle in cycles]))
    if gap_s > GAP_AT_MOST_RATIO * period_s:
        yield f"No sample came for {gap_s:.2g} s of a period of {period_s:.2g} s; a straight line stands there."
    changed = float(np.mean(np.diff(signals.pv_pct[inside]) != 0))
    if changed < PV_CHANGES_AT_LEAST_RATIO:
        yield (
            f"PV changed in only {100 * changed:.0f} % of the samples: it is refreshed more slowly than it is read, "
            "or it is coarse, and what holds it reads as dead time."
        )


def _on_steadiness(signals: Waveforms, cycles: tuple[Cycle, ...], means: Balance) -> Iterator[str]:
    period_s = means.window_s / len(cycles)
    drift_pct = means.slope_pct_per_s * period_s
    if abs(drift_pct) > DRIFT_AT_MOST_RATIO * _swing_pct(cycles):
        yield f"PV's mean moved by {drift_pct:+.2g} % a cycle (counted with the output); this drift was removed."
    periods = [cycle.period_s for cycle in cycles]
    if max(periods) - min(periods) > PERIODS_AGREE_RATIO * period_s:
        yield f"The period varied from {min(periods):.3g} to {max(periods):.3g} s: something disturbed the test."
    swings = [cycle.pv_amplitude_pct for cycle in cycles]
    if max(swings) - min(swings) > SWINGS_AGREE_RATIO * _swing_pct(cycles):
        yield f"PV's swing varied from {min(swings):.2g} to {max(swings):.2g} %: something disturbed the test."
    duty, low, high = _duty(signals, means)
    if not low - DUTY_SLACK_RATIO <= duty <= high + DUTY_SLACK_RATIO:
        yield (
            f"The half cycles are unequal: the output stood high for {100 * duty:.0f} % of the time, where its steps "
            f"explain {100 * low:.0f} to {100 * high:.0f} %. The load has changed since the output was found, or the "
            "plant answers differently up and down."
        )


def _on_static_gain(means: Balance, *, has_static_gain: bool) -> Iterator[str]:
    if abs(means.mean_op_pct) < MEAN_OP_AT_LEAST_RATIO * means.amplitude_pct:
        yield "The output's mean stayed at its centre: the test tells no static gain, nor whether the plant integrates."
    elif not has_static_gain:
        yield "The static gain shows too faintly to be given: a longer baseline or longer test would tell more."


def _on_valve(means: Balance) -> Iterator[str]:
    """A backlash b leaves a two-step relay a step of 2d - b and no change of phase: Ku reads 1/(1 - b/2d) high."""
    high_step_pct = 2 * means.amplitude_pct
    if high_step_pct > DEAD_BAND_PCT:
        share = 1 / (1 - DEAD_BAND_PCT / high_step_pct) - 1
        yield (
            "One amplitude can't tell a dead band of the valve from a weaker plant: "
            f"each {DEAD_BAND_PCT:.0f} % of dead band would make the gain read {100 * share:.0f} % high."
        )
    else:
        yield f"The output moved by {high_step_pct:.2g} % in all: a valve with so much dead band would not have moved."


def _inside(signals: Waveforms, cycles: tuple[Cycle, ...]) -> NDArray[np.bool_]:
    from_s, to_s = cycles[0].from_s, cycles[-1].from_s + cycles[-1].period_s
    return np.asarray((signals.sample_s >= from_s) & (signals.sample_s < to_s))


def _swing_pct(cycles: tuple[Cycle, ...]) -> float:
    return float(np.mean([cycle.pv_amplitude_pct for cycle in cycles]))


def _duty(signals: Waveforms, means: Balance) -> tuple[float, float, float]:
    """Share of the time that OP stood high; and what its steps explain, from an integrator to pure dead time.

    An integrator needs mean OP 0, so the share of the high side is down/(up + down); pure dead time switches evenly.
    """
    in_test = (signals.effect_s >= means.from_s) & (signals.effect_s < means.from_s + means.window_s)
    up, down = float(np.max(signals.op_pct[in_test])), -float(np.min(signals.op_pct[in_test]))
    even = down / (up + down)
    duty = (means.mean_op_pct + down) / (up + down)
    return duty, min(even, 0.5), max(even, 0.5)
