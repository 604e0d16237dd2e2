"""The machine: the whole walk, and every way out of it."""

import itertools
from collections.abc import Callable
from dataclasses import replace
from math import inf, nan
from typing import Any

import pytest

from autotune.errors import IllegalEvent
from autotune.experiment.commands import ClaimLoop, Command, DriveOutput, HandBack, ReleaseLoop, SetMode
from autotune.experiment.events import (
    AbortAsked,
    Event,
    FinishAsked,
    HandBackEnded,
    HandBackResult,
    ReadFailed,
    SampleArrived,
    SmallerStepsAsked,
    Started,
    TicksMissed,
    TimePassed,
    Written,
)
from autotune.experiment.interlocks import TripCode
from autotune.experiment.machine import HEARD, begin, next_deadline_s, record, step
from autotune.experiment.phases import Phase
from autotune.experiment.plan import ConvergencePlan, FirstMove, RelayPlan, TestPlan
from autotune.experiment.state import EndKind, Experiment, Stage
from autotune.loop.limits import WatchLimit
from autotune.loop.mode import ControlAction, LoopMode
from autotune.loop.quality import Quality
from autotune.loop.record import TimeBase
from autotune.loop.sample import GuardState, Sample, Stamp, WatchReading
from autotune.loop.write import WriteOutcome, WriteReport
from tests.experiment.bench import LIMITS, TOKEN, Bench, Plant, bench, first_order, plan_for, result_of, three_lags
from tests.experiment.readings import reading

PLAIN = plan_for()
GUARDED = plan_for(has_guard=True)


def limited(plan: TestPlan = PLAIN, **limits: Any) -> TestPlan:
    return replace(plan, limits=replace(plan.limits, **limits))


def phase_is(phase: Phase) -> Callable[[Experiment], bool]:
    return lambda experiment: experiment.phase is phase


def running(plan: TestPlan | None = None, plant: Plant | None = None, **plc: Any) -> Bench:
    """A bench whose relay has just made its first move."""
    made = bench(plan or plan_for(), plant, **plc)
    made.run(until=phase_is(Phase.TESTING))
    return made


def resting(plan: TestPlan | None = None, **plc: Any) -> Bench:
    """A bench that holds the output as found."""
    made = bench(plan or plan_for(), **plc)
    made.run(until=lambda e: e.stage is Stage.HOLDING)
    return made


def changed(made: Bench, **changes: Any) -> Experiment:
    """Feed one reading with changes, and look what it made of the test."""
    made.feed(SampleArrived(made.t_s, replace(made.plc.read(made.t_s), **changes)))
    return made.experiment


def trip_code(experiment: Experiment) -> str | None:
    return None if experiment.trip is None else experiment.trip.code


def moves(made: Bench) -> list[float]:
    """Where the output was driven to, repeats left out."""
    driven = [command.op_pct for _, command in made.issued if isinstance(command, DriveOutput)]
    return [op for k, op in enumerate(driven) if k == 0 or op != driven[k - 1]]


# --- the walk -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("mode", [LoopMode.MAN, LoopMode.AUTO])
@pytest.mark.parametrize("has_guard", [True, False])
@pytest.mark.parametrize("tracks", [True, False])
def test_a_loop_is_tested_and_handed_back_as_found(mode: LoopMode, has_guard: bool, tracks: bool) -> None:
    plan = plan_for(has_guard=has_guard, sp_tracks_in_manual=tracks)
    made = bench(plan, mode=mode, sp_tracks=tracks)
    experiment = made.run()
    assert experiment.phase is Phase.COMPLETE
    assert (experiment.end, result_of(experiment)) == (EndKind.ENOUGH, HandBackResult.RESTORED)
    assert (made.plc.op_pct, made.plc.mode, made.plc.guard.holder) == (50.0, mode, 0)
    assert mode is LoopMode.MAN or made.plc.sp_pct == 40.0
    assert len(experiment.usable_cycles) >= 3
    assert experiment.trip is None
    assert experiment.refusal is None


def test_the_loop_is_taken_over_step_by_step() -> None:
    made = bench(GUARDED, mode=LoopMode.AUTO)
    stages: list[Stage] = []

    def is_cycling(experiment: Experiment) -> bool:
        stages.append(experiment.stage)
        return experiment.stage is Stage.CYCLING

    made.run(until=is_cycling)
    assert list(dict.fromkeys(stages)) == [
        Stage.LOOKING,
        Stage.CLAIMING,
        Stage.SWITCHING,
        Stage.SETTLING,
        Stage.HOLDING,
        Stage.FIRST_MOVE,
        Stage.CYCLING,
    ]
    kinds = list(dict.fromkeys(type(command) for _, command in made.issued))
    assert kinds == [ClaimLoop, SetMode, DriveOutput]


def test_nothing_is_written_while_we_look_around() -> None:
    made = bench(plan_for())
    made.run(until=lambda e: e.phase is not Phase.CHECKING and e.phase is not Phase.IDLE)
    assert made.plc.writes[0][0] >= 1.0


