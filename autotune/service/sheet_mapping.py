"""From what the program knows to the shapes that a sheet stores.  The only place that knows both."""

import platform
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from importlib.metadata import version
from types import MappingProxyType
from typing import Literal

from autotune.config.types import LoopConfig, ModbusEndpoint
from autotune.design.forecast import Forecast
from autotune.design.proposal import ProposalSheet
from autotune.experiment.phases import Phase
from autotune.experiment.plan import TestPlan
from autotune.experiment.state import Experiment
from autotune.field.security import security_line
from autotune.identify.findings import FindingsOrRefusal, OscillationPoint
from autotune.loop.limits import AsFound
from autotune.loop.outcome import Interval, Refusal
from autotune.loop.sample import Sample
from autotune.loop.settings import BlockDescription, BlockFields, DerivativeKind, GainKind, GainPer, IntegralKind
from autotune.loop.span import Span
from autotune.service.persons import Person
from autotune.service.test_log import LoggedWrite, StoryLine
from autotune.service.words import end_in_words
from autotune.sheet import schema

_ENDED: Mapping[Phase, Literal["COMPLETE", "ABORTED", "RELEASED", "STRANDED"]] = MappingProxyType(
    {
        Phase.COMPLETE: "COMPLETE",
        Phase.ABORTED: "ABORTED",
        Phase.RELEASED: "RELEASED",
        Phase.STRANDED: "STRANDED",
    }
)
_LIBRARIES = ("numpy", "scipy", "pymodbus", "pydantic")
_INTEGRAL_UNITS = {
    IntegralKind.TIME_S: "s",
    IntegralKind.TIME_MIN: "min",
    IntegralKind.REPEATS_PER_S: "repeats/s",
    IntegralKind.REPEATS_PER_MIN: "repeats/min",
    IntegralKind.GAIN_PER_S: "per s",
    IntegralKind.GAIN_PER_MIN: "per min",
    IntegralKind.GAIN_PER_EXECUTION: "per execution",
}
_DERIVATIVE_UNITS = {
    DerivativeKind.TIME_S: "s",
    DerivativeKind.TIME_MIN: "min",
    DerivativeKind.GAIN_S: "s",
    DerivativeKind.GAIN_MIN: "min",
    DerivativeKind.GAIN_PER_EXECUTION: "per execution",
}


@dataclass(frozen=True, slots=True)
class TimeAxis:
    """One instant on both clocks, so that monotonic seconds can be told as UTC on a sheet."""

    start_s: float
    start_utc: datetime

    def utc(self, t_s: float) -> datetime:
        """The UTC instant of ``t_s``, as if the wall clock had run evenly since the start."""
        return self.start_utc + timedelta(seconds=t_s - self.start_s)


def field_units(block: BlockDescription, pv_unit: str) -> tuple[str, str, str]:
    """The units of gain, integral and derivative as the controller holds them."""
    if block.gain_kind is GainKind.PROPORTIONAL_BAND:
        gain = "%" if block.gain_per is GainPer.PERCENT else pv_unit
    else:
        gain = "%/%" if block.gain_per is GainPer.PERCENT else f"%/{pv_unit}"
    return gain, _INTEGRAL_UNITS[block.integral_kind], _DERIVATIVE_UNITS[block.derivative_kind]


def settings_quantities(loop: LoopConfig, fields: BlockFields | None) -> tuple[schema.Quantity, ...]:
    """Settings with the controller's own words and units; empty where they were not read."""
    if fields is None:
        return ()
    names = ("gain", "integral", "derivative")
    numbers = (fields.gain, fields.integral, fields.derivative)
    units = field_units(loop.block, loop.pv_span.unit)
    return tuple(
        schema.Quantity(name=name, label=label, unit=unit, amount=number)
        for name, label, unit, number in zip(names, loop.block.panel_labels, units, numbers, strict=True)
        if number is not None
    )


def fields_of(quantities: Sequence[schema.Quantity]) -> BlockFields | None:
    """The settings that a sheet holds, as the controller's numbers; ``None`` where it lacks gain or integral."""
    amounts = {quantity.name: quantity.amount for quantity in quantities}
    gain, integral = amounts.get("gain"), amounts.get("integral")
    if gain is None or integral is None:
        return None
    return BlockFields(gain, integral, amounts.get("derivative"))


