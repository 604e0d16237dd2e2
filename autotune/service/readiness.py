"""What readings alone say about a loop's fitness, before anything is moved.

Every finding has a stable code, a level, the text a technician reads and what to do.  ``STOP``
refuses a test, ``CAUTION`` is shown and accepted with the cautions, ``NOTE`` goes on the sheet.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from enum import Enum
from itertools import pairwise
from math import sqrt

from autotune.config.types import LoopConfig
from autotune.loop.mode import LoopMode
from autotune.loop.quality import Quality
from autotune.loop.sample import GuardState, Sample


class Level(Enum):
    """How much a finding matters."""

    STOP = "stop"
    CAUTION = "caution"
    NOTE = "note"


@dataclass(frozen=True, slots=True)
class ReadinessFinding:
    """One thing that a look at the loop showed."""

    level: Level
    code: str
    text: str
    remedy: str = ""

    def __str__(self) -> str:
        return f"{self.code}: {self.text}" + (f"; {self.remedy}" if self.remedy else "")


def judge_samples(loop: LoopConfig, samples: Sequence[Sample]) -> tuple[ReadinessFinding, ...]:
    """Everything that a few seconds of readings of one loop say; ``samples`` in order of time, at least one."""
    return (
        *_judge_mode(loop, samples[-1]),
        *_judge_signals(loop, samples[-1]),
        *_judge_action(loop, samples),
        *_judge_guard(loop, samples),
        *_judge_clock(loop, samples),
        *_judge_watch(loop, samples[-1]),
        *_judge_settings(loop),
    )


def _judge_mode(loop: LoopConfig, sample: Sample) -> tuple[ReadinessFinding, ...]:
    if sample.mode is LoopMode.MAN:
        return (
            ReadinessFinding(
                Level.CAUTION,
                "LOOP_IN_MANUAL",
                f"{loop.name} is in MAN: nobody controls it now, and it would be handed back in MAN",
                "if it should be in AUTO, ask the operator why it is not before testing",
            ),
        )
    if sample.mode is not LoopMode.AUTO:
        return (
            ReadinessFinding(
                Level.STOP,
                "MODE_NOT_TESTABLE",
                f"{loop.name} is in {sample.mode.value}",
                "put the loop in AUTO or MAN at the panel; if the panel says so already, correct [loop.mode_codes]",
            ),
        )
    return ()


def _judge_signals(loop: LoopConfig, sample: Sample) -> tuple[ReadinessFinding, ...]:
    findings = []
    if sample.pv_quality is not Quality.GOOD:
        findings.append(
            ReadinessFinding(
                Level.STOP,
                "PV_QUALITY",
                f"PV is {sample.pv_quality.value}",
                "mend the measurement first, or compare [loop.span] and the tag's address with the panel",
            )
        )
    for word, reading, span in (("SP", sample.sp_pct, loop.pv_span), ("OP", sample.op_pct, loop.op_span)):
        if reading is None:
            findings.append(
                ReadinessFinding(Level.STOP, f"{word}_NOT_READ", f"{word} has no usable number", "check its tag")
            )
        elif not -0.5 <= reading <= 100.5:
            findings.append(
                ReadinessFinding(
                    Level.STOP,
                    f"{word}_OUT_OF_SPAN",
                    f"{word} reads {span.to_eu(reading):.6g} {span.unit}, outside its span "
                    f"{span.low_eu:g} .. {span.high_eu:g} {span.unit}",
                    "compare span, scale, type and address with the panel",
                )
            )
    return tuple(findings)


def action_correlation(samples: Sequence[Sample]) -> tuple[float, int]:
    """Correlation of the scan-to-scan changes of PV and OP in AUTO, and how many pairs it rests on.

    A proportional term answers each change of PV in the same scan: a reverse-acting block moves OP
    against PV (negative), a direct-acting one with it (positive).  0.0 when nothing moved.
    """
    pairs = [
        (b.pv_pct - a.pv_pct, b.op_pct - a.op_pct)
        for a, b in pairwise(samples)
        if a.mode is b.mode is LoopMode.AUTO
        and a.pv_pct is not None
        and b.pv_pct is not None
        and a.op_pct is not None
        and b.op_pct is not None
    ]
    pv_power = sum(pv * pv for pv, _ in pairs)
    op_power = sum(op * op for _, op in pairs)
    if pv_power <= 0.0 or op_power <= 0.0:
        return 0.0, len(pairs)
    return sum(pv * op for pv, op in pairs) / sqrt(pv_power * op_power), len(pairs)


def _judge_action(loop: LoopConfig, samples: Sequence[Sample]) -> tuple[ReadinessFinding, ...]:
    correlation, pairs = action_correlation(samples)
    if samples[-1].mode is not LoopMode.AUTO:
        return ()
    # By chance |r| exceeds 4/sqrt(n) once in 16 000 looks at most where changes are independent from scan to scan, and
    # once in 900 where they are those of two white noises: correlated by -1/2, they widen r by sqrt(1.5) (Bartlett).
    if pairs < 10 or abs(correlation) < 4.0 / sqrt(pairs):
        return (
            ReadinessFinding(
                Level.NOTE,
                "ACTION_NOT_SHOWN",
                f"the readings do not show whether {loop.name} is {loop.action.value} acting: too little movement",
                "the test itself trips at once if PV answers the first move with the wrong sign",
            ),
        )
    seen_sign = 1 if correlation < 0 else -1
    if seen_sign != loop.action.process_sign:
        seen = "reverse" if seen_sign == 1 else "direct"
        return (
            ReadinessFinding(
                Level.STOP,
                "ACTION_REVERSED",
                f"the block moves OP like a {seen}-acting controller (correlation {correlation:+.2f} over {pairs} "
                f"scans), but action = {loop.action.value!r} is configured",
                f"compare with the panel and write action = {seen!r} if the panel agrees",
            ),
        )
    return ()


def _judge_guard(loop: LoopConfig, samples: Sequence[Sample]) -> tuple[ReadinessFinding, ...]:
    guard = samples[-1].guard
    if not loop.has_guard or guard is None:
        level = Level.CAUTION if loop.allows_no_guard else Level.STOP
        return (
            ReadinessFinding(
                level,
                "NO_GUARD",
                "the PLC has no guard for this loop: if this machine dies during a test the output stays where it "
                "is, and a late write cannot be excluded",
                "load config/plc-guard.st into the PLC and name its tags in [loop.guard]",
            ),
        )
    findings = []
    if guard.state is not GuardState.IDLE and guard.state is not GuardState.NOT_KNOWN:
        findings.append(
            ReadinessFinding(
                Level.STOP,
                "GUARD_NOT_IDLE",
                f"the PLC's guard is {guard.state.value}" + (f", held by {guard.holder}" if guard.holder else ""),
                "end the other test, or acknowledge the guard at the panel",
            )
        )
    if guard.is_stop_pressed:
        findings.append(
            ReadinessFinding(Level.STOP, "GUARD_STOPPED", "the stop at the panel is pressed", "release it there")
        )
    if guard.is_enabled is False:
        findings.append(
            ReadinessFinding(
                Level.STOP,
                "GUARD_NOT_ENABLED",
                "the operator has not enabled a test at the panel",
                f"press the test enable of {loop.name} at the panel; it holds for a limited time",
            )
        )
    return tuple(findings)


def _judge_clock(loop: LoopConfig, samples: Sequence[Sample]) -> tuple[ReadinessFinding, ...]:
    clocks = {sample.plc_clock_ms for sample in samples}
    if clocks == {None}:
        scan = "not declared" if loop.controller.plc_scan_s is None else f"{loop.controller.plc_scan_s:g} s"
        return (
            ReadinessFinding(
                Level.NOTE,
                "NO_PLC_CLOCK",
                f"without plc_clock_ms and op_effect_ms network delay (PLC scan {scan}) counts as dead time: "
                "the ultimate gain gets a wider interval",
                "add both tags to the PLC program for a closer result",
            ),
        )
    if len(samples) > 3 and len(clocks) == 1:
        return (
            ReadinessFinding(
                Level.STOP,
                "PLC_CLOCK_STANDS",
                "plc_clock_ms does not move: the PLC is in stop or the address is wrong",
                "set the PLC to run, or correct the tag plc_clock_ms",
            ),
        )
    return ()


def _judge_watch(loop: LoopConfig, sample: Sample) -> tuple[ReadinessFinding, ...]:
    limits = {watch.name: watch for watch in loop.watch}
    return tuple(
        ReadinessFinding(
            Level.STOP,
            "WATCH",
            f"{reading.name} reads {reading.reading_eu}, must lie in {limit.low_eu:g} .. {limit.high_eu:g}"
            + (f" ({limit.meaning})" if limit.meaning else ""),
            "bring it there or test at another time",
        )
        for reading in sample.watch
        if (limit := limits.get(reading.name)) is not None
        and not (
            reading.reading_eu is not None
            and reading.quality is Quality.GOOD
            and limit.low_eu <= reading.reading_eu <= limit.high_eu
        )
    )


def _judge_settings(loop: LoopConfig) -> tuple[ReadinessFinding, ...]:
    if not loop.is_writing_settings_allowed or loop.proves_writable:
        return ()
    return (
        ReadinessFinding(
            Level.NOTE,
            "SETTINGS_NOT_PROVED",
            "it is not shown that the settings can be written: a locked register shows only when a proposal is written",
            "write prove_writable = true for this loop: then a test first writes each setting back as it is",
        ),
    )