def test_with_a_guard_every_sample_brings_a_heartbeat_and_only_a_move_a_sequence() -> None:
    made = running(GUARDED)
    made.run(until=lambda e: len(e.whole_cycles) == 2)
    driven = [command for _, command in made.issued if isinstance(command, DriveOutput)]
    claims = [command for _, command in made.issued if isinstance(command, ClaimLoop)]
    heartbeats = [command.heartbeat for command in claims] + [command.heartbeat for command in driven]
    assert heartbeats == list(range(1, len(claims) + len(driven) + 1))
    for before, after in itertools.pairwise(driven):
        assert after.sequence - before.sequence == (after.op_pct != before.op_pct)
    samples = sum(isinstance(event, SampleArrived) for event in made.events)
    looked = sum(isinstance(event, SampleArrived) and event.t_s < 1.0 for event in made.events)
    assert len(driven) + len(claims) == samples - looked


def test_without_a_guard_the_output_is_written_only_where_it_moves() -> None:
    made = running()
    made.run(until=lambda e: len(e.whole_cycles) == 2)
    driven = [command.op_pct for _, command in made.issued if isinstance(command, DriveOutput)]
    assert driven == moves(made) == [50.0, 60.0, 40.0, 60.0, 40.0, 60.0][: len(driven)]


def test_a_mailbox_that_an_earlier_test_left_does_not_hide_the_first_move() -> None:
    made = bench(GUARDED, mailbox_sequence=777)
    assert made.run().phase is Phase.COMPLETE


def test_the_first_move_goes_where_it_was_asked_to() -> None:
    relay = RelayPlan(10.0, 5.0, first_move=FirstMove.DOWN, hysteresis_pct=0.5)
    made = running(plan_for(relay=relay))
    assert moves(made) == [50.0, 45.0]


def test_a_direct_acting_loop_oscillates_on_a_plant_with_negative_gain() -> None:
    plan = plan_for(action=ControlAction.DIRECT)
    assert bench(plan, three_lags(gain=-1.0)).run().phase is Phase.COMPLETE


def test_noise_at_rest_makes_the_hysteresis() -> None:
    made = bench(plan_for(relay=RelayPlan(10.0, 10.0)), noise=lambda t_s: 0.2 if round(10.0 * t_s) % 2 else -0.2)
    experiment = made.run(until=phase_is(Phase.TESTING))
    assert experiment.noise_pct is not None
    assert experiment.hysteresis_pct == pytest.approx(2.5 * experiment.noise_pct)
    assert experiment.noise_pct == pytest.approx(0.2)
    assert experiment.drift_pct_per_s == pytest.approx(0.0)
    assert experiment.reference_pct == pytest.approx(40.0, abs=0.02)
    assert experiment.frozen_after_s == pytest.approx(1.0)


def test_the_record_holds_baseline_and_cycles_and_every_move() -> None:
    made = bench(replace(GUARDED, has_clock_tags=True), has_clock=True, clock_from_ms=2**32 - 5000)
    experiment = made.run()
    written = record(experiment)
    assert written is not None
    assert written.time_base is TimeBase.PLC_CLOCK
    assert [effect.op_pct for effect in written.effects] == moves(made)
    times_s = [sample.taken.middle_s for sample in written.samples]
    assert times_s == sorted(set(times_s))
    assert written.relay_from_s == written.effects[1].effect.middle_s
    assert written.relay_from_s >= 1.9


def test_a_test_that_never_moved_has_no_record() -> None:
    assert record(begin(plan_for())) is None
    assert record(resting().experiment) is None


def test_a_test_cut_short_keeps_its_record() -> None:
    made = running()
    made.run(until=lambda e: len(e.whole_cycles) == 1)
    made.feed(AbortAsked(made.t_s, "an operator"))
    written = record(made.experiment)
    assert written is not None
    assert len(written.effects) == 4


def test_the_baseline_begins_only_when_the_output_reads_as_found() -> None:
    made = bench(GUARDED)
    made.run(until=lambda e: e.stage is Stage.SETTLING)
    from_s = made.t_s
    made.plc.change = lambda sample: replace(sample, op_pct=50.0 if sample.t_s > from_s + 0.25 else 49.7)
    made.experiment = replace(
        made.experiment, held=replace(made.experiment.held, op_may_read_pct=(49.7, 50.0)), moved_s=from_s
    )
    made.run(until=lambda e: e.stage is not Stage.SETTLING)
    assert made.experiment.stage is Stage.HOLDING
    assert made.experiment.stage_s == pytest.approx(from_s + 0.3)


# --- refusals -----------------------------------------------------------------------------------------------


def test_an_unfit_loop_is_refused_untouched_with_every_reason() -> None:
    made = bench(plan_for(accepts_no_guard=False), mode=LoopMode.AUTO, sp_pct=40.0, op_pct=95.0)
    experiment = made.run()
    assert experiment.phase is Phase.ABORTED
    assert [refusal.code for refusal in experiment.refusals] == ["NO_GUARD", "OP_OUTSIDE_LIMITS"]
    assert experiment.refusal is experiment.refusals[0]
    assert (experiment.end, experiment.hand_back, made.plc.writes) == (EndKind.REFUSED, None, [])
    assert experiment.because.startswith("NO_GUARD: ")


