"""The record: every PV with when it was sampled, every move with when it took effect."""

from dataclasses import replace
from typing import Any

import pytest

from autotune.experiment.plan import TestPlan
from autotune.experiment.recording import (
    Recording,
    Rested,
    build_record,
    with_move,
    with_report,
    with_sample,
)
from autotune.loop.record import Record, TimeBase
from autotune.loop.sample import Sample, Stamp
from autotune.loop.write import WriteOutcome, WriteReport
from tests.experiment.bench import plan_for
from tests.experiment.readings import guard, reading

RESTED = Rested(centre_pct=50.0, reference_pct=40.0, hysteresis_pct=0.5, noise_pct=0.1, drift_pct_per_s=0.01)
CLOCKED = plan_for(has_clock_tags=True, plc_scan_s=None)


def heard(earliest_s: float, latest_s: float) -> WriteReport:
    return WriteReport(WriteOutcome.APPLIED, Stamp(earliest_s, latest_s))


def unheard(earliest_s: float, latest_s: float) -> WriteReport:
    return WriteReport(WriteOutcome.NOT_HEARD, Stamp(earliest_s, latest_s))


def at(t_s: float, pv_pct: float = 40.0, **changes: Any) -> Sample:
    return reading(**{"t_s": t_s, "taken": Stamp(t_s - 0.03, t_s), "pv_pct": pv_pct, **changes})


def kept(recording: Recording, sample: Sample, *, is_move_seen: bool = False) -> Recording:
    return with_sample(recording, sample, sample.pv_pct, is_move_seen)


def built(recording: Recording, plan: TestPlan | None = None) -> Record:
    record = build_record(recording, plan or plan_for(plc_scan_s=0.02, io_time_s=0.005), RESTED)
    assert record is not None
    return record


def test_without_a_relay_move_there_is_no_record() -> None:
    recording = with_move(Recording(), 50.0, 1, reading(), is_relay=False)
    recording = kept(with_report(recording, 1, heard(0.0, 0.1)), at(1.0))
    assert build_record(Recording(), plan_for(), RESTED) is None
    assert build_record(recording, plan_for(), RESTED) is None


def test_a_move_that_never_went_out_is_no_effect() -> None:
    recording = kept(with_move(Recording(), 60.0, 1, reading(), is_relay=True), at(1.0))
    assert build_record(recording, plan_for(), RESTED) is None


def edges(record: Record) -> list[float]:
    """Earliest and latest of each effect."""
    return [edge for entry in record.effects for edge in (entry.effect.earliest_s, entry.effect.latest_s)]


def relay_run() -> Recording:
    """As found at 1.0 s, up at 2.0 s, two samples each."""
    recording = with_move(Recording(), 50.0, 1, at(0.9), is_relay=False)
    recording = with_report(recording, 1, heard(1.0, 1.01))
    recording = kept(kept(recording, at(1.2, 40.1)), at(1.4, 40.2))
    recording = with_report(with_move(recording, 60.0, 2, at(1.4), is_relay=True), 2, heard(2.0, 2.01))
    return kept(kept(recording, at(2.2, 41.0)), at(2.4, 42.0))


def test_on_our_clock_an_effect_lies_between_request_and_reply_plus_scan_and_io() -> None:
    record = built(relay_run())
    assert record.time_base is TimeBase.OUR_CLOCK
    assert edges(record) == pytest.approx([1.0, 1.035, 2.0, 2.035])
    assert [effect.op_pct for effect in record.effects] == [50.0, 60.0]
    assert record.relay_from_s == pytest.approx(2.0175)
    assert [sample.taken for sample in record.samples] == [Stamp(t - 0.03, t) for t in (1.2, 1.4, 2.2, 2.4)]
    assert [sample.pv_pct for sample in record.samples] == [40.1, 40.2, 41.0, 42.0]
    assert [sample.op_pct for sample in record.samples] == [50.0] * 4


def test_the_record_says_what_the_baseline_fixed() -> None:
    record = built(relay_run())
    fixed = (record.centre_pct, record.reference_pct, record.hysteresis_pct, record.noise_pct, record.drift_pct_per_s)
    assert fixed == (50.0, 40.0, 0.5, 0.1, 0.01)
    assert (record.scan_s, record.plc_scan_s) == (0.1, 0.02)


def test_an_undeclared_scan_adds_nothing() -> None:
    record = built(relay_run(), plan_for(plc_scan_s=None))
    assert record.effects[1].effect == Stamp(2.0, 2.01)


def test_a_reply_that_was_not_heard_is_replaced_by_the_reading_that_showed_the_move() -> None:
    recording = with_move(relay_run(), 40.0, 3, at(2.4), is_relay=True)
    recording = with_report(recording, 3, unheard(3.0, 3.5))
    recording = kept(recording, at(3.6), is_move_seen=True)
    recording = kept(recording, at(3.8), is_move_seen=True)
    assert edges(built(recording))[-2:] == pytest.approx([3.0, 3.625])


