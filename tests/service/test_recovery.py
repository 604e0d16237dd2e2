"""S5: after our own death, wherever it came, the next process reads first and gives back only what is surely ours."""

import asyncio
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field, replace
from functools import cache
from pathlib import Path

import pytest

from autotune.config.types import LoopConfig
from autotune.errors import JournalError
from autotune.loop.mode import LoopMode
from autotune.service.journal import LineKind, MemoryJournal, journal_file
from autotune.service.journal_intents import open_intents
from autotune.service.recovery import recover
from autotune.service.workplace import Workplace
from simulator.block import Mode
from tests.fakes.link import FakeLink, LoggedRequest
from tests.fakes.plant import WITH_GUARD, WITHOUT_GUARD, PlantInMemory
from tests.fakes.virtual_time import run_virtual
from tests.service.bench import begin, run, virtual_now, workplace_at

GUARD_WAITS_S, YOUNG_S, OLD_S = 0.3, 3.0, 60.0


def short(loop: LoopConfig) -> LoopConfig:
    convergence = replace(loop.convergence, cycles_to_discard=0, agreement_pct=50.0)
    return replace(loop, convergence=convergence, look_around_s=0.2, baseline_s=0.7)


GUARDED, BARE = short(WITH_GUARD), short(WITHOUT_GUARD)
LOOPS = pytest.mark.parametrize("loop", [GUARDED, BARE], ids=["with a guard", "without a guard"])


class LastLine(MemoryJournal):
    """A journal whose line ``last`` is the last thing that our process does: from there on nothing leaves it."""

    def __init__(self, last: int) -> None:
        super().__init__(virtual_now)
        self.link: FakeLink | None = None
        self.died = asyncio.Event()
        self._last = last

    def record(self, kind: LineKind, payload: object, *, t_s: float, durable: bool = False) -> None:
        if len(self.lines) >= self._last:
            raise JournalError("dead")
        super().record(kind, payload, t_s=t_s, durable=durable)
        if len(self.lines) == self._last and self.link is not None:
            self.link.is_reachable = False
            self.died.set()


@dataclass
class Life:
    """A test that died with line ``last`` of its journal, and what a later process made of it."""

    loop: LoopConfig
    folder: Path
    plant: PlantInMemory = field(default_factory=PlantInMemory)
    said: list[str] = field(default_factory=list)
    is_settled: bool | None = None

    @property
    def workplace(self) -> Workplace:
        return workplace_at(self.plant, self.folder, self.loop)

    @property
    def writes(self) -> list[LoggedRequest]:
        """What the later processes wrote but the release of our token."""
        return [
            request
            for link in self.plant.links[1:]
            for request in link.requests("write")
            if request.values != (("holder_request", 0),)
        ]

    @property
    def file(self) -> Path:
        return journal_file(self.folder, "20260302-TIC-204")


def die_then_recover(
    life: Life,
    last: int,
    *,
    after_s: float,
    meanwhile: Callable[[Life], None] = lambda _life: None,
    torn: str = "",
    recoveries: int = 1,
    between: Callable[[Life], None] = lambda _life: None,
) -> Life:
    """Die, let time pass and somebody act, and recover as often as asked.

    What the dying process still does makes no difference to the plant: nothing of it arrives.
    """
    journal = LastLine(last)
    ran = begin(life.loop, life.plant, journal=journal)
    journal.link = ran.link

    async def main() -> None:
        await asyncio.sleep(1.0)
        watched = asyncio.ensure_future(ran.runner.run())
        await journal.died.wait()
        life.file.parent.mkdir(parents=True, exist_ok=True)
        life.file.write_text("".join(f"{line}\n" for line in ran.journal.lines) + torn, encoding="utf-8")
        await asyncio.sleep(after_s)
        life.plant.run_to(asyncio.get_running_loop().time())
        meanwhile(life)
        for number in range(recoveries):
            if number:
                between(life)
            life.is_settled = await recover(life.workplace, life.loop, life.said.append)
        await asyncio.wait({watched})
        watched.exception()
        life.plant.run_to(asyncio.get_running_loop().time())

    run_virtual(main(), within_s=600.0)
    return life