def test_a_loop_that_cannot_be_seen_is_refused() -> None:
    experiment, _ = step(begin(plan_for()), Started(0.0))
    assert next_deadline_s(experiment) == 6.0
    for event in (ReadFailed(1.0, "no answer"), TicksMissed(2.0, 99), TimePassed(5.9)):
        experiment, commands = step(experiment, event)
        assert (experiment.phase, commands) == (Phase.CHECKING, ())
    experiment, _ = step(experiment, TimePassed(6.0))
    assert (experiment.phase, experiment.refusals[0].code) == (Phase.ABORTED, "NO_VIEW")


@pytest.mark.parametrize("wish", [AbortAsked(0.5, "an operator"), FinishAsked(0.5, "an operator")])
def test_a_person_may_stop_before_anything_is_touched(wish: Event) -> None:
    made = bench(plan_for())
    made.run(until=lambda e: e.phase is Phase.CHECKING)
    experiment, commands = step(made.experiment, wish)
    assert (experiment.phase, experiment.end, commands) == (Phase.ABORTED, EndKind.ENDED_EARLY, ())
    assert trip_code(experiment) == "OPERATOR_ABORT"


def test_a_test_may_be_aborted_before_it_starts() -> None:
    experiment, commands = step(begin(plan_for()), AbortAsked(0.0, "an operator"))
    assert (experiment.phase, commands) == (Phase.ABORTED, ())


def test_a_loop_that_does_not_rest_in_manual_is_given_back_with_a_remedy() -> None:
    made = bench(plan_for(), mode=LoopMode.AUTO, noise=lambda t_s: 0.3 * t_s)
    experiment = made.run()
    assert (experiment.phase, experiment.end) == (Phase.ABORTED, EndKind.REFUSED)
    assert experiment.refusal is not None
    assert experiment.refusal.code == "DRIFTING"
    assert result_of(experiment) is HandBackResult.RESTORED
    assert made.plc.mode is LoopMode.AUTO
    assert moves(made) == [50.0]


# --- trips --------------------------------------------------------------------------------------------------

PUMP = WatchLimit("pump", 1.0, 1.0)
RUNS = (WatchReading("pump", 1.0, Quality.GOOD),)


@pytest.mark.parametrize("start", [resting, running])
@pytest.mark.parametrize(
    ("limits", "changes", "code"),
    [
        ({}, {"pv_pct": 95.1}, "PV_RANGE"),
        ({}, {"pv_pct": nan}, "PV_QUALITY"),
        ({}, {"pv_pct": None}, "PV_QUALITY"),
        ({}, {"pv_quality": Quality.FORCED}, "PV_QUALITY"),
        ({"pv_rate_pct_per_s": 20.0}, {"pv_pct": 42.5}, "PV_RATE"),
        ({}, {"op_pct": None}, "VIEW_INCOMPLETE"),
        ({}, {"mode": LoopMode.NOT_KNOWN}, "VIEW_INCOMPLETE"),
        ({}, {"sp_pct": inf}, "VIEW_INCOMPLETE"),
        ({}, {"taken": Stamp.at(0.0)}, "SAMPLE_STALE"),
        ({}, {"watch": ()}, None),
    ],
)
def test_an_interlock_acts_within_the_sample(
    start: Callable[..., Bench], limits: dict[str, Any], changes: dict[str, Any], code: str | None
) -> None:
    made = start(limited(**limits))
    made.scan()
    before = len(made.issued)
    experiment = changed(made, **changes)
    assert trip_code(experiment) == code
    if code is not None:
        assert isinstance(made.issued[before][1], HandBack)
        assert (experiment.phase, experiment.end) == (Phase.ABORTED, EndKind.TRIPPED)
        assert experiment.because.startswith(f"{code}: ")
        assert made.plc.op_pct == 50.0


def test_the_watch_list_is_watched() -> None:
    made = bench(limited(watch=(PUMP,)), change=lambda sample: replace(sample, watch=RUNS))
    made.run(until=phase_is(Phase.TESTING))
    made.plc.change = lambda sample: replace(sample, watch=(WatchReading("pump", 0.0, Quality.GOOD),))
    assert trip_code(made.run()) == "WATCH"


def test_pv_too_far_from_its_reference_trips() -> None:
    experiment = running(limited(pv_deviation_pct=1.0)).run()
    assert trip_code(experiment) == "PV_DEVIATION"


def test_pv_that_would_leave_its_limits_trips_before_it_does() -> None:
    plant = first_order(5.0, 10.0, 2.0)
    plan = limited(plan_for(relay=RelayPlan(10.0, 10.0, hysteresis_pct=4.0)), pv_high_pct=50.0, dead_time_s=2.0)
    made = running(plan, plant)
    experiment = made.run()
    assert trip_code(experiment) == "PV_PREDICTED"
    last = [event.sample.pv_pct for event in made.events if isinstance(event, SampleArrived)][-1]
    assert last is not None
    assert 41.0 < last < 49.0


