"""Our own process is killed, signalled or paused in the middle of a test: what becomes of the loop, and who says so."""

import signal
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import pytest

from tests.system.bench import WITHOUT_GUARD, Change, write_bench
from tests.system.command import Ran, Running, run, start
from tests.system.plant import LOOP, SoftPlant, State, moved, soft_plant
from tests.system.together import Outcomes, Scenario, Together

pytestmark = pytest.mark.socket

YES = f"{LOOP}\nbench permit 2\n"
TOO_OLD: Change = ("recover_within_s = 60.0", "recover_within_s = 0.001")


@dataclass(frozen=True, slots=True)
class Story:
    """The panel before, when the process was struck and at the end; the struck command and those that came after."""

    found: State
    struck: State
    left: State
    ran: Ran
    later: Sequence[Ran] = ()


async def driven(plant: SoftPlant, file: Path) -> tuple[State, State, Running]:
    """A test at work, right after its output has moved twice."""
    await plant.press(f"enable {LOOP}")
    found = await plant.until(lambda state: state["enable"])
    running = await start("test", file, LOOP, "--json", typed=YES)
    struck = await plant.until(lambda state: state["mode"] == "MAN" and abs(state["op"] - found["op"]) > 5.0)
    return found, struck, running


async def signalled(folder: Path, number: signal.Signals) -> Story:
    async with soft_plant() as plant:
        found, struck, running = await driven(plant, write_bench(folder, plant.port))
        running.send(number)
        ran = await running.ended()
        return Story(found, struck, await plant.state(), ran)


async def killed_with_a_guard(folder: Path) -> Story:
    async with soft_plant() as plant:
        file = write_bench(folder, plant.port)
        found, struck, running = await driven(plant, file)
        running.send(signal.SIGKILL)
        ran = await running.ended()
        await plant.until(lambda state: state["guard_state"] == "gave back")
        later = [await run("restore", file, LOOP, "--json")]
        return Story(found, struck, await plant.state(), ran, later)


async def killed_without_a_guard(folder: Path) -> Story:
    async with soft_plant() as plant:
        file = write_bench(folder, plant.port, WITHOUT_GUARD)
        found, struck, running = await driven(plant, file)
        running.send(signal.SIGKILL)
        ran = await running.ended()
        struck = await plant.scan_on(5)
        later = [await run("test", file, LOOP, typed="\n")]
        return Story(found, struck, await plant.state(), ran, later)


async def killed_too_long_ago(folder: Path) -> Story:
    async with soft_plant() as plant:
        file = write_bench(folder, plant.port, (*WITHOUT_GUARD, TOO_OLD))
        found, _, running = await driven(plant, file)
        running.send(signal.SIGKILL)
        ran = await running.ended()
        struck = await plant.scan_on(5)
        later = [await run("test", file, LOOP, typed=YES)]
        left = await plant.state()
        await plant.press(f"op {LOOP} {found['op']}")
        await plant.press(f"mode {LOOP} AUTO")
        later.append(await run("restore", file, LOOP))
        return Story(found, struck, left, ran, later)


async def killed_and_taken(folder: Path) -> Story:
    async with soft_plant() as plant:
        file = write_bench(folder, plant.port, WITHOUT_GUARD)
        found, _, running = await driven(plant, file)
        running.send(signal.SIGKILL)
        ran = await running.ended()
        await plant.press(f"op {LOOP} 33")
        struck = await plant.state()
        later = [await run("restore", file, LOOP)]
        return Story(found, struck, await plant.state(), ran, later)


async def paused(folder: Path) -> Story:
    async with soft_plant() as plant:
        found, struck, running = await driven(plant, write_bench(folder, plant.port))
        running.send(signal.SIGSTOP)
        await plant.until(lambda state: state["guard_state"] == "gave back")
        running.send(signal.SIGCONT)
        ran = await running.ended()
        return Story(found, struck, await plant.scan_on(5), ran)


