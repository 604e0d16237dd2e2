"""A whole test in virtual time: its good end, wishes, other hands, a dead link, a full disk, our own faults."""

import asyncio
from collections.abc import Callable, Sequence
from dataclasses import replace

import pytest

from autotune.config.types import LoopConfig
from autotune.errors import IllegalEvent, JournalError
from autotune.experiment.events import AbortAsked, TicksMissed, TimePassed
from autotune.experiment.phases import Phase
from autotune.experiment.relay import SMALLER_RATIO
from autotune.experiment.state import EndKind, Stage, record
from autotune.field.link import ReadReport
from autotune.loop.mode import LoopMode
from autotune.loop.record import TimeBase
from autotune.service.journal import LineKind, MemoryJournal
from simulator.block import Mode
from tests.fakes.link import FakeLink, Fault, FaultKind
from tests.fakes.plant import WITH_GUARD, WITHOUT_GUARD, PlantInMemory
from tests.service.bench import Ran, assert_as_found, assert_journal_replays, assert_s1_on_the_wire, at, begin, run

LOOPS = pytest.mark.parametrize("loop", [WITH_GUARD, WITHOUT_GUARD], ids=["with a guard", "without a guard"])
TOUCHED = (Stage.SWITCHING, Stage.SETTLING, Stage.HOLDING, Stage.FIRST_MOVE, Stage.CYCLING)


def when_in(ran: Ran, stage: Stage, act: Callable[[], object], *, passes: int = 4) -> Callable[[int], None]:
    """A hook for ``run`` that acts once, some passes after the test has come to ``stage``."""
    left = passes

    def on_pass(_number: int) -> None:
        nonlocal left
        if ran.experiment.stage is stage and left:
            left -= 1
            if left == 0:
                act()

    return on_pass


def outputs_pct(ran: Ran) -> list[float]:
    return [float(raw) for request in ran.writes for name, raw in request.values if name in ("op", "op_request")]


def assert_ended_as_found(ran: Ran) -> None:
    assert_as_found(ran)
    assert_s1_on_the_wire(ran)
    assert_journal_replays(ran)


@LOOPS
def test_a_test_without_trouble_measures_and_hands_back(loop: LoopConfig) -> None:
    ran = run(begin(loop))
    assert ran.experiment.phase is Phase.COMPLETE, ran.said
    assert ran.experiment.end is EndKind.ENOUGH
    assert_ended_as_found(ran)
    assert ran.runner.faults == []
    recorded = record(ran.experiment)
    assert recorded is not None
    assert recorded.time_base is (TimeBase.PLC_CLOCK if loop.has_guard else TimeBase.OUR_CLOCK)
    assert [line.text for line in ran.runner.log.story if line.kind == "phase"] == [
        "CHECKING",
        "BASELINE",
        "TESTING",
        "RESTORING",
        "COMPLETE",
    ]
    assert [line.payload for line in ran.lines if line.kind == "end"] == ["COMPLETE"]


@LOOPS
def test_the_journal_tells_what_was_found_before_the_first_command(loop: LoopConfig) -> None:
    kinds = [line.kind for line in run(begin(loop)).lines]
    assert kinds[0] == "plan"
    assert kinds.index("as_found") < kinds.index("command")


def test_a_second_test_follows_the_first_on_the_same_guard() -> None:
    """The mailbox still holds the sequence and the heartbeat of the first one."""
    first = run(begin(WITH_GUARD))
    assert first.experiment.phase is Phase.COMPLETE
    second = begin(WITH_GUARD)
    second.plant.loop.mailbox.sequence = first.plant.loop.mailbox.sequence + 100
    second.plant.loop.mailbox.heartbeat = first.plant.loop.mailbox.heartbeat
    assert run(second).experiment.phase is Phase.COMPLETE, second.said


@LOOPS
@pytest.mark.parametrize("stage", list(Stage))
def test_an_abort_in_any_stage_ends_with_the_loop_as_found(loop: LoopConfig, stage: Stage) -> None:
    ran = begin(loop)
    run(ran, on_pass=when_in(ran, stage, lambda: ran.runner.abort("R. Lind")))
    if stage in (Stage.GIVING_BACK, Stage.OVER) or (stage is Stage.CLAIMING and not loop.has_guard):
        assert ran.experiment.phase is Phase.COMPLETE, ran.said
    else:
        assert ran.experiment.phase is Phase.ABORTED, ran.said
        assert ran.experiment.trip is not None
        assert ran.experiment.trip.code == "OPERATOR_ABORT"
        assert [(line.text, line.by) for line in ran.runner.log.story if line.kind == "operator"] == [
            ("abort", "R. Lind")
        ]
    if stage in (Stage.WAITING, Stage.LOOKING):
        assert ran.writes == []
    assert_ended_as_found(ran)