def test_pv_that_freezes_trips_where_it_moved_at_rest() -> None:
    made = bench(plan_for(), noise=lambda t_s: 0.01 * (round(10.0 * t_s) % 2))
    made.run(until=phase_is(Phase.TESTING))
    frozen_pct = made.plc.read(made.t_s).pv_pct
    made.plc.change = lambda sample: replace(sample, pv_pct=frozen_pct)
    experiment = made.run(at_most_s=60.0)
    assert trip_code(experiment) == "PV_FROZEN"


def test_a_plc_in_stop_is_seen_by_its_echo() -> None:
    made = running(limited(GUARDED, heartbeat_s=0.5))
    made.plc.is_guard_stopped = True
    experiment = made.run(at_most_s=60.0)
    assert trip_code(experiment) in ("HEARTBEAT_LOST", "OP_NOT_FOLLOWING")
    assert experiment.phase is Phase.STRANDED, "nothing can be shown of a PLC in stop"
    assert "output 50.00 %" in experiment.hand_back.detail if experiment.hand_back else False


def test_an_echo_that_stands_still_trips() -> None:
    made = running(limited(GUARDED, heartbeat_s=0.5))
    for _ in range(8):
        guard = made.plc.read(made.t_s).guard
        assert guard is not None
        changed(made, guard=replace(guard, heartbeat_echo=1))
        made.t_s += 0.1
    assert trip_code(made.experiment) == "HEARTBEAT_LOST"


def test_an_output_that_does_not_follow_trips() -> None:
    made = running(limited(op_move_s=0.35))
    made.plc.change = lambda sample: replace(sample, op_pct=50.0)
    experiment = made.run(at_most_s=10.0)
    assert trip_code(experiment) == "OP_NOT_FOLLOWING"


def test_a_guard_that_gives_back_is_a_trip_and_only_verified() -> None:
    made = running(GUARDED)
    made.scan()
    made.plc.is_stop_pressed = True
    before = len(made.plc.writes)
    experiment = made.run(at_most_s=60.0)
    assert trip_code(experiment) == "STOP_PRESSED"
    assert (experiment.phase, result_of(experiment)) == (Phase.ABORTED, HandBackResult.GUARD_GAVE_BACK)
    assert [type(command) for _, command in made.plc.writes[before:]] == [ReleaseLoop]
    assert made.plc.op_pct == 50.0


def test_a_guard_that_disarms_is_a_trip() -> None:
    made = running(GUARDED)
    guard = made.plc.read(made.t_s).guard
    assert guard is not None
    experiment = changed(made, guard=replace(guard, state=GuardState.IDLE, holder=0))
    assert trip_code(experiment) == "GUARD_GAVE_BACK"


def test_after_a_restart_of_the_plc_nothing_is_written() -> None:
    made = running(boot_count=3)
    made.scan()
    made.plc.boot_count = 4
    before = len(made.plc.writes)
    experiment = made.run(at_most_s=60.0)
    assert trip_code(experiment) == "PLC_RESTARTED"
    assert (experiment.phase, result_of(experiment)) == (Phase.STRANDED, HandBackResult.NOT_CONFIRMED)
    assert len(made.plc.writes) == before


def test_a_guard_that_does_not_come_to_us_in_time_is_a_trip() -> None:
    made = bench(GUARDED)
    made.run(until=lambda e: e.stage is Stage.LOOKING)
    made.plc.guard.is_enabled = False
    made.plc.change = lambda sample: replace(
        sample, guard=None if sample.guard is None else replace(sample.guard, is_enabled=True)
    )
    experiment = made.run(at_most_s=60.0)
    assert trip_code(experiment) == "TAKE_OVER_LATE"
    assert experiment.phase is Phase.ABORTED
    assert made.plc.request == 0, "the request is withdrawn"
    assert {type(command) for _, command in made.plc.writes} == {ClaimLoop, ReleaseLoop}


@pytest.mark.parametrize("has_guard", [True, False])
def test_a_block_that_does_not_come_to_manual_in_time_is_a_trip(has_guard: bool) -> None:
    made = bench(plan_for(has_guard=has_guard), mode=LoopMode.AUTO)
    made.plc.change = lambda sample: replace(sample, mode=LoopMode.AUTO)
    experiment = made.run(at_most_s=60.0)
    assert trip_code(experiment) == "TAKE_OVER_LATE"
    assert not moves(made)


def test_a_plant_that_does_not_answer_trips_in_time() -> None:
    experiment = running(limited(switch_within_s=5.0), three_lags(gain=0.0)).run(at_most_s=60.0)
    assert trip_code(experiment) == "NO_SWITCH"


@pytest.mark.parametrize("plant", [three_lags(gain=-1.0), first_order(-1.0, 5.0, 1.0)])
def test_a_wrong_sign_trips_by_its_first_excursion(plant: Plant) -> None:
    made = running(limited(dead_time_s=1.0), plant)
    experiment = made.run(at_most_s=60.0)
    assert trip_code(experiment) == "WRONG_SIGN"
    assert made.t_s < 12.0
    assert moves(made) == [50.0, 60.0], "it never switched"