def person_line(person: Person) -> schema.Person:
    """The person as stored."""
    return schema.Person(name=person.name, is_authenticated=person.is_authenticated)


def controller_line(loop: LoopConfig) -> str:
    """The controller's name and address in one line."""
    endpoint = loop.controller.endpoint
    if isinstance(endpoint, ModbusEndpoint):
        return f"{loop.controller.name}, Modbus/TCP {endpoint.host}:{endpoint.port}, device {endpoint.device_id}"
    return f"{loop.controller.name}, OPC UA {endpoint.url}"


def versions() -> schema.Versions:
    """The versions that made a sheet."""
    return schema.Versions(
        autotune=version("autotune"),
        python=platform.python_version(),
        libraries=tuple((name, version(name)) for name in _LIBRARIES),
    )


def as_found_section(loop: LoopConfig, as_found: AsFound | None, settings: BlockFields | None) -> schema.AsFound | None:
    """The loop before it was touched; ``None`` where it never came so far."""
    if as_found is None:
        return None
    pv_pct = as_found.sample.pv_pct
    return schema.AsFound(
        mode=as_found.mode.value,
        op_pct=as_found.op_pct,
        op_eu=loop.op_span.to_eu(as_found.op_pct),
        sp_pct=as_found.sp_pct,
        sp_eu=None if as_found.sp_pct is None else loop.pv_span.to_eu(as_found.sp_pct),
        pv_pct=pv_pct,
        pv_eu=None if pv_pct is None else loop.pv_span.to_eu(pv_pct),
        settings=settings_quantities(loop, settings),
    )


def plan_section(plan: TestPlan) -> schema.Plan:
    """The excitation that was planned."""
    return schema.Plan(
        kind="relay",
        first_move=plan.relay.first_move.value,
        step_up_pct=plan.relay.step_up_pct,
        step_down_pct=plan.relay.step_down_pct,
        hysteresis_pct=plan.relay.hysteresis_pct,
        wanted_swing_pct=plan.relay.wanted_swing_pct,
        cycles_to_agree=plan.convergence.cycles_to_agree,
        agreement_pct=plan.convergence.agreement_pct,
        cycles_to_discard=plan.convergence.cycles_to_discard,
        scan_s=plan.scan_s,
        plc_scan_s=plan.plc_scan_s,
        baseline_s=plan.baseline_s,
        has_guard=plan.has_guard,
        has_clock_tags=plan.has_clock_tags,
    )


def rested_section(experiment: Experiment) -> schema.Rested | None:
    """PV at rest; ``None`` where the test never came so far."""
    rested = experiment.rested
    if rested is None:
        return None
    return schema.Rested(
        reference_pct=rested.reference_pct,
        hysteresis_pct=rested.hysteresis_pct,
        noise_pct=rested.noise_pct,
        drift_pct_per_s=rested.drift_pct_per_s,
    )


def limits_section(plan: TestPlan) -> schema.Limits:
    """The limits that were in force."""
    limits = plan.limits
    return schema.Limits(
        step_up_pct=limits.step_up_pct,
        step_down_pct=limits.step_down_pct,
        op_low_pct=limits.op_low_pct,
        op_high_pct=limits.op_high_pct,
        pv_low_pct=limits.pv_low_pct,
        pv_high_pct=limits.pv_high_pct,
        op_rate_pct_per_s=limits.op_rate_pct_per_s,
        pv_rate_pct_per_s=limits.pv_rate_pct_per_s,
        pv_deviation_pct=limits.pv_deviation_pct,
        test_within_s=limits.test_within_s,
        cycles_at_most=limits.cycles_at_most,
        watch=tuple(
            schema.WatchLimit(name=watch.name, low_eu=watch.low_eu, high_eu=watch.high_eu, meaning=watch.meaning)
            for watch in limits.watch
        ),
    )


