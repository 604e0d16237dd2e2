"""A running test, a loop and a plan as a screen shows them: engineering units, seconds since the test began."""

from collections.abc import Callable, Iterator, Sequence
from datetime import datetime

from autotune.config.types import LoopConfig
from autotune.confirmed_write.confirmation import GOOD_FOR_S
from autotune.confirmed_write.plan import WritePlan
from autotune.experiment.commands import DriveOutput
from autotune.experiment.picture import Picture, picture
from autotune.loop.limits import WatchLimit
from autotune.loop.quality import Quality
from autotune.loop.sample import Sample, WatchReading
from autotune.service.cautions import BEFORE_SETTINGS_ARE_WRITTEN
from autotune.service.changing import digest_to_type
from autotune.service.local_views import (
    CycleAnswer,
    PlanAnswer,
    PlanLineAnswer,
    SheetLineAnswer,
    StoryAnswer,
    TestNowAnswer,
    TrendAnswer,
    WatchAnswer,
)
from autotune.service.runner import TestRunner
from autotune.service.sheet_mapping import settings_quantities
from autotune.service.test_log import LoggedWrite
from autotune.sheet.store import SheetLine

TREND_POINTS_AT_MOST = 8000
"""Readings in one part of a trend; of a longer part every n-th is told."""


def utc_text(instant: datetime) -> str:
    """An instant with its offset, to the millisecond."""
    return instant.isoformat(timespec="milliseconds")


def sheet_line_answer(line: SheetLine) -> SheetLineAnswer:
    """One line of the index."""
    return SheetLineAnswer(
        sheet=line.sheet_id,
        loop=line.loop,
        started_utc=line.started_utc,
        outcome=line.ended,
        code=line.code,
        hash=line.hash,
    )


def test_now_answer(loop: LoopConfig, test: str, runner: TestRunner) -> TestNowAnswer:
    """The test as it stands."""
    now = picture(runner.experiment)
    pv, op = loop.pv_span, loop.op_span
    return TestNowAnswer(
        test=test,
        phase=now.phase.value,
        stage=now.stage,
        is_over=runner.experiment.is_over,
        because=now.because,
        elapsed_s=now.elapsed_s,
        left_at_most_s=now.left_at_most_s,
        mode=None if now.mode is None else now.mode.value,
        pv_eu=_maybe(pv.to_eu, now.pv_pct),
        sp_eu=_maybe(pv.to_eu, now.sp_pct),
        op_eu=_maybe(op.to_eu, now.op_pct),
        asked_op_eu=_maybe(op.to_eu, now.asked_op_pct),
        pv_low_eu=pv.to_eu(now.pv_low_pct),
        pv_high_eu=pv.to_eu(now.pv_high_pct),
        op_low_eu=op.to_eu(now.op_low_pct),
        op_high_eu=op.to_eu(now.op_high_pct),
        reference_eu=_maybe(pv.to_eu, now.reference_pct),
        hysteresis_eu=_maybe(pv.delta_to_eu, now.hysteresis_pct),
        noise_eu=_maybe(pv.delta_to_eu, now.noise_pct),
        usable_cycles=now.usable_cycles,
        cycles_to_agree=loop.convergence.cycles_to_agree,
        cycles_at_most=now.cycles_at_most,
        cycles=_cycles(loop, now),
        watch=_watch(loop.watch, runner.experiment.sample),
        story=_story(runner),
    )