SCENARIOS: dict[str, Scenario[Story]] = {
    "killed too long ago": killed_too_long_ago,
    "killed with a guard": killed_with_a_guard,
    "killed without a guard": killed_without_a_guard,
    "killed and taken": killed_and_taken,
    "paused": paused,
    "SIGTERM": lambda folder: signalled(folder, signal.SIGTERM),
    "SIGINT": lambda folder: signalled(folder, signal.SIGINT),
}


@pytest.fixture(scope="module")
def stories(together: Together) -> Outcomes[Story]:
    return together.of(Path(__file__).stem, SCENARIOS)


def is_as_found(story: Story) -> bool:
    same = all(story.found[name] == story.left[name] for name in ("mode", "sp", "gain", "integral", "derivative"))
    return same and abs(story.left["op"] - story.found["op"]) < 15.0


@pytest.mark.parametrize("name", ["SIGTERM", "SIGINT"])
def test_a_signal_to_end_hands_the_loop_back_first(stories: Outcomes[Story], name: str) -> None:
    story = stories.of(name)
    assert story.ran.code == 1
    assert (story.ran.answer["outcome"], story.ran.answer["code"]) == ("ABORTED", "OPERATOR_ABORT")
    assert f"a person ended the test: {name}" in story.ran.answer["text"]
    assert is_as_found(story)
    assert (story.left["guard_state"], story.left["holder_request"]) == ("idle", 0)


@pytest.mark.parametrize("name", ["killed with a guard"])
def test_after_a_kill_the_guard_gives_back_and_the_next_command_verifies_that(
    stories: Outcomes[Story], name: str
) -> None:
    story = stories.of(name)
    assert story.ran.code == -signal.SIGKILL
    (first,) = story.later
    assert first.code == 0
    assert "broke off. Reading TIC-1 before anything else" in first.err
    assert "TIC-1: guard gave back; as found" in first.err
    assert first.answer["outcome"] == "NOTHING_TO_WRITE"
    assert is_as_found(story)
    assert story.left["op_effect_count"] == story.struck["op_effect_count"]


@pytest.mark.parametrize("name", ["killed without a guard"])
def test_after_a_kill_without_a_guard_the_next_command_hands_back(stories: Outcomes[Story], name: str) -> None:
    story = stories.of(name)
    assert story.struck["mode"] == "MAN"
    (tested,) = story.later
    assert "TIC-1: restored; as found" in tested.out
    assert "No permission: nothing was written" in tested.out
    assert tested.code == 1
    assert is_as_found(story)


@pytest.mark.parametrize("name", ["killed too long ago"])
def test_what_broke_off_too_long_ago_is_stranded_with_as_found_beside_present(
    stories: Outcomes[Story], name: str
) -> None:
    story = stories.of(name)
    tested, after = story.later
    assert tested.code == 4
    assert "longer ago than recover_within_s" in tested.out
    assert f"present: output {story.struck['op']:.2f} %, setpoint 50.00 %, mode MAN" in tested.out
    assert f"as found: output {story.found['op']:.1f}" in tested.out
    assert "STRANDED. GO TO THE PANEL NOW" in tested.out
    assert moved(story.struck, story.left) == {}
    assert story.left["op"] == story.struck["op"]
    assert after.code == 0
    assert "TIC-1: restored; " in after.out


@pytest.mark.parametrize("name", ["killed and taken"])
def test_a_loop_that_somebody_took_after_the_kill_is_left_to_them(stories: Outcomes[Story], name: str) -> None:
    story = stories.of(name)
    (restored,) = story.later
    assert restored.code == 4
    assert "present: output 33.00 %" in restored.out
    assert moved(story.struck, story.left) == {}
    assert (story.left["op"], story.left["mode"]) == (33.0, "MAN")


@pytest.mark.parametrize("name", ["paused"])
def test_a_process_that_was_paused_reads_first_and_finds_the_loop_given_back(
    stories: Outcomes[Story], name: str
) -> None:
    story = stories.of(name)
    assert story.ran.code == 1
    assert story.ran.answer["outcome"] == "ABORTED"
    assert "guard gave back" in story.ran.answer["text"]
    assert is_as_found(story)
    assert story.left["op_effect_count"] == story.struck["op_effect_count"]