def test_a_declared_inverse_response_is_no_wrong_sign() -> None:
    inverse = Plant([[-1, 0, 0], [1, -1, 0], [0, 1, -1]], [1, 0, 0], [0, -2, 3], 0.0, 50.0)  # (1 - 2s)/(s + 1)^3
    plan = limited(plan_for(relay=RelayPlan(5.0, 5.0, hysteresis_pct=0.2)), inverse_response_s=3.0)
    assert trip_code(running(replace(plan, limits=LIMITS), inverse).run(at_most_s=60.0)) == "WRONG_SIGN"
    assert running(plan, inverse).run(at_most_s=100.0).phase is Phase.COMPLETE


@pytest.mark.parametrize("lags", [2, 4, 8])
def test_many_lags_are_no_wrong_sign_though_the_first_half_is_short(lags: int) -> None:
    a = [[-1.0 if i == j else 1.0 if i == j + 1 else 0.0 for j in range(lags)] for i in range(lags)]
    plant = Plant(a, [1.0] + [0.0] * (lags - 1), [0.0] * (lags - 1) + [1.0], 0.0, 50.0)
    plan = plan_for(relay=RelayPlan(10.0, 10.0, hysteresis_pct=0.05))
    assert running(plan, plant).run(at_most_s=300.0).phase is Phase.COMPLETE


def test_a_load_that_the_relay_cannot_carry_is_a_trip() -> None:
    made = running(limited(switch_within_s=1e6))
    made.run(until=lambda e: len(e.whole_cycles) == 2)
    from_s = made.t_s
    made.plc.noise = lambda t_s: 3.0 * (t_s - from_s)
    experiment = made.run(at_most_s=300.0)
    assert trip_code(experiment) == "WRONG_SIGN"


def test_a_drift_between_cycles_trips() -> None:
    made = running(limited(drift_pct_per_s=0.02))
    from_s = made.t_s
    made.plc.noise = lambda t_s: 0.08 * max(0.0, t_s - from_s - 6.0)
    experiment = made.run(at_most_s=100.0)
    assert trip_code(experiment) == "DRIFT"


ENDLESS = ConvergencePlan(cycles_to_agree=99)


def test_when_time_or_cycles_run_out_there_is_a_good_end_if_there_is_enough() -> None:
    by_time = running(limited(plan_for(convergence=ENDLESS), test_within_s=20.0)).run()
    assert (by_time.phase, by_time.end) == (Phase.COMPLETE, EndKind.ENOUGH)
    by_cycles = running(limited(plan_for(convergence=ENDLESS), cycles_at_most=5)).run()
    assert (by_cycles.phase, len(by_cycles.whole_cycles)) == (Phase.COMPLETE, 5)


def test_when_time_or_cycles_run_out_there_is_a_trip_if_there_is_not_enough() -> None:
    assert trip_code(running(limited(test_within_s=10.0)).run()) == "TEST_TOO_LONG"
    assert trip_code(running(limited(cycles_at_most=2)).run()) == "TOO_MANY_CYCLES"
    assert trip_code(resting(limited(test_within_s=1.0)).run()) == "TEST_TOO_LONG"


@pytest.mark.parametrize("start", [resting, running])
def test_missed_ticks_trip_past_their_bound(start: Callable[..., Bench]) -> None:
    made = start(limited(missed_ticks_at_most=5))
    made.feed(TicksMissed(made.t_s, 5))
    assert trip_code(made.experiment) is None
    made.feed(TicksMissed(made.t_s, 6))
    assert trip_code(made.experiment) == "TICKS_MISSED"


@pytest.mark.parametrize("start", [resting, running])
def test_a_missed_reading_is_allowed_only_as_long_as_it_is_safe(start: Callable[..., Bench]) -> None:
    made = start(limited(safe_without_view_s=1.0))
    seen_s = made.experiment.seen_s
    assert seen_s is not None
    made.feed(ReadFailed(seen_s + 0.9, "no answer"))
    assert made.experiment.trip is None
    made.t_s = seen_s + 1.0
    made.feed(ReadFailed(made.t_s, "no answer"))
    assert trip_code(made.experiment) == "LINK_LOST"


def test_by_default_no_missed_reading_is_allowed() -> None:
    made = running()
    made.feed(ReadFailed(made.t_s, "no answer"))
    assert trip_code(made.experiment) == "LINK_LOST"


def test_silence_is_noticed_without_any_reading() -> None:
    made = running()
    due_s = next_deadline_s(made.experiment)
    assert due_s is not None
    assert made.experiment.seen_s is not None
    assert due_s == pytest.approx(made.experiment.seen_s + 0.2)
    made.feed(TimePassed(due_s - 0.01))
    assert made.experiment.trip is None
    made.feed(TimePassed(due_s))
    assert trip_code(made.experiment) == "LINK_LOST"


def test_an_abort_hands_back_at_once() -> None:
    made = running()
    made.feed(AbortAsked(made.t_s, "an operator"))
    assert trip_code(made.experiment) == TripCode.OPERATOR_ABORT.name
    assert made.experiment.phase is Phase.ABORTED
    assert "an operator" in made.experiment.because


# --- wishes -------------------------------------------------------------------------------------------------