@cache
def kinds_of(has_guard: bool) -> tuple[str, ...]:
    """The kinds of the lines of a whole test's journal."""
    return tuple(line.kind for line in run(begin(GUARDED if has_guard else BARE)).lines)


def cuts(loop: LoopConfig) -> Iterable[int]:
    """Every line up to the first move and from the hand-back on, and every eleventh in between."""
    kinds = kinds_of(loop.has_guard)
    back = max(index for index, kind in enumerate(kinds) if kind == "phase" and index < len(kinds) - 3) - 8
    begun = kinds.index("as_found") + 12
    return [*range(1, begun), *range(begun, back, 11), *range(back, len(kinds))]


def is_begun(loop: LoopConfig, last: int) -> bool:
    return "command" in kinds_of(loop.has_guard)[:last]


@LOOPS
def test_a_death_at_any_line_and_a_prompt_start_give_the_loop_back(loop: LoopConfig, tmp_path: Path) -> None:
    for last in cuts(loop):
        life = die_then_recover(Life(loop, tmp_path), last, after_s=YOUNG_S)
        assert life.is_settled, (last, life.said)
        assert life.plant.mode is LoopMode.AUTO, (last, life.said)
        if loop.has_guard:
            assert life.writes == [], (last, life.said)  # the guard gave back: verified only
            assert life.plant.loop.mailbox.holder_request == 0, (last, life.said)
        assert bool(life.said) == is_begun(loop, last), (last, life.said)
        assert open_intents(tmp_path) == ()


def test_a_start_before_the_guard_has_given_back_gives_back_itself(tmp_path: Path) -> None:
    for last in cuts(GUARDED):
        life = die_then_recover(Life(GUARDED, tmp_path), last, after_s=GUARD_WAITS_S)
        assert life.is_settled, (last, life.said)
        assert life.plant.mode is LoopMode.AUTO, (last, life.said)
        assert life.plant.loop.guard.holder == 0, (last, life.said)


def test_an_old_death_without_a_guard_writes_nothing_and_says_what_to_enter(tmp_path: Path) -> None:
    for last in cuts(BARE):
        life = die_then_recover(Life(BARE, tmp_path), last, after_s=OLD_S)
        assert life.writes == [], (last, life.said)
        if life.plant.mode is LoopMode.AUTO:
            assert life.is_settled, (last, life.said)
        else:
            assert life.is_settled is False, (last, life.said)
            assert "as found: output 45.0" in life.said[-1]
            assert "present: output" in life.said[-1]


def middle(loop: LoopConfig) -> int:
    """A line within the relay cycles."""
    return 2 * len(kinds_of(loop.has_guard)) // 3


def _to_auto(life: Life) -> None:
    life.plant.loop.block.mode = Mode.AUTO


def test_what_was_stranded_is_settled_once_a_person_has_put_it_right(tmp_path: Path) -> None:
    life = Life(BARE, tmp_path)
    die_then_recover(life, middle(BARE), after_s=OLD_S, recoveries=2, between=_to_auto)
    assert life.is_settled, life.said
    assert life.writes == []
    assert "nothing had to be written" in life.said[-1]


def test_looking_again_makes_an_old_death_no_younger(tmp_path: Path) -> None:
    life = Life(BARE, tmp_path)
    die_then_recover(life, middle(BARE), after_s=OLD_S, recoveries=3)
    assert life.is_settled is False
    assert life.writes == []


