"""What the live display shows of a test: one frozen view, nothing to compute."""

from dataclasses import dataclass

from autotune.experiment.cycles import RelayCycle
from autotune.experiment.phases import Phase
from autotune.experiment.room import allowed_op_pct
from autotune.experiment.state import Experiment
from autotune.loop.mode import LoopMode


@dataclass(frozen=True, slots=True)
class Picture:
    """A test at one instant; percent of span and seconds, ``None`` where not known yet.

    ``op_low_pct`` and ``op_high_pct`` bound what the test may ask for.  ``rough_ultimate_gain`` is 4d/(pi a) of the
    last whole cycle, in %OP/%PV: what is seen, not what will be concluded.  ``left_at_most_s`` is the time until the
    test must be over.
    """

    loop: str
    phase: Phase
    stage: str
    t_s: float | None
    pv_pct: float | None
    sp_pct: float | None
    op_pct: float | None
    mode: LoopMode | None
    asked_op_pct: float | None
    pv_low_pct: float
    pv_high_pct: float
    op_low_pct: float
    op_high_pct: float
    reference_pct: float | None
    hysteresis_pct: float | None
    noise_pct: float | None
    drift_pct_per_s: float | None
    cycles: tuple[RelayCycle, ...]
    usable_cycles: int
    cycles_at_most: int
    period_s: float | None
    pv_amplitude_pct: float | None
    rough_ultimate_gain: float | None
    elapsed_s: float
    left_at_most_s: float
    because: str


def picture(experiment: Experiment) -> Picture:
    """The picture of a test as it stands."""
    sample, limits, whole = experiment.sample, experiment.plan.limits, experiment.whole_cycles
    op_low_pct, op_high_pct = limits.op_low_pct, limits.op_high_pct
    if experiment.as_found is not None:
        op_low_pct, op_high_pct = allowed_op_pct(limits, experiment.as_found)
    last = whole[-1] if whole else None
    elapsed_s = _since_s(experiment.started_s, experiment.t_s)
    return Picture(
        loop=experiment.plan.loop,
        phase=experiment.phase,
        stage=experiment.stage.value,
        t_s=experiment.t_s,
        pv_pct=None if sample is None else sample.pv_pct,
        sp_pct=None if sample is None else sample.sp_pct,
        op_pct=None if sample is None else sample.op_pct,
        mode=None if sample is None else sample.mode,
        asked_op_pct=experiment.held.op_pct,
        pv_low_pct=limits.pv_low_pct,
        pv_high_pct=limits.pv_high_pct,
        op_low_pct=op_low_pct,
        op_high_pct=op_high_pct,
        reference_pct=experiment.reference_pct,
        hysteresis_pct=experiment.hysteresis_pct,
        noise_pct=experiment.noise_pct,
        drift_pct_per_s=experiment.drift_pct_per_s,
        cycles=whole,
        usable_cycles=len(experiment.usable_cycles),
        cycles_at_most=limits.cycles_at_most,
        period_s=None if last is None else last.period_s,
        pv_amplitude_pct=None if last is None else last.pv_amplitude_pct,
        rough_ultimate_gain=None if last is None else last.rough_ultimate_gain,
        elapsed_s=elapsed_s,
        left_at_most_s=max(0.0, limits.test_within_s - _since_s(experiment.touched_s, experiment.t_s)),
        because=experiment.because,
    )


def _since_s(from_s: float | None, t_s: float | None) -> float:
    return 0.0 if from_s is None or t_s is None else t_s - from_s
