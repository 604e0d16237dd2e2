"""Is the loop fit for the test?  Every no with its remedy; nothing has been written yet."""

from collections.abc import Iterator, Sequence
from math import isfinite
from statistics import fmean

from autotune.experiment.interlocks import FREE_CLAMPS, first_watch_fault
from autotune.experiment.plan import TestPlan
from autotune.experiment.steadiness import SAMPLES_AT_LEAST, Rest, measure_rest
from autotune.loop.limits import AsFound
from autotune.loop.mode import LoopMode
from autotune.loop.outcome import Refusal
from autotune.loop.quality import Quality
from autotune.loop.sample import GuardState, GuardView, Sample

FIT_MODES = (LoopMode.MAN, LoopMode.AUTO)
"""Modes from which a test may start."""

TOKEN_AT_MOST = (1 << 32) - 1


def refusals(plan: TestPlan, samples: Sequence[Sample], t_s: float) -> tuple[Refusal, ...]:
    """Every reason against a test, from the samples of a look around in order of time; empty when the loop is fit."""
    if not samples:
        return (no_view(),)
    readable = tuple(_judge_readings(plan, samples, t_s))
    rest = () if readable else (*_judge_room(plan, find(plan, samples)), *_judge_rest(plan, samples))
    return (*_judge_plan(plan), *readable, *_judge_guard(plan, samples[-1]), *_judge_watch(plan, samples), *rest)


def no_view() -> Refusal:
    """The loop was not seen at all."""
    return Refusal("NO_VIEW", "the loop could not be read", "check cable, address and that the controller runs")


def find(plan: TestPlan, samples: Sequence[Sample]) -> AsFound:
    """The loop as found: the output's last reading in manual, its mean in automatic."""
    last = samples[-1]
    outputs = [sample.op_pct for sample in samples if sample.op_pct is not None]
    op_pct = outputs[-1] if last.mode is LoopMode.MAN else fmean(outputs)
    return AsFound(op_pct=op_pct, sp_pct=last.sp_pct, sample=last)


def refuse_rest(plan: TestPlan, rest: Rest) -> Refusal | None:
    """Why PV is not steady enough for a test; ``None`` when it is.  A slope counts as far as noise can't explain it."""
    if not rest.noise_pct <= plan.baseline_noise_at_most_pct:
        return Refusal(
            "TOO_NOISY",
            f"PV's noise is {rest.noise_pct:.3f} % (sd), {plan.baseline_noise_at_most_pct:.3f} % is allowed",
            "look for the source of the noise, filter the transmitter, or allow more",
        )
    if not abs(rest.drift_pct_per_s) - 2.0 * rest.drift_sd_pct_per_s <= plan.baseline_drift_at_most_pct_per_s:
        return Refusal(
            "DRIFTING",
            f"PV drifts by {rest.drift_pct_per_s:.4f} %/s, {plan.baseline_drift_at_most_pct_per_s:.4f} %/s is allowed",
            "wait until the loop has settled",
        )
    if plan.relay.hysteresis_pct is not None and not rest.noise_pct <= plan.relay.hysteresis_pct:
        return Refusal(
            "NOISE_ABOVE_HYSTERESIS",
            f"PV's noise is {rest.noise_pct:.3f} % (sd), the hysteresis only {plan.relay.hysteresis_pct:.3f} %",
            "leave the hysteresis to the measured noise, or widen it",
        )
    return None


def _judge_plan(plan: TestPlan) -> Iterator[Refusal]:
    relay, limits = plan.relay, plan.limits
    if not (0.0 < relay.step_up_pct <= limits.step_up_pct and 0.0 < relay.step_down_pct <= limits.step_down_pct):
        reason = f"steps of +{relay.step_up_pct} / -{relay.step_down_pct} % are not within the limits"
        yield Refusal("STEPS_BEYOND_LIMITS", reason, "make the steps smaller, or let the owner widen the limits")
    if plan.plc_scan_s is None and not plan.has_clock_tags:
        reason = "neither the PLC's scan nor its clock is known, so no time can be trusted"
        yield Refusal("PLC_SCAN_NOT_KNOWN", reason, "declare plc_scan_s or offer the clock tags")
    if not plan.has_guard and not plan.accepts_no_guard:
        reason = "the PLC has no guard, so a late write can't be excluded"
        yield Refusal("NO_GUARD", reason, "load the guard into the PLC, or record a consent to test without it")
    if plan.has_guard and not 1 <= plan.token <= TOKEN_AT_MOST:
        yield Refusal("TOKEN_NOT_VALID", f"token {plan.token} is no holder's token", "report this; it is our fault")


