"""Whatever one request or one cancellation meets, at whichever await of a whole test: the loop is as found (S3, S8)."""

import asyncio
from collections.abc import Callable, Mapping
from dataclasses import replace
from functools import cache
from types import MappingProxyType

import pytest

from autotune.config.types import LoopConfig
from autotune.experiment.phases import Phase
from autotune.loop.mode import LoopMode
from tests.fakes.link import Fault, FaultKind
from tests.fakes.plant import WITH_GUARD, WITHOUT_GUARD
from tests.service.bench import (
    Ran,
    assert_as_found,
    assert_journal_replays,
    assert_s1_on_the_wire,
    begin,
    run,
)


def _short(loop: LoopConfig) -> LoopConfig:
    """A test that goes through every phase and stage with few scans."""
    convergence = replace(loop.convergence, cycles_to_discard=0, agreement_pct=50.0)
    return replace(loop, convergence=convergence, look_around_s=0.2, baseline_s=0.7)


LOOPS: Mapping[str, LoopConfig] = MappingProxyType(
    {"with a guard": _short(WITH_GUARD), "without a guard": _short(WITHOUT_GUARD)}
)

READ_FAULTS = {
    "silent": Fault(FaultKind.SILENT),
    "closed": Fault(FaultKind.CLOSED),
    "refused": Fault(FaultKind.REFUSED),
    "late": Fault(FaultKind.LATE, delay_s=0.03),
    "too late": Fault(FaultKind.LATE, delay_s=0.2),
}
WRITE_FAULTS = {
    "refused": Fault(FaultKind.REFUSED),
    "not heard but applied": Fault(FaultKind.SILENT),
    "not heard and not applied": Fault(FaultKind.SILENT, lands=False),
    "closed after it was applied": Fault(FaultKind.CLOSED),
    "closed before it was applied": Fault(FaultKind.CLOSED, lands=False),
    "late": Fault(FaultKind.LATE, delay_s=0.03),
}
CONNECT_FAULTS = {
    "silent": Fault(FaultKind.SILENT),
    "closed": Fault(FaultKind.CLOSED),
    "refused": Fault(FaultKind.REFUSED),
    "late": Fault(FaultKind.LATE, delay_s=0.03),
}


@cache
def _clean(which: str) -> tuple[int, int, int]:
    """How many reads, writes and passes of the event loop a whole test takes when nothing goes wrong."""
    passes = 0

    def count(number: int) -> None:
        nonlocal passes
        passes = number

    ran = run(begin(LOOPS[which]), on_pass=count)
    assert ran.experiment.phase is Phase.COMPLETE, ran.said
    return len(ran.link.requests("read")), len(ran.writes), passes


def _assert_settled(ran: Ran, *, replays: bool = True) -> None:
    assert ran.experiment.phase in (Phase.COMPLETE, Phase.ABORTED), ran.said
    assert_as_found(ran)
    assert_s1_on_the_wire(ran)
    if replays:
        assert_journal_replays(ran)


def _points(count: int, fault: str) -> range:
    """Every request; what is much like another fault tries every third."""
    return range(1, count + 1, 3 if fault.startswith(("late", "too late", "closed")) else 1)


@pytest.mark.parametrize("which", LOOPS)
@pytest.mark.parametrize("fault", READ_FAULTS)
def test_a_reading_that_fails_anywhere_leaves_the_loop_as_found(which: str, fault: str) -> None:
    reads, _, _ = _clean(which)
    for number in _points(reads, fault):
        ran = begin(LOOPS[which])
        ran.link.read_faults[number] = READ_FAULTS[fault]
        _assert_settled(run(ran), replays=number % 4 == 0)


@pytest.mark.parametrize("which", LOOPS)
@pytest.mark.parametrize("fault", WRITE_FAULTS)
def test_a_write_that_fails_anywhere_leaves_the_loop_as_found(which: str, fault: str) -> None:
    _, writes, _ = _clean(which)
    for number in _points(writes, fault):
        ran = begin(LOOPS[which])
        ran.link.write_faults[number] = WRITE_FAULTS[fault]
        _assert_settled(run(ran), replays=number % 4 == 0)


def test_with_a_guard_a_write_that_comes_much_too_late_moves_nothing() -> None:
    """A claim that comes after our release arms the guard once more, which then gives back what it never moved."""
    _, writes, _ = _clean("with a guard")
    for number in range(1, writes + 1):
        ran = begin(LOOPS["with a guard"])
        ran.link.write_faults[number] = Fault(FaultKind.LATE, delay_s=0.4)
        run(ran)
        names = ran.writes[number - 1].names
        if "op_request" in names:
            _assert_settled(ran, replays=number % 4 == 0)
        elif "mode" not in names:  # a mode goes to the block itself: what is late there can't be caught
            assert ran.plant.mode is LoopMode.AUTO, ran.said


@pytest.mark.parametrize("which", LOOPS)
@pytest.mark.parametrize("fault", CONNECT_FAULTS)
def test_a_connection_that_fails_at_first_is_opened_again(which: str, fault: str) -> None:
    ran = begin(LOOPS[which])
    ran.link.connect_faults[1] = CONNECT_FAULTS[fault]
    run(ran)
    _assert_settled(ran)
    assert ran.experiment.phase is Phase.COMPLETE


@pytest.mark.parametrize("which", LOOPS)
@pytest.mark.parametrize("fault", CONNECT_FAULTS)
def test_a_connection_that_can_not_be_opened_again_at_once_leaves_the_loop_as_found(which: str, fault: str) -> None:
    reads, _, _ = _clean(which)
    for number in range(2, reads + 1, 7):
        ran = begin(LOOPS[which])
        ran.link.read_faults[number] = Fault(FaultKind.CLOSED)
        ran.link.connect_faults[2] = CONNECT_FAULTS[fault]
        _assert_settled(run(ran))


def _cancelling(ran: Ran, first: int, times: int, *, whom: Callable[[], set["asyncio.Task[object]"]]) -> None:
    def on_pass(number: int) -> None:
        if number in range(first, first + times):
            for task in whom():
                task.cancel()

    run(ran, on_pass=on_pass, expects=asyncio.CancelledError)


@pytest.mark.parametrize("which", LOOPS)
def test_a_cancellation_of_the_caller_is_heard_as_abort_and_raised_after_the_hand_back(which: str) -> None:
    _, _, passes = _clean(which)
    for first in range(3, passes, 7):
        ran = begin(LOOPS[which])
        _cancelling(ran, first, 1 + first % 3, whom=lambda ran=ran: {ran.task} if ran.task else set())  # type: ignore[misc]
        if ran.experiment.phase is not Phase.IDLE:  # cancelled before its first step, a task never runs
            _assert_settled(ran, replays=first % 3 == 0)


def _all_but_the_test_itself() -> set["asyncio.Task[object]"]:
    return {task for task in asyncio.all_tasks(asyncio.get_event_loop()) if "main" not in str(task.get_coro())}


@pytest.mark.parametrize("which", LOOPS)
def test_cancelling_every_task_once_twice_or_thrice_at_any_await_leaves_the_loop_as_found(which: str) -> None:
    """As the end of ``asyncio.run`` does it; the hand-back is deaf to it too."""
    _, _, passes = _clean(which)
    for first in range(3, passes, 2):
        ran = begin(LOOPS[which])
        _cancelling(ran, first, 1 + first % 3, whom=_all_but_the_test_itself)
        assert_as_found(ran)
        assert_s1_on_the_wire(ran)