@LOOPS
@pytest.mark.parametrize("stage", [Stage.LOOKING, *TOUCHED])
def test_finishing_before_there_is_enough_ends_early_with_the_loop_as_found(loop: LoopConfig, stage: Stage) -> None:
    ran = begin(loop)
    run(ran, on_pass=when_in(ran, stage, lambda: ran.runner.finish("R. Lind")))
    assert ran.experiment.phase is Phase.ABORTED, ran.said
    assert ran.experiment.end is EndKind.ENDED_EARLY
    assert_ended_as_found(ran)


@LOOPS
def test_finishing_once_there_is_enough_keeps_what_was_measured(loop: LoopConfig) -> None:
    picky = replace(loop, convergence=replace(loop.convergence, cycles_to_agree=15, agreement_pct=0.01))
    ran = begin(picky)

    def on_pass(_number: int) -> None:
        if ran.experiment.cycles.has_enough_for_findings and ran.experiment.phase is Phase.TESTING:
            ran.runner.finish("R. Lind")

    run(ran, on_pass=on_pass)
    assert ran.experiment.phase is Phase.COMPLETE, ran.said
    assert ran.experiment.because == "finished by R. Lind"
    assert record(ran.experiment) is not None
    assert_ended_as_found(ran)


@LOOPS
@pytest.mark.parametrize("stage", [Stage.LOOKING, *TOUCHED])
def test_smaller_steps_in_any_stage_are_smaller_from_the_next_switch_on(loop: LoopConfig, stage: Stage) -> None:
    ran = begin(loop)
    run(ran, on_pass=when_in(ran, stage, lambda: ran.runner.smaller_steps("R. Lind")))
    assert ran.experiment.phase is Phase.COMPLETE, ran.said
    as_found = ran.experiment.as_found
    assert as_found is not None
    planned, smaller = loop.relay.step_up_pct, SMALLER_RATIO * loop.relay.step_up_pct
    ups = [op - as_found.op_pct for op in outputs_pct(ran) if op > as_found.op_pct + 0.1]
    assert ups[-1] == pytest.approx(smaller, abs=1e-3)
    has_moved = stage in (Stage.FIRST_MOVE, Stage.CYCLING)
    assert max(ups) == pytest.approx(planned if has_moved else smaller, abs=1e-3)
    assert_ended_as_found(ran)


def first_view_s(ran: Ran, happened_s: float) -> float:
    """When the first reading was complete that can show what happened."""
    sent_s = (request.t_s for request in ran.link.requests("read"))
    return next(t_s + ran.plant.latency_s for t_s in sent_s if t_s + ran.plant.latency_s > happened_s)


def _to_man_at(op_pct: float) -> Callable[[PlantInMemory], None]:
    def act(plant: PlantInMemory) -> None:
        plant.loop.block.mode = Mode.MAN
        plant.loop.block.hold(op_pct)

    return act


def _to_auto(plant: PlantInMemory) -> None:
    plant.loop.block.mode = Mode.AUTO


def _new_setpoint(plant: PlantInMemory) -> None:
    plant.loop.block.sp_pct = 51.0


@LOOPS
@pytest.mark.parametrize("stage", [Stage.HOLDING, Stage.FIRST_MOVE, Stage.CYCLING])
@pytest.mark.parametrize("person", [_to_man_at(60.0), _to_auto, _new_setpoint], ids=["output", "mode", "setpoint"])
def test_a_loop_that_a_person_takes_is_theirs_and_nothing_more_is_written(
    loop: LoopConfig, stage: Stage, person: Callable[[PlantInMemory], None]
) -> None:
    ran = begin(loop)
    taken_s: list[float] = []

    def take() -> None:
        taken_s.append(asyncio.get_event_loop().time())
        person(ran.plant)

    run(ran, on_pass=when_in(ran, stage, take, passes=14))  # no move of ours is under way then
    assert ran.experiment.phase is Phase.RELEASED, ran.said
    seen_s = first_view_s(ran, taken_s[0])
    for request in ran.writes:
        if request.t_s > seen_s:
            assert request.values == (("holder_request", 0),)
    if loop.has_guard:
        assert (ran.plant.loop.guard.holder, ran.plant.loop.mailbox.holder_request) == (0, 0)
    left = PlantInMemory()
    left.loop.block.mode = Mode.MAN
    person(left)
    assert ran.plant.mode is left.mode
    assert ran.plant.loop.block.sp_pct == left.loop.block.sp_pct
    assert_s1_on_the_wire(ran)
    assert_journal_replays(ran)


