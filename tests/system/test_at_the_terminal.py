"""The person at the terminal: permission, keys, Ctrl-C, and the digest that confirms exactly these numbers."""

import io
from collections.abc import Callable, Coroutine, Sequence
from dataclasses import dataclass
from pathlib import Path

import pytest

from autotune.cli import settings
from autotune.cli.exit_codes import ExitCode
from autotune.cli.operators import PersonAtTheTerminal
from autotune.cli.printing import Voice
from autotune.service.estimator import WorkerEstimator
from autotune.service.testing import SupervisedTest
from autotune.sheet import schema
from tests.system.bench import Change, bench_workplace, permission, write_bench
from tests.system.command import Terminal, run, terminal
from tests.system.plant import LOOP, SoftPlant, State, as_real, moved, soft_plant
from tests.system.together import Outcomes, Scenario, Together

pytestmark = pytest.mark.socket

SETTINGS = ("gain", "integral", "derivative")
RULE = "tyreus-luyben-pi"
DIGEST = r"Type ([0-9a-f]{4}-[0-9a-f]{4}) to accept"
LONG: Change = ("cycles_to_agree = 3", "cycles_to_agree = 12")


@dataclass(frozen=True, slots=True)
class Act:
    """One command: the panel before and after it, its exit code and all that it showed."""

    before: State
    after: State
    code: int
    shown: str
    digest: str | None = None


async def piped(plant: SoftPlant, *arguments: str | Path, typed: str = "") -> Act:
    """A command that a program feeds and listens to."""
    before = await plant.state()
    ran = await run(*arguments, typed=typed)
    return Act(before, await plant.state(), ran.code, ran.out + ran.err)


async def spoken(plant: SoftPlant, act: Callable[[Voice, PersonAtTheTerminal], Coroutine[None, None, ExitCode]]) -> Act:
    """The same act in this process, which is at no terminal either."""
    before, voice = await plant.state(), Voice()
    voice.console.file = io.StringIO()
    voice.console.width = 400
    code = await act(voice, PersonAtTheTerminal(voice))
    return Act(before, await plant.state(), code, voice.console.file.getvalue())


async def confirmed(plant: SoftPlant, *arguments: str | Path, typed: str | None = None, press: str = "") -> Act:
    """A change at a terminal: the digest shown is typed, or ``typed`` instead; ``press`` happens just before."""
    before = await plant.state()
    async with terminal(*arguments) as shown:
        digest = (await shown.says(DIGEST))[1]
        if press:
            await plant.press(press)
        shown.types(f"{typed or digest}\n")
        code = await shown.ended()
        return Act(before, await plant.state(), code, shown.seen, digest)


@dataclass(frozen=True, slots=True)
class Job:
    """One sheet, and what was tried with its proposal, in this order."""

    sheet: schema.Sheet
    piped_write: Act
    after_a_change_at_the_panel: Act
    wrong_digest: Act
    locked_register: Act
    right_digest: Act
    piped_restore: Act
    restored: Act
    addenda: Sequence[tuple[str, str]]

    @property
    def proposed(self) -> list[float | None]:
        proposal = next(one for one in self.sheet.proposals if one.name == RULE)
        return [quantity.amount for quantity in proposal.settings]


async def settings_changed(folder: Path) -> Job:
    async with soft_plant() as plant:
        workplace, loop = bench_workplace(folder, plant.port, estimator=WorkerEstimator())
        file = workplace.configuration.file
        await plant.press(f"enable {LOOP}")
        found = await plant.until(lambda state: state["enable"])
        async with SupervisedTest(workplace, loop) as supervised:
            await supervised.look(0.2)
            supervised.prepare(is_no_guard_accepted=False)
            sheet = (await supervised.run(permission())).sheet
        write = ("write", file, "last", "--proposal", RULE)
        piped_write = await piped(plant, *write, "--json", typed="0000-0000\n")
        await plant.press(f"settings {LOOP} gain=0.7")
        after_a_change = await spoken(
            plant, lambda voice, person: settings.write(voice, workplace, "last", RULE, person)
        )
        await plant.press(f"settings {LOOP} gain={found['gain']}")
        wrong = await confirmed(plant, *write, typed="0000-0000")
        locked = await confirmed(plant, *write, press="fault refuse-writes 42")
        await plant.press("clear-faults")
        right = await confirmed(plant, *write)
        piped_restore = await spoken(
            plant, lambda voice, person: settings.restore(voice, workplace, loop, None, person)
        )
        restored = await confirmed(plant, "restore", file, LOOP, "--person", "R. Bench")
        kept = workplace.store.get(sheet.sheet_id).addenda
        addenda = [(one.kind, one.result) for one in kept if isinstance(one, schema.Change)]
        return Job(sheet, piped_write, after_a_change, wrong, locked, right, piped_restore, restored, addenda)


async def keys(folder: Path) -> Act:
    """Smaller steps, then finish and keep."""
    async with soft_plant() as plant:
        file = write_bench(folder, plant.port, (LONG,))
        await plant.press(f"enable {LOOP}")
        before = await plant.until(lambda state: state["enable"])
        async with terminal("test", file, LOOP) as shown:
            await permits(shown)
            await plant.until(lambda state: state["op_effect_count"] >= 4)
            shown.types("s")
            await plant.until(lambda state: state["op_effect_count"] >= 14)
            shown.types("k")
            code = await shown.ended()
            return Act(before, await plant.scan_on(5), code, shown.seen)


