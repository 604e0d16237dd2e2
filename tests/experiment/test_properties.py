"""Whatever happens, in whatever order: S1, S3, determinism, and no way past the hand-back."""

import math
from collections.abc import Callable
from dataclasses import replace

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from autotune.errors import IllegalEvent
from autotune.experiment.commands import Command, DriveOutput, HandBack, ReleaseLoop, SetMode, SetSetpoint
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
from autotune.experiment.gate import gate
from autotune.experiment.hand_back import HandBackDone, HandBackWrites, next_hand_back_step
from autotune.experiment.machine import next_deadline_s, record, step
from autotune.experiment.phases import TRANSITIONS, Phase
from autotune.experiment.picture import picture
from autotune.experiment.plan import RelayPlan, TestPlan
from autotune.experiment.state import Experiment
from autotune.loop.mode import LoopMode
from autotune.loop.quality import Quality
from autotune.loop.sample import GuardState, GuardView, Sample, Stamp
from autotune.loop.write import WriteOutcome, WriteReport
from tests.experiment.bench import LIMITS, TOKEN, Bench, bench, plan_for

LOOP_WRITES = (DriveOutput, SetMode, SetSetpoint)

NUMBERS = st.one_of(st.floats(30.0, 60.0), st.floats(allow_nan=True, allow_infinity=True), st.just(math.nan), st.none())
GUARDS = st.builds(
    GuardView,
    state=st.sampled_from(GuardState),
    holder=st.sampled_from([None, 0, TOKEN, 99]),
    heartbeat_echo=st.one_of(st.none(), st.integers(0, 65535)),
    is_stop_pressed=st.sampled_from([None, False, True]),
    op_effect_count=st.one_of(st.none(), st.integers(0, 9)),
    op_effect_ms=st.one_of(st.none(), st.integers(0, 2**32 - 1)),
)


def twice(experiment: Experiment, event: Event) -> tuple[Experiment, tuple[Command, ...]]:
    """Step, and insist that the same event gives the same answer again."""
    first, again = step(experiment, event), step(experiment, event)
    assert repr(first) == repr(again)  # repr, since NaN differs from itself
    return first


def judge_step(before: Experiment, after: Experiment, commands: tuple[Command, ...]) -> None:
    """What has to hold after any step."""
    if before.phase is not after.phase:
        assert any(at is before.phase and to is after.phase for (at, _), to in TRANSITIONS.items()) or (
            before.phase is Phase.CHECKING and after.phase is Phase.BASELINE
        )
    for command in commands:
        assert gate(after, command) is None
        if isinstance(command, DriveOutput):
            assert after.as_found is not None
            found_pct, limits = after.as_found.op_pct, after.plan.limits
            assert found_pct - limits.step_down_pct <= command.op_pct <= found_pct + limits.step_up_pct
            assert command.op_pct == found_pct or limits.op_low_pct <= command.op_pct <= limits.op_high_pct
    if after.phase.is_terminal:
        assert not any(isinstance(command, LOOP_WRITES) for command in commands)
        assert next_deadline_s(after) is None
    if after.phase is Phase.RESTORING and before.phase is not Phase.RESTORING:
        assert [type(command) for command in commands] == [HandBack]
    picture(after)
    record(after)


@st.composite
def odd_samples(draw: st.DrawFn, base: Sample) -> Sample:
    """A reading in which anything may be odd, now and then."""
    changes: dict[str, object] = {}
    if draw(st.integers(0, 3)) == 0:
        changes = draw(
            st.fixed_dictionaries(
                {},
                optional={
                    "pv_pct": NUMBERS,
                    "op_pct": NUMBERS,
                    "sp_pct": NUMBERS,
                    "mode": st.sampled_from(LoopMode),
                    "pv_quality": st.sampled_from(Quality),
                    "op_quality": st.sampled_from(Quality),
                    "guard": st.one_of(st.none(), GUARDS),
                    "boot_count": st.sampled_from([None, 3, 4]),
                    "plc_clock_ms": st.one_of(st.none(), st.integers(0, 2**32 - 1)),
                    "taken": st.builds(Stamp.at, st.floats(allow_nan=True, allow_infinity=True)),
                },
            )
        )
    return replace(base, **changes)  # type: ignore[arg-type]  # the sample's own fields


