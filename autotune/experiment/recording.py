"""The test's record: every PV with when it was sampled, every move with when it took effect."""

from dataclasses import dataclass, field, replace

from autotune.experiment.history import History
from autotune.experiment.plan import TestPlan
from autotune.loop.record import OutputEffect, Record, RecordedSample, TimeBase
from autotune.loop.sample import Sample, Stamp
from autotune.loop.write import WriteOutcome, WriteReport

CLOCK_WRAP_MS = 1 << 32
"""The PLC's clock is unsigned 32 bit, in milliseconds."""


@dataclass(frozen=True, slots=True)
class Taken:
    """One sample of the record, with the PLC's clock unwrapped (ms) where it offers one."""

    taken: Stamp
    pv_pct: float
    op_pct: float | None
    plc_ms: int | None


@dataclass(frozen=True, slots=True)
class Move:
    """One move of the output: when the request went out, was answered, was seen in a reading (s, our clock).

    ``plc_ms`` is the PLC's own word, unwrapped; ``effects_before`` its count of effects when the move was decided.
    """

    op_pct: float
    sequence: int
    is_relay: bool
    effects_before: int | None = None
    sent_s: float | None = None
    heard_s: float | None = None
    seen_s: float | None = None
    plc_ms: int | None = None


@dataclass(frozen=True, slots=True)
class Recording:
    """What has been recorded so far; grows at constant cost.  ``plc_ms`` unwraps the clock last read, ``clock_ms``."""

    samples: History[Taken] = field(default=History())
    moves: History[Move] = field(default=History())
    last_move: Move | None = None
    plc_ms: int | None = None
    clock_ms: int | None = None


@dataclass(frozen=True, slots=True)
class Rested:
    """What the baseline fixed, in percent of span and seconds; it belongs to every record."""

    centre_pct: float
    reference_pct: float
    hysteresis_pct: float
    noise_pct: float
    drift_pct_per_s: float


def with_sample(recording: Recording, sample: Sample, kept_pv_pct: float | None, is_move_seen: bool) -> Recording:
    """Take in a sample.

    ``kept_pv_pct`` is its PV where it belongs to the record; a stamp that does not advance is no new sample.
    ``is_move_seen`` tells whether it shows the last move of the output.
    """
    recording = _with_clock(recording, sample.plc_clock_ms)
    if recording.last_move is not None:
        move = _with_effect(recording.last_move, sample, recording.plc_ms, is_move_seen)
        recording = replace(recording, last_move=move)
    if kept_pv_pct is None or not _advances(recording, sample):
        return recording
    entry = Taken(sample.taken, kept_pv_pct, sample.op_pct, recording.plc_ms)
    return replace(recording, samples=recording.samples.appended(entry))


def with_move(recording: Recording, op_pct: float, sequence: int, sample: Sample, is_relay: bool) -> Recording:
    """A move was decided; what is known of its effect comes later."""
    moves = recording.moves if recording.last_move is None else recording.moves.appended(recording.last_move)
    effects_before = None if sample.guard is None else sample.guard.op_effect_count
    return replace(recording, moves=moves, last_move=Move(op_pct, sequence, is_relay, effects_before))


def with_report(recording: Recording, sequence: int, report: WriteReport) -> Recording:
    """Take in what became of the write that carried ``sequence``; a repeat may be the one that landed."""
    move = recording.last_move
    if move is None or move.sequence != sequence or move.heard_s is not None:
        return recording
    sent_s = report.sent.earliest_s if move.sent_s is None else move.sent_s
    heard_s = report.sent.latest_s if report.outcome is WriteOutcome.APPLIED else None
    return replace(recording, last_move=replace(move, sent_s=sent_s, heard_s=heard_s))