async def control_c(folder: Path) -> Act:
    async with soft_plant() as plant:
        file = write_bench(folder, plant.port)
        await plant.press(f"enable {LOOP}")
        before = await plant.until(lambda state: state["enable"])
        async with terminal("test", file, LOOP) as shown:
            await permits(shown)
            await plant.until(lambda state: state["op_effect_count"] >= 3)
            shown.types("\x03")
            code = await shown.ended()
            return Act(before, await plant.scan_on(5), code, shown.seen)


async def control_c_at_the_question(folder: Path) -> Act:
    async with soft_plant() as plant:
        file = write_bench(folder, plant.port)
        await plant.press(f"enable {LOOP}")
        before = await plant.until(lambda state: state["enable"])
        async with terminal("test", file, LOOP) as shown:
            await shown.says("Type the loop's tag name")
            shown.types("\x03")
            code = await shown.ended()
            return Act(before, await plant.state(), code, shown.seen)


async def permits(shown: Terminal) -> None:
    """Type the loop's name and the permit, as asked."""
    await shown.says("Type the loop's tag name")
    shown.types(f"{LOOP}\n")
    await shown.says("Permission: ")
    shown.types("bench permit 3\n")


SCENARIOS: dict[str, Scenario[Act | Job]] = {
    "settings": settings_changed,
    "smaller steps and finish": keys,
    "Ctrl-C in the middle": control_c,
    "Ctrl-C at the question": control_c_at_the_question,
}


@pytest.fixture(scope="module")
def outcomes(together: Together) -> Outcomes[Act | Job]:
    return together.of(Path(__file__).stem, SCENARIOS)


@pytest.fixture
def job(outcomes: Outcomes[Act | Job]) -> Job:
    job = outcomes.of("settings")
    assert isinstance(job, Job)
    return job


@pytest.fixture
def act(outcomes: Outcomes[Act | Job], name: str) -> Act:
    act = outcomes.of(name)
    assert isinstance(act, Act)
    return act


def held(state: State) -> list[float]:
    return [as_real(state[name]) for name in SETTINGS]


class TestSettings:
    """One after the other on one plant: what doesn't confirm changes nothing, what does can be put back."""

    def test_no_program_confirms(self, job: Job) -> None:
        act = job.piped_write
        assert act.code == 1
        assert "NOT_AT_A_TERMINAL" in act.shown
        assert moved(act.before, act.after) == {}

    def test_no_digest_is_shown_to_a_program(self, job: Job) -> None:
        assert job.right_digest.digest is not None
        assert job.right_digest.digest not in job.piped_write.shown
        assert "Type " not in job.piped_write.shown

    def test_settings_that_somebody_changed_since_are_not_overwritten(self, job: Job) -> None:
        act = job.after_a_change_at_the_panel
        assert act.code == 1
        assert "SETTINGS_CHANGED: the controller holds gain 0.7" in act.shown
        assert moved(act.before, act.after) == {}

    def test_another_digest_changes_nothing(self, job: Job) -> None:
        act = job.wrong_digest
        assert act.code == 1
        assert "DIGEST_WRONG" in act.shown
        assert moved(act.before, act.after) == {}

    def test_what_a_locked_register_stops_half_way_is_put_back(self, job: Job) -> None:
        act = job.locked_register
        assert act.code == 1
        assert "PUT_BACK. The settings as found are back in the controller" in act.shown
        assert held(act.before) == held(act.after)
        assert act.after["mode"] == "AUTO"

    def test_the_digest_shown_writes_exactly_these_numbers(self, job: Job) -> None:
        act = job.right_digest
        assert act.code == 0
        assert "WRITTEN. The controller holds the confirmed values" in act.shown
        assert held(act.after) == pytest.approx(job.proposed, rel=1e-6)
        assert held(act.after) != held(act.before)
        assert (act.after["mode"], act.after["sp"]) == (act.before["mode"], act.before["sp"])

    def test_no_program_restores(self, job: Job) -> None:
        act = job.piped_restore
        assert act.code == 1
        assert "NOT_AT_A_TERMINAL" in act.shown
        assert moved(act.before, act.after) == {}

    def test_restoring_brings_the_settings_as_found_back(self, job: Job) -> None:
        act = job.restored
        assert act.code == 0
        assert held(act.after) == held(job.piped_write.before)
        assert act.after["mode"] == "AUTO"

    def test_only_what_was_confirmed_is_kept_with_the_sheet(self, job: Job) -> None:
        assert job.addenda == [("write", "PUT_BACK"), ("write", "WRITTEN"), ("restore", "WRITTEN")]


@pytest.mark.parametrize("name", ["smaller steps and finish"])
def test_the_steps_can_be_made_smaller_and_the_test_finished_with_what_was_measured(act: Act) -> None:
    assert act.code == 0
    assert "finished by key at the terminal" in act.shown
    assert "ultimate gain" in act.shown
    assert act.after["mode"] == "AUTO"
    assert act.after["op_request"] == pytest.approx(45.0, abs=0.5)


@pytest.mark.parametrize("name", ["Ctrl-C in the middle"])
def test_control_c_in_the_middle_hands_the_loop_back(act: Act) -> None:
    assert act.code == 1
    assert "ABORTED. Stopped by OPERATOR_ABORT: a person ended the test: SIGINT" in act.shown
    assert "Traceback" not in act.shown
    assert (act.after["mode"], act.after["sp"], act.after["guard_state"]) == ("AUTO", 50.0, "idle")


@pytest.mark.parametrize("name", ["Ctrl-C at the question"])
def test_without_permission_nothing_is_written(act: Act) -> None:
    assert act.code == 1
    assert "No permission: nothing was written" in act.shown
    assert "Traceback" not in act.shown
    assert moved(act.before, act.after) == {}