PLANS = st.builds(
    lambda has_guard, tracks, up, down, high, rate, safe: plan_for(
        replace(
            LIMITS,
            step_up_pct=up,
            step_down_pct=down,
            op_high_pct=high,
            op_rate_pct_per_s=rate,
            safe_without_view_s=safe,
            cycles_at_most=4,
        ),
        RelayPlan(up, down, hysteresis_pct=0.5, wanted_swing_pct=2.0),
        has_guard=has_guard,
        sp_tracks_in_manual=tracks,
    ),
    st.booleans(),
    st.booleans(),
    st.floats(0.5, 10.0),
    st.floats(0.5, 10.0),
    st.floats(61.0, 90.0),
    st.one_of(st.none(), st.floats(1.0, 50.0)),
    st.sampled_from([0.0, 0.3]),
)


BEYOND = (0.1, 0.1, 0.1, 0.0, 0.7, -5.0, math.nan, math.inf)
"""How far on the next event is, in seconds; not all of it is time."""

SIMPLE: tuple[Callable[[float], Event], ...] = (
    lambda t_s: AbortAsked(t_s, "somebody"),
    lambda t_s: FinishAsked(t_s, "somebody"),
    lambda t_s: SmallerStepsAsked(t_s, "somebody"),
    lambda t_s: ReadFailed(t_s, "no answer"),
    lambda t_s: TicksMissed(t_s, 3),
    lambda t_s: TicksMissed(t_s, 30),
    TimePassed,
    Started,
)


@st.composite
def events(draw: st.DrawFn, made: Bench, t_s: float) -> Event:
    """Any event, readings more often than others."""
    kind = draw(st.sampled_from(["sample"] * 4 + ["simple", "written", "ended"]))
    if kind == "simple":
        return draw(st.sampled_from(SIMPLE))(t_s)
    if kind == "written":
        last = made.issued[-1][1] if made.issued else ReleaseLoop()
        return Written(t_s, last, WriteReport(draw(st.sampled_from(WriteOutcome)), Stamp.at(t_s)))
    if kind == "ended":
        return HandBackEnded(t_s, draw(st.sampled_from(HandBackResult)), "")
    plant_s = made.plc.plant.t_s
    at_s = t_s if math.isfinite(t_s) and t_s >= plant_s else plant_s
    return SampleArrived(t_s, draw(odd_samples(made.plc.read(at_s))))


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(st.data(), PLANS, st.sampled_from([LoopMode.MAN, LoopMode.AUTO]), st.integers(0, 120))
def test_no_order_of_events_breaks_the_limits_or_leads_past_the_hand_back(
    data: st.DataObject, plan: TestPlan, mode: LoopMode, quiet: int
) -> None:
    made = bench(plan, mode=mode, boot_count=3, has_clock=True)
    made.run(until=lambda e: e.is_over or len(made.events) > quiet)
    t_s = made.t_s
    for _ in range(data.draw(st.integers(1, 20))):
        t_s += data.draw(st.sampled_from(BEYOND))
        before = made.experiment
        try:
            made.experiment, commands = twice(before, data.draw(events(made, t_s)))
        except IllegalEvent:
            t_s = before.t_s or 0.0
            continue
        judge_step(before, made.experiment, commands)
        for command in commands:
            made.issued.append((made.experiment.phase, command))
            if not isinstance(command, HandBack):
                made.plc.write(t_s, command)


def until_sample(made: Bench, count: int) -> bool:
    """Run to this sample; whether the test is still going on there."""
    made.run(until=lambda e: e.is_over or sum(isinstance(event, SampleArrived) for event in made.events) >= count)
    return not made.experiment.is_over