def build_record(recording: Recording, plan: TestPlan, rested: Rested) -> Record | None:
    """The record on the PLC's clock where it stamped everything, else on ours; ``None`` before a relay move.

    On the PLC's clock time counts from the first sample, in seconds.  On ours a sample lies in its own stamp, an
    effect in [request, reply + PLC scan + I/O time]; a reply that was not heard is replaced by the reading that
    showed the move, or by the end of the record.
    """
    taken = tuple(recording.samples)
    last = () if recording.last_move is None else (recording.last_move,)
    moves = tuple((move, move.sent_s) for move in (*recording.moves, *last) if move.sent_s is not None)
    if not taken or not any(move.is_relay for move, _ in moves):
        return None
    ticks_ms = [entry.plc_ms for entry in taken if entry.plc_ms is not None]
    by_plc = plan.has_clock_tags and len(ticks_ms) == len(taken)
    by_plc = by_plc and all(move.plc_ms is not None for move, _ in moves[1:])
    if by_plc:
        stamps = [_on_plc_clock(tick_ms, ticks_ms[0]) for tick_ms in ticks_ms]
        effects = [stamps[0] if move.plc_ms is None else _on_plc_clock(move.plc_ms, ticks_ms[0]) for move, _ in moves]
    else:
        stamps = [entry.taken for entry in taken]
        effects = [_on_our_clock(move, sent_s, plan, stamps[-1].latest_s) for move, sent_s in moves]
    return Record(
        action=plan.action,
        time_base=TimeBase.PLC_CLOCK if by_plc else TimeBase.OUR_CLOCK,
        samples=tuple(
            RecordedSample(stamp, entry.pv_pct, entry.op_pct) for stamp, entry in zip(stamps, taken, strict=True)
        ),
        effects=tuple(OutputEffect(effect, move.op_pct) for effect, (move, _) in zip(effects, moves, strict=True)),
        centre_pct=rested.centre_pct,
        reference_pct=rested.reference_pct,
        relay_from_s=next(effect.middle_s for effect, (move, _) in zip(effects, moves, strict=True) if move.is_relay),
        hysteresis_pct=rested.hysteresis_pct,
        noise_pct=rested.noise_pct,
        drift_pct_per_s=rested.drift_pct_per_s,
        scan_s=plan.scan_s,
        plc_scan_s=plan.plc_scan_s,
    )


def _with_clock(recording: Recording, clock_ms: int | None) -> Recording:
    if clock_ms is None or recording.clock_ms is None or recording.plc_ms is None:
        return replace(recording, clock_ms=clock_ms, plc_ms=clock_ms)
    plc_ms = recording.plc_ms + _ahead_ms(clock_ms, recording.clock_ms)
    return replace(recording, clock_ms=clock_ms, plc_ms=plc_ms)


def _ahead_ms(clock_ms: int, other_ms: int) -> int:
    """How far one reading of the PLC's clock is ahead of another, modulo 2^32 and signed."""
    ahead_ms = (clock_ms - other_ms) % CLOCK_WRAP_MS
    return ahead_ms - CLOCK_WRAP_MS if ahead_ms >= CLOCK_WRAP_MS // 2 else ahead_ms


def _with_effect(move: Move, sample: Sample, plc_ms: int | None, is_move_seen: bool) -> Move:
    if is_move_seen and move.seen_s is None:
        move = replace(move, seen_s=sample.t_s)
    guard, clock_ms = sample.guard, sample.plc_clock_ms
    if move.plc_ms is not None or guard is None or plc_ms is None or clock_ms is None:
        return move
    if guard.op_effect_ms is None or guard.op_effect_count == move.effects_before:
        return move
    return replace(move, plc_ms=plc_ms + _ahead_ms(guard.op_effect_ms, clock_ms))


def _advances(recording: Recording, sample: Sample) -> bool:
    last = recording.samples.last
    if last is None:
        return True
    if recording.plc_ms is not None and last.plc_ms is not None:
        return recording.plc_ms > last.plc_ms
    return sample.taken.middle_s > last.taken.middle_s


def _on_plc_clock(tick_ms: int, origin_ms: int) -> Stamp:
    return Stamp.at((tick_ms - origin_ms) / 1000.0)


def _on_our_clock(move: Move, sent_s: float, plan: TestPlan, end_s: float) -> Stamp:
    if move.heard_s is None and move.seen_s is None:
        return Stamp(sent_s, max(sent_s, end_s))
    answered_s = move.heard_s if move.heard_s is not None else move.seen_s
    return Stamp(sent_s, (answered_s or sent_s) + (plan.plc_scan_s or 0.0) + plan.io_time_s)