def samples_section(samples: Sequence[Sample]) -> schema.Samples:
    """All samples in columns."""
    guards = [sample.guard for sample in samples]
    watches = [watch.name for watch in samples[0].watch] if samples else []
    return schema.Samples(
        t_s=tuple(sample.t_s for sample in samples),
        taken_earliest_s=tuple(sample.taken.earliest_s for sample in samples),
        taken_latest_s=tuple(sample.taken.latest_s for sample in samples),
        pv_pct=tuple(sample.pv_pct for sample in samples),
        sp_pct=tuple(sample.sp_pct for sample in samples),
        op_pct=tuple(sample.op_pct for sample in samples),
        mode=tuple(sample.mode.value for sample in samples),
        pv_quality=tuple(sample.pv_quality.value for sample in samples),
        op_quality=tuple(sample.op_quality.value for sample in samples),
        guard_state=tuple(None if guard is None else guard.state.value for guard in guards),
        plc_clock_ms=tuple(sample.plc_clock_ms for sample in samples),
        op_effect_ms=tuple(None if guard is None else guard.op_effect_ms for guard in guards),
        op_effect_count=tuple(None if guard is None else guard.op_effect_count for guard in guards),
        watch=tuple(
            schema.WatchColumn(name=name, reading_eu=tuple(sample.watch[k].reading_eu for sample in samples))
            for k, name in enumerate(watches)
        ),
    )


def write_lines(writes: Sequence[LoggedWrite], axis: TimeAxis) -> tuple[schema.WriteLine, ...]:
    """Every tag of every write request."""
    return tuple(
        schema.WriteLine(
            t_s=write.report.sent.earliest_s,
            utc=axis.utc(write.report.sent.earliest_s),
            tag=tag,
            raw=raw,
            outcome=write.report.outcome.name,
            sent_earliest_s=write.report.sent.earliest_s,
            sent_latest_s=write.report.sent.latest_s,
            why=type(write.command).__name__,
            detail=write.report.detail,
        )
        for write in writes
        for tag, raw in write.values.items()
    )


def event_lines(story: Sequence[StoryLine], axis: TimeAxis) -> tuple[schema.EventLine, ...]:
    """Everything that happened, in order of time."""
    return tuple(
        schema.EventLine(
            t_s=line.t_s, utc=axis.utc(line.t_s), kind=line.kind, text=line.text, code=line.code, by=line.by
        )
        for line in story
    )


def span_section(span: Span) -> schema.Span:
    """A span as stored."""
    return schema.Span(low_eu=span.low_eu, high_eu=span.high_eu, unit=span.unit)


def findings_section(result: FindingsOrRefusal | None, time_base: str) -> schema.Findings | None:
    """What was measured and concluded, or why nothing could be."""
    if result is None:
        return None
    if isinstance(result, Refusal):
        return schema.Findings(time_base=time_base, refusal=str(result))
    ultimate = result.ultimate
    concluded = [
        _quantity("ultimate_gain", "ultimate gain", "%OP/%PV", ultimate.ultimate_gain),
        _quantity("ultimate_period_s", "ultimate period", "s", ultimate.ultimate_period_s),
    ]
    if result.static_gain is not None:
        concluded.append(_quantity("static_gain", "static process gain", "%PV/%OP", result.static_gain))
    return schema.Findings(
        time_base=result.time_base.value,
        cycles=tuple(
            schema.Cycle(
                from_s=cycle.from_s,
                period_s=cycle.period_s,
                pv_amplitude_pct=cycle.pv_amplitude_pct,
                amplitude_pct=cycle.amplitude_pct,
            )
            for cycle in result.cycles
        ),
        seen=(_seen(result.describing_function), _seen(result.fourier)),
        method=ultimate.method,
        concluded=tuple(concluded),
        because=ultimate.because,
        cautions=result.cautions,
    )