def test_a_move_that_was_neither_heard_nor_seen_may_have_had_effect_until_the_end() -> None:
    recording = with_report(with_move(relay_run(), 40.0, 3, at(2.4), is_relay=True), 3, unheard(3.0, 3.5))
    assert built(recording).effects[-1].effect == Stamp(3.0, 3.0)
    assert built(kept(recording, at(3.9))).effects[-1].effect == Stamp(3.0, 3.9)


def test_a_repeat_may_be_the_one_that_landed_but_a_heard_move_keeps_its_time() -> None:
    recording = with_report(with_move(relay_run(), 40.0, 3, at(2.4), is_relay=True), 3, unheard(3.0, 3.5))
    recording = with_report(recording, 3, heard(3.6, 3.61))
    recording = with_report(recording, 3, heard(3.7, 3.71))
    assert edges(built(recording))[-2:] == pytest.approx([3.0, 3.635])


def test_reports_of_other_sequences_change_nothing() -> None:
    assert with_report(relay_run(), 9, heard(5.0, 5.1)) == relay_run()
    assert with_report(Recording(), 1, heard(5.0, 5.1)) == Recording()


def test_a_stamp_that_does_not_advance_is_no_new_sample() -> None:
    recording = kept(kept(relay_run(), at(2.4, 50.0)), at(2.3, 50.0))
    assert len(built(recording).samples) == 4


def test_a_sample_that_does_not_belong_to_the_record_is_left_out() -> None:
    assert len(built(with_sample(relay_run(), at(9.0), None, is_move_seen=False)).samples) == 4


def clocked_run(from_ms: int, *, first_effect_ms: int | None = None) -> Recording:
    """The same run with the PLC's stamps: samples at 0, 200 ms, effect at 950 ms, samples at 1000, 1200 ms."""

    def sampled(ms: int, count: int, effect_ms: int | None) -> Sample:
        effect = None if effect_ms is None else (from_ms + effect_ms) % 2**32
        seen = guard(op_effect_count=count, op_effect_ms=effect)
        return at(ms / 1000.0 + 50.0, plc_clock_ms=(from_ms + ms) % 2**32, guard=seen)

    before = 7 if first_effect_ms is None else 6
    recording = with_move(Recording(), 50.0, 1, sampled(-300, before, -500), is_relay=False)
    recording = with_report(recording, 1, heard(49.7, 49.71))
    for ms in (0, 200):
        recording = kept(recording, sampled(ms, 7, -500 if first_effect_ms is None else first_effect_ms))
    recording = with_report(with_move(recording, 60.0, 2, sampled(200, 7, -200), is_relay=True), 2, heard(50.9, 50.91))
    for ms in (1000, 1200):
        recording = kept(recording, sampled(ms, 8, 950))
    return recording


@pytest.mark.parametrize("from_ms", [1000, 2**32 - 1, 2**32 - 500, 2**32 - 975, 2**32 - 1100])
def test_on_the_clock_of_the_plc_stamps_are_points_also_across_its_wrap(from_ms: int) -> None:
    record = built(clocked_run(from_ms, first_effect_ms=-200), CLOCKED)
    assert record.time_base is TimeBase.PLC_CLOCK
    assert [sample.taken for sample in record.samples] == [Stamp.at(t) for t in (0.0, 0.2, 1.0, 1.2)]
    assert [effect.effect for effect in record.effects] == [Stamp.at(t) for t in (-0.2, 0.95)]
    assert record.relay_from_s == pytest.approx(0.95)


def test_a_held_output_that_moved_nothing_is_taken_to_have_held_since_the_first_sample() -> None:
    record = built(clocked_run(1000), CLOCKED)
    assert [effect.effect for effect in record.effects] == [Stamp.at(0.0), Stamp.at(0.95)]


def test_without_the_plans_word_for_it_the_clock_of_the_plc_is_not_used() -> None:
    assert built(clocked_run(1000)).time_base is TimeBase.OUR_CLOCK


@pytest.mark.parametrize("lost", [{"plc_clock_ms": None}, {"guard": None}])
def test_where_one_stamp_of_the_plc_is_missing_the_record_is_on_our_clock(lost: dict[str, Any]) -> None:
    recording = with_move(clocked_run(1000), 40.0, 3, at(51.2, guard=guard(op_effect_count=8)), is_relay=True)
    recording = with_report(recording, 3, heard(51.3, 51.31))
    fine: dict[str, Any] = {"plc_clock_ms": 2400, "guard": guard(op_effect_count=9, op_effect_ms=2350)}
    assert built(kept(recording, at(51.4, **fine)), CLOCKED).time_base is TimeBase.PLC_CLOCK
    assert built(kept(recording, at(51.4, **{**fine, **lost})), CLOCKED).time_base is TimeBase.OUR_CLOCK


def test_a_clock_that_does_not_advance_gives_no_new_sample() -> None:
    recording = clocked_run(1000)
    again = replace(at(51.4), plc_clock_ms=2200)
    assert len(built(kept(recording, again), CLOCKED).samples) == 4