def test_a_person_may_finish_when_there_is_enough() -> None:
    made = running(plan_for(convergence=ENDLESS))
    made.run(until=lambda e: len(e.usable_cycles) == 2)
    made.feed(FinishAsked(made.t_s, "an operator"))
    assert (made.experiment.phase, made.experiment.end) == (Phase.COMPLETE, EndKind.ENOUGH)


@pytest.mark.parametrize("start", [resting, running])
def test_finishing_too_early_is_no_good_end(start: Callable[..., Bench]) -> None:
    made = start()
    made.feed(FinishAsked(made.t_s, "an operator"))
    assert (made.experiment.phase, made.experiment.end) == (Phase.ABORTED, EndKind.ENDED_EARLY)
    assert result_of(made.experiment) is HandBackResult.RESTORED


@pytest.mark.parametrize("until", [Phase.CHECKING, Phase.BASELINE])
def test_smaller_steps_before_the_first_move_make_it_smaller(until: Phase) -> None:
    made = bench(plan_for())
    made.run(until=phase_is(until))
    made.feed(SmallerStepsAsked(made.t_s, "an operator"))
    made.run(until=phase_is(Phase.TESTING))
    assert moves(made) == [50.0, 56.0]


def test_smaller_steps_count_from_the_next_switch_on_and_begin_to_discard_anew() -> None:
    made = running(plan_for(convergence=replace(ENDLESS, cycles_to_discard=1)))
    made.run(until=lambda e: len(e.usable_cycles) == 1)
    made.feed(SmallerStepsAsked(made.t_s, "an operator"))
    already = len(moves(made))
    made.run(until=lambda e: len(e.whole_cycles) == 5)
    assert moves(made)[already:][:2] == [44.0, 56.0]
    assert [cycle.is_usable for cycle in made.experiment.whole_cycles] == [False, True, False, False, True]
    assert made.experiment.whole_cycles[-1].amplitude_pct == pytest.approx(6.0)


def test_steps_are_fitted_to_the_wanted_swing_and_never_beyond_the_limits() -> None:
    relay = RelayPlan(2.0, 2.0, hysteresis_pct=0.1, wanted_swing_pct=1.5)
    made = running(plan_for(relay=relay))
    experiment = made.run()
    assert experiment.phase is Phase.COMPLETE
    assert experiment.usable_cycles[-1].pv_amplitude_pct == pytest.approx(1.5, rel=0.25)
    assert 40.0 <= min(moves(made)) < 48.0
    greedy = running(plan_for(relay=replace(relay, wanted_swing_pct=50.0)))
    greedy.run()
    assert (min(moves(greedy)), max(moves(greedy))) == (40.0, 60.0)


def test_with_a_rate_the_output_goes_to_its_level_in_small_moves() -> None:
    plan = limited(op_rate_pct_per_s=20.0)
    made = running(plan)
    experiment = made.run()
    assert experiment.phase is Phase.COMPLETE
    steps = [abs(after - before) for before, after in zip(moves(made), moves(made)[1:], strict=False)]
    assert max(steps) == pytest.approx(2.0)
    assert max(moves(made)) == 60.0


# --- writes -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", [ClaimLoop, SetMode, DriveOutput])
def test_a_refused_write_trips(kind: type) -> None:
    made = bench(GUARDED, mode=LoopMode.AUTO)
    made.outcome = lambda t_s, command: WriteOutcome.REFUSED if isinstance(command, kind) else WriteOutcome.APPLIED
    experiment = made.run(at_most_s=60.0)
    assert trip_code(experiment) == "WRITE_REFUSED"
    assert experiment.phase is Phase.ABORTED


@pytest.mark.parametrize("kind", [ClaimLoop, SetMode, DriveOutput])
@pytest.mark.parametrize("has_guard", [True, False])
def test_a_write_that_landed_unheard_and_shows_in_the_next_reading_is_no_reason_to_stop(
    kind: type, has_guard: bool
) -> None:
    made = bench(plan_for(has_guard=has_guard), mode=LoopMode.AUTO)
    made.outcome = lambda t_s, command: WriteOutcome.NOT_HEARD if isinstance(command, kind) else WriteOutcome.APPLIED
    assert made.run(at_most_s=200.0).phase is Phase.COMPLETE


@pytest.mark.parametrize("has_guard", [True, False])
def test_an_unheard_move_that_does_not_show_trips_and_nothing_moves_meanwhile(has_guard: bool) -> None:
    made = running(limited(plan_for(has_guard=has_guard), op_move_s=0.45))
    lost: list[Command] = []

    def lose(t_s: float, command: Command) -> WriteOutcome:
        lost.append(command)
        return WriteOutcome.NOT_HEARD

    made.run(until=lambda e: e.relay is not None and e.relay.switches == 1)
    made.outcome = lose
    made.plc.change = lambda sample: replace(sample, op_pct=40.0)
    made.run(until=lambda e: e.relay is not None and e.relay.switches == 2)
    experiment = made.run(at_most_s=60.0)
    assert trip_code(experiment) in ("WRITE_NOT_HEARD", "OP_NOT_FOLLOWING")
    assert {command.op_pct for command in lost if isinstance(command, DriveOutput)} <= {40.0, 60.0}