def _judge_readings(plan: TestPlan, samples: Sequence[Sample], t_s: float) -> Iterator[Refusal]:
    last = samples[-1]
    faulty = next(
        (each for each in samples if each.pv_quality is not Quality.GOOD or not _is_number(each.pv_pct)), None
    )
    if faulty is not None:
        reason = f"PV is {faulty.pv_quality.value}"
        yield Refusal("PV_QUALITY", reason, "check the transmitter and remove any forcing or simulation")
    if any(sample.op_quality not in FREE_CLAMPS or not _is_number(sample.op_pct) for sample in samples):
        yield Refusal("OP_QUALITY", f"the output is {last.op_quality.value}", "check the output's tag and channel")
    if any(sample.sp_pct is not None and not isfinite(sample.sp_pct) for sample in samples):
        yield Refusal("SP_QUALITY", "the setpoint is no number", "check the setpoint's tag")
    age_s = t_s - last.taken.earliest_s
    if not abs(age_s) <= plan.limits.sample_age_s:
        yield Refusal("SAMPLE_STALE", f"PV was sampled {age_s:.3f} s ago", "check that the PLC runs and the network")
    yield from _judge_mode(samples)


def _judge_mode(samples: Sequence[Sample]) -> Iterator[Refusal]:
    mode = samples[-1].mode
    if any(sample.mode is not mode for sample in samples):
        yield Refusal("MODE_CHANGED", "the mode changed while we looked", "agree with the operator, then start again")
    elif mode in (LoopMode.CAS, LoopMode.REMOTE):
        reason = f"the loop is in {mode.value}: its setpoint comes from elsewhere, and that source would wind up"
        yield Refusal("MODE_NOT_SUITABLE", reason, "put the loop in automatic or manual first")
    elif mode not in FIT_MODES:
        yield Refusal("MODE_NOT_SUITABLE", f"the mode is {mode.value}", "put the loop in automatic or manual first")


def _judge_room(plan: TestPlan, as_found: AsFound) -> Iterator[Refusal]:
    limits, relay = plan.limits, plan.relay
    pv_pct = as_found.sample.pv_pct
    if pv_pct is not None and not limits.pv_low_pct <= pv_pct <= limits.pv_high_pct:
        reason = f"PV is {pv_pct:.2f} %, outside {limits.pv_low_pct:.2f} .. {limits.pv_high_pct:.2f} %"
        yield Refusal("PV_OUTSIDE_LIMITS", reason, "bring PV between its limits first")
    if not limits.op_low_pct <= as_found.op_pct <= limits.op_high_pct:
        reason = f"the output is {as_found.op_pct:.2f} %, outside {limits.op_low_pct:.2f} .. {limits.op_high_pct:.2f} %"
        yield Refusal("OP_OUTSIDE_LIMITS", reason, "bring the output between its limits first")
        return
    up_pct, down_pct = limits.op_high_pct - as_found.op_pct, as_found.op_pct - limits.op_low_pct
    if not (up_pct >= relay.step_up_pct and down_pct >= relay.step_down_pct):
        reason = f"the output {as_found.op_pct:.2f} % leaves room for +{up_pct:.2f} / -{down_pct:.2f} % only"
        yield Refusal("TOO_LITTLE_HEADROOM", reason, "make the steps smaller, or start from another output")


def _judge_rest(plan: TestPlan, samples: Sequence[Sample]) -> Iterator[Refusal]:
    """In automatic the controller moves PV; the baseline in manual judges then."""
    if samples[-1].mode is not LoopMode.MAN:
        return
    outputs = [sample.op_pct for sample in samples if sample.op_pct is not None]
    if max(outputs) - min(outputs) > plan.limits.op_resolution_pct:
        yield Refusal("OP_MOVING", "somebody moves the output by hand", "agree with the operator, then start again")
    pvs = [sample.pv_pct for sample in samples if sample.pv_pct is not None]
    if len(pvs) >= SAMPLES_AT_LEAST:
        refusal = refuse_rest(plan, measure_rest([sample.taken.middle_s for sample in samples], pvs))
        if refusal is not None:
            yield refusal


def _judge_guard(plan: TestPlan, last: Sample) -> Iterator[Refusal]:
    if not plan.has_guard:
        return
    if last.guard is None:
        yield Refusal("GUARD_NOT_SEEN", "the PLC's guard can't be read", "check the guard's tags")
        return
    yield from _judge_guard_view(plan, last.guard)


def _judge_guard_view(plan: TestPlan, guard: GuardView) -> Iterator[Refusal]:
    if guard.holder not in (None, 0):
        ours = " (ours: an earlier test was not handed back)" if guard.holder == plan.token else ""
        reason = f"the loop is held by token {guard.holder}{ours}"
        yield Refusal("GUARD_HELD", reason, "end that test first, or release it at the plant's own panel")
    if guard.state is not GuardState.IDLE:
        yield Refusal("GUARD_NOT_IDLE", f"the guard is {guard.state.value}", "acknowledge it at the plant's own panel")
    if guard.is_enabled is False:
        yield Refusal("GUARD_NOT_ENABLED", "tests are not enabled", "press enable at the plant's own panel")
    if guard.is_stop_pressed is True:
        yield Refusal("GUARD_STOP_PRESSED", "stop is pressed", "release stop at the plant's own panel")


def _judge_watch(plan: TestPlan, samples: Sequence[Sample]) -> Iterator[Refusal]:
    fault = next((found for each in samples if (found := first_watch_fault(plan.limits, each)) is not None), None)
    if fault is not None:
        yield Refusal("WATCH", fault, "put the plant into the state that the test needs")


def _is_number(reading: float | None) -> bool:
    return reading is not None and isfinite(reading)