TAKE: dict[str, Callable[[Sample], Sample]] = {
    "mode": lambda sample: replace(sample, mode=LoopMode.LOCAL),
    "output": lambda sample: replace(sample, mode=LoopMode.MAN, op_pct=77.0),
    "setpoint": lambda sample: replace(sample, sp_pct=63.0),
}


@settings(max_examples=30, deadline=None)
@given(
    st.integers(12, 190),
    st.sampled_from(sorted(TAKE)),
    st.booleans(),
    st.sampled_from([LoopMode.MAN, LoopMode.AUTO]),
)
def test_whenever_somebody_takes_the_loop_we_never_write_to_it_again(
    taken_at: int, how: str, has_guard: bool, mode: LoopMode
) -> None:
    made = bench(plan_for(has_guard=has_guard), mode=mode)
    if not until_sample(made, taken_at):
        return
    if how == "output" and made.experiment.held.op_pct is None and mode is LoopMode.AUTO:
        return  # before manual is ours, an output that moves in automatic is the block's own
    before = len(made.plc.writes)
    made.plc.change = TAKE[how]
    made.run(at_most_s=made.t_s + 60.0)
    for _ in range(3):
        made.scan()
    assert made.experiment.phase is Phase.RELEASED
    assert all(isinstance(command, ReleaseLoop) for _, command in made.plc.writes[before:])
    assert len(made.plc.writes) - before <= has_guard


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 6), st.sampled_from(sorted(TAKE)), st.booleans(), st.booleans())
def test_whoever_takes_the_loop_during_the_hand_back_keeps_it(
    taken_at: int, how: str, has_guard: bool, from_automatic: bool
) -> None:
    made = bench(plan_for(has_guard=has_guard), mode=LoopMode.AUTO if from_automatic else LoopMode.MAN)
    made.run(until=lambda e: e.relay is not None and e.relay.switches == 2)
    plan, held, as_found = made.experiment.plan, made.experiment.held, made.experiment.as_found
    assert as_found is not None
    for turn in range(30):
        made.t_s += plan.scan_s
        if turn == taken_at:
            made.plc.change = TAKE[how]
        answer = next_hand_back_step(plan, as_found, held, made.plc.read(made.t_s))
        assert repr(answer) == repr(next_hand_back_step(plan, as_found, held, made.plc.read(made.t_s)))
        if isinstance(answer, HandBackDone):
            assert answer.result is (HandBackResult.RESTORED if turn < taken_at else HandBackResult.TAKEN)
            return
        assert isinstance(answer, HandBackWrites)
        if turn >= taken_at:
            assert not any(isinstance(command, LOOP_WRITES) for command in answer.commands)
        held = answer.held
        for command in answer.commands:
            made.plc.write(made.t_s, command)
    pytest.fail("the hand-back came to no end")


@settings(max_examples=30, deadline=None)
@given(
    st.integers(11, 190),
    st.sampled_from([LoopMode.MAN, LoopMode.AUTO]),
    st.booleans(),
    st.booleans(),
    st.integers(0, 5),
)
def test_an_abort_at_any_instant_with_lost_writes_brings_the_loop_home(
    aborted_at: int, mode: LoopMode, has_guard: bool, tracks: bool, lost: int
) -> None:
    made = bench(plan_for(has_guard=has_guard, sp_tracks_in_manual=tracks), mode=mode, sp_tracks=tracks)
    if not until_sample(made, aborted_at):
        return
    write, count = made.plc.write, 0

    def lose_some(t_s: float, command: Command) -> None:
        nonlocal count
        count += 1
        if count > lost:
            write(t_s, command)

    made.plc.write = lose_some  # type: ignore[method-assign]  # the bench's own wire, not our code
    made.feed(AbortAsked(made.t_s, "an operator"))
    assert made.experiment.phase is Phase.ABORTED
    assert made.plc.mode is mode
    assert mode is LoopMode.AUTO or made.plc.op_pct == 50.0
    assert mode is LoopMode.MAN or made.plc.sp_pct == pytest.approx(40.0)
    assert made.plc.guard.holder == 0