def test_while_a_write_is_unheard_the_relay_does_not_switch() -> None:
    plan = limited(op_move_s=60.0, op_resolution_pct=0.01)
    made = running(plan)
    command = next(command for _, command in reversed(made.issued))
    made.feed(Written(made.t_s, command, WriteReport(WriteOutcome.NOT_HEARD, Stamp.at(made.t_s))))
    made.plc.change = lambda sample: replace(sample, op_pct=59.0)
    made.run(at_most_s=made.t_s + 3.0)
    assert made.experiment.unheard is not None
    assert moves(made) == [50.0, 60.0]
    made.plc.change = lambda sample: sample
    made.run(until=lambda e: e.relay is not None and e.relay.switches == 1)
    assert moves(made) == [50.0, 60.0, 40.0]


def test_while_a_write_is_unheard_a_ramp_stands() -> None:
    made = running(limited(op_rate_pct_per_s=20.0, op_move_s=60.0, op_resolution_pct=0.01))
    made.scan()
    command = made.issued[-1][1]
    made.feed(Written(made.t_s, command, WriteReport(WriteOutcome.NOT_HEARD, Stamp.at(made.t_s))))
    before = moves(made)
    made.plc.change = lambda sample: replace(sample, op_pct=before[-1] - 1.0)
    made.scan()
    made.scan()
    assert moves(made) == before
    made.plc.change = lambda sample: sample
    made.scan()
    assert moves(made) == [*before, pytest.approx(before[-1] + 2.0)]


def test_without_a_view_an_unheard_write_trips_by_its_own_code() -> None:
    made = running()
    command = made.issued[-1][1]
    made.feed(Written(made.t_s, command, WriteReport(WriteOutcome.NOT_HEARD, Stamp.at(made.t_s))))
    assert made.experiment.trip is None, "it is read before anything else"
    made.feed(ReadFailed(made.t_s, "no answer"))
    assert trip_code(made.experiment) == "WRITE_NOT_HEARD"


def test_an_answer_to_the_same_kind_of_write_settles_an_unheard_one_and_another_kind_does_not() -> None:
    made = running(limited(GUARDED, op_move_s=60.0))
    drive = made.issued[-1][1]
    silence = WriteReport(WriteOutcome.NOT_HEARD, Stamp.at(made.t_s))
    made.feed(Written(made.t_s, drive, silence))
    since = made.experiment.unheard
    made.feed(Written(made.t_s, drive, silence))
    assert made.experiment.unheard == since
    made.feed(Written(made.t_s, ClaimLoop(TOKEN, 1), WriteReport(WriteOutcome.APPLIED, Stamp.at(made.t_s))))
    assert made.experiment.unheard == since
    made.feed(Written(made.t_s, drive, WriteReport(WriteOutcome.APPLIED, Stamp.at(made.t_s))))
    assert made.experiment.unheard is None


# --- whose loop it is ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("start", [resting, running])
@pytest.mark.parametrize(
    "taken", [{"mode": LoopMode.AUTO}, {"mode": LoopMode.LOCAL}, {"op_pct": 71.0}, {"sp_pct": 44.0}]
)
def test_a_loop_that_somebody_took_is_released_and_never_written_again(
    start: Callable[..., Bench], taken: dict[str, Any]
) -> None:
    made = start()
    made.scan()
    before = len(made.plc.writes)
    experiment = changed(made, **taken)
    assert (experiment.phase, experiment.end) == (Phase.RELEASED, EndKind.TAKEN)
    assert (experiment.trip, experiment.hand_back) == (None, None)
    assert len(made.plc.writes) == before


def test_a_setpoint_that_tracks_is_nobodys_takeover() -> None:
    made = running(plan_for(sp_tracks_in_manual=True))
    assert changed(made, sp_pct=55.0).phase is Phase.TESTING


def test_with_a_guard_only_our_token_goes_back_to_the_plc() -> None:
    made = running(GUARDED)
    made.scan()
    before = len(made.plc.writes)
    assert changed(made, op_pct=71.0).phase is Phase.RELEASED
    assert [command for _, command in made.plc.writes[before:]] == [ReleaseLoop()]


def test_a_guard_that_another_token_holds_is_left_alone() -> None:
    made = running(GUARDED)
    guard = made.plc.read(made.t_s).guard
    assert guard is not None
    before = len(made.plc.writes)
    assert changed(made, guard=replace(guard, holder=99)).phase is Phase.RELEASED
    assert len(made.plc.writes) == before


def test_somebody_who_takes_the_loop_while_it_is_handed_back_keeps_it() -> None:
    made = running()
    made.run(until=lambda e: e.relay is not None and e.relay.switches == 1)
    made.plc.change = lambda sample: replace(sample, op_pct=71.0)
    made.feed(AbortAsked(made.t_s, "an operator"))
    assert (made.experiment.phase, result_of(made.experiment)) == (Phase.RELEASED, HandBackResult.TAKEN)


# --- order of events ----------------------------------------------------------------------------------------