@LOOPS
@pytest.mark.parametrize("stage", [Stage.SETTLING, Stage.HOLDING, Stage.FIRST_MOVE, Stage.CYCLING, Stage.GIVING_BACK])
def test_a_cable_pulled_for_good_strands_loudly_with_the_numbers_to_enter_by_hand(
    loop: LoopConfig, stage: Stage
) -> None:
    ran = begin(loop)
    run(ran, on_pass=when_in(ran, stage, lambda: setattr(ran.link, "is_reachable", False), passes=1))
    assert ran.experiment.phase is Phase.STRANDED, ran.said
    assert ran.experiment.hand_back is not None
    assert "as found: output 45.0" in ran.experiment.hand_back.detail
    assert "mode AUTO" in ran.experiment.hand_back.detail
    assert ran.plant.mode is (LoopMode.AUTO if loop.has_guard else LoopMode.MAN)  # the guard gives back by itself
    assert_s1_on_the_wire(ran)
    assert_journal_replays(ran)


@LOOPS
@pytest.mark.parametrize("stage", [Stage.HOLDING, Stage.FIRST_MOVE, Stage.CYCLING])
def test_after_a_restart_of_the_plc_nothing_is_written(loop: LoopConfig, stage: Stage) -> None:
    ran = begin(loop)
    restarted_s: list[float] = []

    def restart() -> None:
        restarted_s.append(asyncio.get_event_loop().time())
        ran.plant.plc.restart()

    run(ran, on_pass=when_in(ran, stage, restart))
    assert ran.experiment.phase is Phase.STRANDED, ran.said
    assert ran.experiment.trip is not None
    assert ran.experiment.trip.code == "PLC_RESTARTED"
    seen_s = first_view_s(ran, restarted_s[0])
    assert [request for request in ran.writes if request.t_s > seen_s] == []


def _slow(loop: LoopConfig) -> LoopConfig:
    endpoint = replace(loop.controller.endpoint, request_timeout_s=2.0)
    limits = replace(loop.limits, safe_without_view_s=5.0)
    return replace(loop, controller=replace(loop.controller, endpoint=endpoint), limits=limits)


@pytest.mark.parametrize(("delay_s", "missed"), [(0.0, []), (0.25, [1]), (0.45, [3]), (1.05, [9])])
def test_ticks_that_a_slow_reading_covers_are_skipped_counted_and_too_many_of_them_trip(
    delay_s: float, missed: Sequence[int]
) -> None:
    ran = begin(_slow(WITHOUT_GUARD))
    ran.link.read_faults[30] = Fault(FaultKind.LATE, delay_s=delay_s)
    run(ran)
    told = [line.payload.count for line in ran.lines if isinstance(line.payload, TicksMissed)]
    assert told == missed
    if missed and missed[0] > ran.plan.limits.missed_ticks_at_most:
        assert ran.experiment.trip is not None
        assert ran.experiment.trip.code in ("TICKS_MISSED", "SAMPLE_STALE")
    assert_ended_as_found(ran)


class FullDisk(MemoryJournal):
    """A journal that can't be written from its line ``first`` on, or for that line only."""

    def __init__(self, first: int, *, only: bool = False) -> None:
        super().__init__()
        self.tried = 0
        self._first = first
        self._only = only

    def record(self, kind: LineKind, payload: object, *, t_s: float, durable: bool = False) -> None:
        self.tried += 1
        if self.tried == self._first or (self.tried > self._first and not self._only):
            raise JournalError("the disk is full; free some space")
        super().record(kind, payload, t_s=t_s, durable=durable)


@LOOPS
@pytest.mark.parametrize("only", [False, True], ids=["from there on", "that line only"])
def test_a_journal_that_fails_at_any_line_never_leaves_a_touched_loop(loop: LoopConfig, only: bool) -> None:
    quick = replace(loop, convergence=replace(loop.convergence, cycles_to_discard=0, agreement_pct=50.0))
    loop = replace(quick, look_around_s=0.2, baseline_s=0.7)
    kinds = [line.kind for line in run(begin(loop)).lines]
    first_command, count = kinds.index("command") + 1, len(kinds)
    for first in (
        *range(1, first_command + 8),
        *range(first_command + 8, count - 16, 4),
        *range(count - 16, count + 1),
    ):
        ran = run(begin(loop, journal=FullDisk(first, only=only)), expects=JournalError)
        assert_as_found(ran)
        assert_s1_on_the_wire(ran)
        if first <= first_command:
            assert ran.writes == [], f"line {first}"
        if ran.raised is None:
            assert ran.experiment.phase in (Phase.COMPLETE, Phase.ABORTED), ran.said
            assert ran.runner.faults
        else:
            assert ran.writes == [], f"line {first}"