class TrendTeller:
    """Tells one listener the trend of one test: first the whole of it, then what has come since."""

    def __init__(self, loop: LoopConfig, runner: TestRunner) -> None:
        self.runner = runner
        self._loop = loop
        self._samples = 0
        self._writes = 0
        self._op_pct: float | None = None

    def next(self) -> TrendAnswer:
        """The readings and moves of the output since the last call."""
        samples, writes = self.runner.log.since(self._samples, self._writes)
        start_s = _start_s(self.runner)
        part = samples[:: max(1, -(-len(samples) // TREND_POINTS_AT_MOST))]
        pv, op = self._loop.pv_span, self._loop.op_span
        answer = TrendAnswer(
            first=self._samples,
            t_s=tuple(sample.t_s - start_s for sample in part),
            pv_eu=tuple(_maybe(pv.to_eu, sample.pv_pct) for sample in part),
            sp_eu=tuple(_maybe(pv.to_eu, sample.sp_pct) for sample in part),
            op_eu=tuple(_maybe(op.to_eu, sample.op_pct) for sample in part),
            switches=tuple(self._switches(writes, start_s)),
        )
        self._samples += len(samples)
        self._writes += len(writes)
        return answer

    def _switches(self, writes: Sequence[LoggedWrite], start_s: float) -> Iterator[tuple[float, float]]:
        for write in writes:
            if isinstance(write.command, DriveOutput) and write.command.op_pct != self._op_pct:
                self._op_pct = write.command.op_pct
                yield write.report.sent.latest_s - start_s, self._loop.op_span.to_eu(self._op_pct)


def plan_answer(loop: LoopConfig, plan: WritePlan) -> PlanAnswer:
    """The plan with the digest that confirms it; for the eyes of a signed-in person only."""
    present = settings_quantities(loop, plan.as_found)
    wanted = {one.name: one.amount for one in settings_quantities(loop, plan.fields)}
    order = {name: place for place, name in enumerate(plan.order)}
    lines = sorted(present, key=lambda one: order.get(one.name, len(order)))
    how = "in manual, with the output held, then back to its mode" if plan.write_in_manual else "in the present mode"
    return PlanAnswer(
        loop=loop.name,
        source=plan.proposal,
        lines=tuple(
            PlanLineAnswer(
                label=one.label,
                unit=one.unit,
                holds_now=one.amount,
                will_hold=wanted.get(one.name),
                is_changed=one.name in order,
            )
            for one in lines
        ),
        how=f"Written from top to bottom, {how}; each value is read back before the next one goes.",
        cautions=BEFORE_SETTINGS_ARE_WRITTEN,
        digest=digest_to_type(plan),
        good_for_s=GOOD_FOR_S,
    )


def _cycles(loop: LoopConfig, now: Picture) -> tuple[CycleAnswer, ...]:
    return tuple(
        CycleAnswer(
            period_s=cycle.period_s,
            pv_amplitude_eu=loop.pv_span.delta_to_eu(cycle.pv_amplitude_pct),
            op_amplitude_eu=loop.op_span.delta_to_eu(cycle.amplitude_pct),
            rough_ultimate_gain=cycle.rough_ultimate_gain,
            is_usable=cycle.is_usable,
        )
        for cycle in now.cycles
    )


def _watch(limits: Sequence[WatchLimit], sample: Sample | None) -> tuple[WatchAnswer, ...]:
    readings = {} if sample is None else {reading.name: reading for reading in sample.watch}
    return tuple(_watch_line(limit, readings.get(limit.name)) for limit in limits)


def _watch_line(limit: WatchLimit, reading: WatchReading | None) -> WatchAnswer:
    seen_eu = None if reading is None or reading.quality is not Quality.GOOD else reading.reading_eu
    return WatchAnswer(
        name=limit.name,
        meaning=limit.meaning,
        low_eu=limit.low_eu,
        high_eu=limit.high_eu,
        reading_eu=seen_eu,
        holds=seen_eu is not None and limit.low_eu <= seen_eu <= limit.high_eu,
    )


def _story(runner: TestRunner) -> tuple[StoryAnswer, ...]:
    start_s = _start_s(runner)
    return tuple(
        StoryAnswer(t_s=line.t_s - start_s, kind=line.kind, text=line.text, by=line.by, code=line.code)
        for line in runner.log.story
    )


def _start_s(runner: TestRunner) -> float:
    started_s = runner.experiment.started_s
    if started_s is not None:
        return started_s
    return runner.log.samples[0].t_s if runner.log.samples else 0.0


def _maybe(convert: Callable[[float], float], reading: float | None) -> float | None:
    return None if reading is None else convert(reading)