REPORT = WriteReport(WriteOutcome.APPLIED, Stamp.at(0.0))
EVENTS: tuple[Event, ...] = (
    Started(0.0),
    SampleArrived(0.0, reading()),
    ReadFailed(0.0, ""),
    TimePassed(0.0),
    TicksMissed(0.0, 1),
    AbortAsked(0.0, ""),
    FinishAsked(0.0, ""),
    SmallerStepsAsked(0.0, ""),
    Written(0.0, ReleaseLoop(), REPORT),
    HandBackEnded(0.0, HandBackResult.RESTORED, ""),
)


@pytest.mark.parametrize("phase", list(Phase))
@pytest.mark.parametrize("event", EVENTS)
def test_an_event_that_the_phase_cannot_meet_is_illegal(phase: Phase, event: Event) -> None:
    experiment = replace(begin(plan_for()), phase=phase)
    if isinstance(event, HEARD[phase]):
        step(experiment, event)
    else:
        with pytest.raises(IllegalEvent, match=phase.value):
            step(experiment, event)


def test_every_event_is_heard_somewhere_and_no_phase_hears_what_does_not_exist() -> None:
    kinds = {type(event) for event in EVENTS}
    assert set().union(*HEARD.values()) == kinds
    assert set(HEARD) == set(Phase)


@pytest.mark.parametrize("t_s", [0.9, -inf, inf, nan])
def test_time_does_not_run_backwards_and_is_a_number(t_s: float) -> None:
    experiment, _ = step(begin(plan_for()), Started(1.0))
    with pytest.raises(IllegalEvent):
        step(experiment, TimePassed(t_s))
    again, _ = step(experiment, TimePassed(1.0))
    assert again == experiment


def test_restoring_is_deaf_to_everything_but_its_end() -> None:
    made = running()
    restoring, commands = step(made.experiment, AbortAsked(made.t_s, "an operator"))
    assert [type(command) for command in commands] == [HandBack]
    assert next_deadline_s(restoring) is None
    for event in EVENTS[1:-1]:
        heard, commands = step(restoring, replace(event, t_s=made.t_s))
        assert (heard.phase, commands) == (Phase.RESTORING, ())


@pytest.mark.parametrize(
    ("result", "phase"),
    [
        (HandBackResult.RESTORED, Phase.ABORTED),
        (HandBackResult.GUARD_GAVE_BACK, Phase.ABORTED),
        (HandBackResult.TAKEN, Phase.RELEASED),
        (HandBackResult.NOT_CONFIRMED, Phase.STRANDED),
    ],
)
def test_the_end_of_the_hand_back_decides_how_a_trip_ends(result: HandBackResult, phase: Phase) -> None:
    made = running()
    restoring, _ = step(made.experiment, AbortAsked(made.t_s, "an operator"))
    ended, commands = step(restoring, HandBackEnded(made.t_s, result, "detail"))
    assert (ended.phase, commands) == (phase, ())
    assert ended.hand_back is not None
    assert ended.hand_back.detail == "detail"


def test_a_good_test_whose_hand_back_is_not_confirmed_is_stranded_all_the_same() -> None:
    made = running(plan_for(convergence=ENDLESS))
    made.run(until=lambda e: len(e.usable_cycles) == 2)
    restoring, _ = step(made.experiment, FinishAsked(made.t_s, "an operator"))
    for result in (HandBackResult.RESTORED, HandBackResult.GUARD_GAVE_BACK):
        assert step(restoring, HandBackEnded(made.t_s, result, ""))[0].phase is Phase.COMPLETE
    stranded, _ = step(restoring, HandBackEnded(made.t_s, HandBackResult.NOT_CONFIRMED, ""))
    assert stranded.phase is Phase.STRANDED


def test_a_finished_test_still_shows_new_readings() -> None:
    made = running()
    made.run()
    later: Sample = reading(pv_pct=12.0)
    shown, _ = step(made.experiment, SampleArrived(made.t_s, later))
    assert shown.sample is later
    assert shown.is_over


def test_the_next_deadline_is_the_earliest_of_all() -> None:
    assert next_deadline_s(begin(plan_for())) is None
    made = bench(limited(GUARDED, safe_without_view_s=90.0))
    made.run(until=lambda e: e.stage is Stage.CLAIMING)
    assert next_deadline_s(made.experiment) == pytest.approx(made.experiment.stage_s + 5.0)
    made = running(limited(safe_without_view_s=90.0, switch_within_s=7.0))
    assert made.experiment.relay is not None
    assert next_deadline_s(made.experiment) == pytest.approx(made.experiment.relay.switched_s + 7.0)
    made = running(limited(safe_without_view_s=9000.0, switch_within_s=9000.0, test_within_s=50.0))
    assert made.experiment.touched_s is not None
    assert next_deadline_s(made.experiment) == pytest.approx(made.experiment.touched_s + 50.0)


def test_blanking_keeps_two_switches_apart() -> None:
    relay = RelayPlan(10.0, 10.0, hysteresis_pct=0.05, blanking_s=3.0)
    made = running(plan_for(relay=relay))
    made.run()
    times_s = [t_s for t_s, command in made.plc.writes if isinstance(command, DriveOutput)][1:-1]
    assert min(after - before for before, after in itertools.pairwise(times_s)) > 2.999