def test_a_journal_that_fails_in_the_middle_is_told_as_the_reason_of_the_end() -> None:
    ran = run(begin(WITH_GUARD, journal=FullDisk(120)))
    assert ran.experiment.phase is Phase.ABORTED
    assert ran.experiment.trip is not None
    assert "the disk is full" in ran.experiment.trip.text


class HostileLink(FakeLink):
    """Raises what no link may raise, at its ``at``-th reading or from there on."""

    def __init__(self, loop: LoopConfig, at: int, fault: Exception, *, for_good: bool) -> None:
        super().__init__(loop)
        self._at, self._fault, self._for_good = at, fault, for_good
        self._readings = 0

    async def read(self, names: Sequence[str]) -> ReadReport:
        self._readings += 1
        if self._readings == self._at or (self._for_good and self._readings > self._at):
            raise self._fault
        return await super().read(names)


def _with_hostile_link(loop: LoopConfig, at: int, fault: Exception, *, for_good: bool) -> Ran:
    plant = PlantInMemory()
    honest = plant.open_link(loop)
    hostile = HostileLink(loop, at, fault, for_good=for_good)
    hostile.latency_s, hostile.image = honest.latency_s, honest.image
    hostile.on_read, hostile.on_write = honest.on_read, honest.on_write
    return begin(loop, plant, link=hostile)


@LOOPS
@pytest.mark.parametrize("fault", [IllegalEvent("a stamp went backwards"), ZeroDivisionError("a slip of ours")])
def test_our_own_fault_in_the_middle_goes_through_the_last_resort_hand_back(loop: LoopConfig, fault: Exception) -> None:
    ran = _with_hostile_link(loop, 30, fault, for_good=False)
    run(ran, expects=type(fault))
    assert ran.raised is fault
    assert_as_found(ran)
    assert_s1_on_the_wire(ran)
    assert [line.split(":")[0] for line in ran.runner.faults] == [type(fault).__name__, "last-resort hand-back"]
    (end,) = [line.payload for line in ran.lines if line.kind == "end"]
    assert str(end).startswith("TESTING; last-resort hand-back: restored")


def test_our_own_fault_before_anything_was_written_writes_nothing() -> None:
    ran = _with_hostile_link(WITHOUT_GUARD, 2, IllegalEvent("a stamp went backwards"), for_good=False)
    run(ran, expects=IllegalEvent)
    assert ran.writes == []
    assert ran.runner.faults == ["IllegalEvent: a stamp went backwards"]


def test_our_own_fault_for_good_is_told_with_the_numbers_to_enter_by_hand() -> None:
    ran = _with_hostile_link(WITHOUT_GUARD, 30, ZeroDivisionError("a slip of ours"), for_good=True)
    run(ran, expects=ZeroDivisionError)
    assert "not confirmed; ZeroDivisionError: a slip of ours; as found: output 45.0" in ran.runner.faults[-1]


def test_a_wish_that_comes_twice_is_heard_once() -> None:
    ran = begin(WITHOUT_GUARD)

    def on_pass(_number: int) -> None:
        if ran.experiment.stage is Stage.CYCLING:
            ran.runner.abort("R. Lind")

    run(ran, on_pass=on_pass)
    heard = [line.payload for line in ran.lines if isinstance(line.payload, AbortAsked)]
    assert len(heard) == 1
    assert ran.experiment.phase is Phase.ABORTED


def test_other_things_may_happen_at_the_plant_meanwhile() -> None:
    ran = begin(WITH_GUARD)
    at(ran.plant, 4.0, lambda: setattr(ran.plant.loop, "is_stop_pressed", True))
    run(ran)
    assert ran.experiment.phase is Phase.ABORTED, ran.said
    assert ran.experiment.trip is not None
    assert ran.experiment.trip.code == "STOP_PRESSED"
    assert ran.plant.mode is LoopMode.AUTO


@LOOPS
def test_a_deadline_between_two_scans_is_kept_and_told_as_time_that_passed(loop: LoopConfig) -> None:
    ran = begin(replace(loop, limits=replace(loop.limits, test_within_s=2.537)))
    run(ran)
    assert ran.experiment.trip is not None
    assert ran.experiment.trip.code == "TEST_TOO_LONG"
    (passed,) = [line.payload for line in ran.lines if isinstance(line.payload, TimePassed)]
    assert ran.experiment.touched_s is not None
    assert passed.t_s == pytest.approx(ran.experiment.touched_s + 2.537, abs=1e-6)
    assert passed.t_s >= ran.experiment.touched_s + 2.537
    assert_ended_as_found(ran)