@LOOPS
@pytest.mark.parametrize("after_s", [YOUNG_S, OLD_S])
def test_an_output_that_a_person_moved_is_left_alone(loop: LoopConfig, after_s: float, tmp_path: Path) -> None:
    def person(life: Life) -> None:
        life.plant.loop.block.mode = Mode.MAN
        life.plant.loop.block.hold(61.0)

    life = die_then_recover(Life(loop, tmp_path), middle(loop), after_s=after_s, meanwhile=person)
    assert life.is_settled is False
    assert life.writes == []
    assert (life.plant.mode, life.plant.op_pct) == (LoopMode.MAN, 61.0)
    assert "as found: output 45.0" in life.said[-1]


def test_a_loop_in_another_mode_than_ours_is_left_alone_and_settled(tmp_path: Path) -> None:
    def person(life: Life) -> None:
        life.plant.loop.block.mode = Mode.CAS

    life = die_then_recover(Life(BARE, tmp_path), middle(BARE), after_s=YOUNG_S, meanwhile=person)
    assert life.is_settled
    assert life.writes == []
    assert "taken" in life.said[-1]


@LOOPS
@pytest.mark.parametrize("after_s", [GUARD_WAITS_S, YOUNG_S])
def test_after_a_restart_of_the_plc_nothing_is_written(loop: LoopConfig, after_s: float, tmp_path: Path) -> None:
    life = die_then_recover(
        Life(loop, tmp_path), middle(loop), after_s=after_s, meanwhile=lambda life: life.plant.plc.restart()
    )
    assert life.writes == []
    assert life.is_settled is (life.plant.mode is LoopMode.AUTO), life.said


def test_a_plc_that_can_not_be_reached_is_looked_at_again_later(tmp_path: Path) -> None:
    life = Life(BARE, tmp_path)
    opened = life.plant.open_link
    is_cut = True

    def open_link(loop: LoopConfig) -> FakeLink:
        link = opened(loop)
        link.is_reachable = len(life.plant.links) == 1 or not is_cut
        return link

    life.plant.open_link = open_link  # type: ignore[method-assign]

    def mend(_life: Life) -> None:
        nonlocal is_cut
        is_cut = False

    die_then_recover(life, middle(BARE), after_s=YOUNG_S, recoveries=2, between=mend)
    assert "not confirmed; no answer" in life.said[1]
    assert life.is_settled, life.said
    assert life.plant.mode is LoopMode.AUTO


@LOOPS
@pytest.mark.parametrize("torn", ['{"n":9', "\x00\x00", '{"n": "x"}\n'])
def test_half_a_last_line_makes_no_difference(loop: LoopConfig, torn: str, tmp_path: Path) -> None:
    life = die_then_recover(Life(loop, tmp_path), middle(loop), after_s=YOUNG_S, torn=torn)
    assert life.is_settled, life.said
    assert life.plant.mode is LoopMode.AUTO


def test_a_journal_that_can_not_be_read_is_said_and_never_settled(tmp_path: Path) -> None:
    life = Life(BARE, tmp_path)
    die_then_recover(life, 12, after_s=YOUNG_S, torn='damage\n{"n":14,"utc":"","t_s":0,"kind":"note","payload":null}\n')
    assert life.is_settled is False
    assert "A journal can't be read" in life.said[0]


def test_another_loops_journal_is_none_of_ours(tmp_path: Path) -> None:
    life = Life(BARE, tmp_path)
    other = replace(BARE, name="FIC-101")

    def look_for_another(life: Life) -> None:
        life.loop = other

    die_then_recover(life, middle(BARE), after_s=YOUNG_S, meanwhile=look_for_another)
    assert (life.is_settled, life.said) == (True, [])


def test_a_journal_without_what_was_found_sends_a_person_to_the_panel(tmp_path: Path) -> None:
    life = Life(BARE, tmp_path)

    def lose_as_found(life: Life) -> None:
        lines = life.file.read_text("utf-8").splitlines()
        life.file.write_text("".join(f"{line}\n" for line in lines).replace('"kind":"as_found"', '"kind":"note"'))

    die_then_recover(life, middle(BARE), after_s=YOUNG_S, meanwhile=lose_as_found)
    assert life.is_settled is False
    assert "does not tell what was found" in life.said[0]