def forecast_figures(told: Forecast | Refusal | None) -> tuple[schema.Quantity, ...]:
    """What settings are expected to do; empty where no model says it."""
    if told is None or isinstance(told, Refusal):
        return ()
    figures = [_bounded("peak_sensitivity", "Ms", "", told.margins.peak_sensitivity, told.peak_sensitivity)]
    for name, label, unit, amount in (
        ("gain_margin_ratio", "gain margin", "x", told.margins.gain_margin_ratio),
        ("phase_margin_deg", "phase margin", "deg", told.margins.phase_margin_deg),
        ("delay_margin_s", "delay margin", "s", told.margins.delay_margin_s),
        ("setpoint_settling_time_s", "settling", "s", None if told.setpoint is None else told.setpoint.settling_time_s),
        ("op_noise_pct", "OP noise", "%", told.op_noise_pct),
    ):
        figures.append(schema.Quantity(name=name, label=label, unit=unit, amount=amount))
    if told.setpoint is not None and told.load is not None:
        overshoot, load_iae = told.setpoint.overshoot_pct, told.load.iae_pct_s
        figures.insert(1, _bounded("overshoot_pct", "overshoot", "%", overshoot, told.overshoot_pct))
        figures.insert(2, _bounded("load_iae_pct_s", "load IAE", "%s/%", load_iae, told.load_iae_pct_s))
    return tuple(figures)


def _bounded(name: str, label: str, unit: str, amount: float | None, band: Interval | None) -> schema.Quantity:
    """A figure with its band, where the band holds it."""
    if amount is None or band is None or not band.low <= amount <= band.high:
        return schema.Quantity(name=name, label=label, unit=unit, amount=amount)
    return schema.Quantity(
        name=name, label=label, unit=unit, amount=amount, low=band.low, high=band.high, level=band.level
    )


def proposals_section(loop: LoopConfig, proposed: ProposalSheet | None) -> tuple[schema.Proposal, ...]:
    """All proposals, and the rules that propose nothing with their reason."""
    if proposed is None:
        return ()
    return tuple(
        schema.Proposal(
            name=proposal.name,
            title=proposal.title,
            source=proposal.source,
            is_recommended=proposal.name == proposed.recommended,
            settings=settings_quantities(loop, proposal.fields),
            figures=forecast_figures(proposal.forecast),
            rounding_pct=proposal.rounding_pct,
            gain_factor=proposal.gain_factor,
            cautions=proposal.cautions,
        )
        for proposal in proposed.proposals
    ) + tuple(
        schema.Proposal(name=no.name, title=no.title, source=no.source, not_proposed_because=str(no.refusal))
        for no in proposed.not_proposed
    )


def costs_of(plan: TestPlan, loop: LoopConfig) -> tuple[str, ...]:
    """What each thing that the PLC doesn't offer, or the loop's file doesn't ask for, has cost this test."""
    costs = []
    if loop.is_writing_settings_allowed and not loop.proves_writable:
        costs.append("not shown that the settings can be written")
    if not plan.has_guard:
        costs.append("no guard in the PLC: late writes after our own death cannot be excluded")
    if not plan.has_clock_tags:
        costs.append("no PLC clock tags: unknown network delay is counted as dead time and widens the intervals")
    unprotected = security_line(loop.controller.endpoint)
    return (*costs, *(() if unprotected is None else (unprotected,)))


def outcome_section(experiment: Experiment, faults: Sequence[str]) -> schema.Outcome:
    """How the test ended, in the words that a technician reads."""
    code = next((end.code for end in (experiment.trip, experiment.refusal) if end is not None), None)
    return schema.Outcome(
        ended=_ended(experiment.phase), code=code, text="; ".join((end_in_words(experiment), *faults))
    )


def _ended(phase: Phase) -> Literal["COMPLETE", "ABORTED", "RELEASED", "STRANDED"]:
    """A test that our own fault broke off stays in its phase: what it had touched counts as stranded."""
    return _ENDED.get(phase, "STRANDED" if phase.is_touched else "ABORTED")


def _quantity(name: str, label: str, unit: str, interval: Interval) -> schema.Quantity:
    return schema.Quantity(
        name=name,
        label=label,
        unit=unit,
        amount=interval.best,
        low=interval.low,
        high=interval.high,
        level=interval.level,
    )


def _seen(point: OscillationPoint) -> schema.SeenPoint:
    return schema.SeenPoint(
        method=point.method,
        frequency_rad_per_s=point.frequency_rad_per_s,
        gain=point.gain,
        phase_rad=point.phase_rad,
        gain_sd_ratio=point.gain_sd_ratio,
        phase_sd_rad=point.phase_sd_rad,
    )
