"""What happens to a loop when something happens in the middle of its test: the plant's panel is the witness."""

import asyncio
from collections.abc import Awaitable, Callable
from dataclasses import dataclass
from pathlib import Path

import pytest

from autotune.experiment.commands import DriveOutput
from autotune.experiment.events import HandBackResult
from autotune.experiment.phases import Phase
from autotune.experiment.state import Stage
from autotune.service.journal_intents import open_intents
from autotune.service.runner import TestRunner
from autotune.service.testing import SupervisedTest, TestEnd
from tests.system.bench import Change, bench_workplace, permission, rig_with
from tests.system.plant import LOOP, PATIENCE_S, SoftPlant, State, moved, soft_plant
from tests.system.together import Outcomes, Scenario, Together

pytestmark = pytest.mark.socket

QUICK: tuple[Change, ...] = (
    ("look_around_s = 0.6", "look_around_s = 0.3"),
    ("hold_s = 1.2", "hold_s = 0.8"),
    ("request_timeout_s = 0.5", "request_timeout_s = 0.9"),
    ("timeout_s = 1.0", "timeout_s = 2.0"),
)
SCANS: tuple[Change, ...] = (("scan_s = 0.05\nwrite", "scan_s = 0.1\nwrite"),)
UNHURRIED: tuple[Change, ...] = (("scan_s = 0.05\nwrite", "scan_s = 0.2\nwrite"),)
"""Scans with time between two steps of a hand-back."""
PATIENT_GUARD: tuple[Change, ...] = (("timeout_s = 1.0", "timeout_s = 2.0"),)
SCANS_AFTER = 20


@dataclass(frozen=True, slots=True)
class Story:
    """One test that something happened to: the panel before, right after the strike, and well after the end."""

    end: TestEnd
    found: State
    struck: State | None
    left: State | None
    open_intents: int

    @property
    def phase(self) -> Phase:
        return self.end.experiment.phase

    @property
    def hand_back(self) -> HandBackResult | None:
        ended = self.end.experiment.hand_back
        return None if ended is None else ended.result

    @property
    def text(self) -> str:
        return self.end.sheet.outcome.text


Strike = Callable[[SoftPlant, TestRunner], Awaitable[State | None]]
Moment = Callable[[TestRunner], bool]


async def comes(moment: Callable[[], bool]) -> None:
    """Wait for something that this process itself brings about."""
    async with asyncio.timeout(PATIENCE_S):
        while not moment():  # noqa: ASYNC110 - a runner is looked at, it tells nobody
            await asyncio.sleep(0.002)


def is_resting(runner: TestRunner) -> bool:
    return runner.experiment.stage is Stage.HOLDING


def is_driven_up(runner: TestRunner) -> bool:
    return _is_driven(runner, is_high=True)


def is_driven_down(runner: TestRunner) -> bool:
    return _is_driven(runner, is_high=False)


def _is_driven(runner: TestRunner, *, is_high: bool) -> bool:
    """Just after the relay has switched and the plant has shown it."""
    experiment = runner.experiment
    relay, held = experiment.relay, experiment.held
    if experiment.stage is not Stage.CYCLING or relay is None or held is None:
        return False
    return relay.is_high is is_high and held.is_op_confirmed


def is_giving_back(runner: TestRunner) -> bool:
    """The output as found has been asked for, and not yet been read."""
    experiment, writes = runner.experiment, runner.log.writes
    if experiment.phase is Phase.TESTING and is_driven_up(runner):
        runner.abort("the bench")
    if experiment.phase is not Phase.RESTORING or experiment.as_found is None or not writes:
        return False
    last = writes[-1].command
    return isinstance(last, DriveOutput) and last.op_pct == experiment.as_found.op_pct


MOMENTS: dict[str, Moment] = {
    "at rest": is_resting,
    "driven up": is_driven_up,
    "driven down": is_driven_down,
    "giving back": is_giving_back,
}


def has_given_back(state: State) -> bool:
    return bool(state["guard_state"] == "gave back")


async def kill(plant: SoftPlant, _: TestRunner) -> None:
    await plant.kill()


async def freeze_until_seen(plant: SoftPlant, runner: TestRunner) -> None:
    plant.freeze()
    await comes(lambda: runner.experiment.phase is Phase.RESTORING)
    plant.thaw()


async def freeze_for_good(plant: SoftPlant, runner: TestRunner) -> None:
    plant.freeze()
    await comes(lambda: runner.experiment.phase.is_terminal)
    plant.thaw()
    await plant.until(has_given_back)


async def lose_answers_until_the_guard_gave_back(plant: SoftPlant, _: TestRunner) -> None:
    await plant.press("fault drop-answers")
    await plant.until(has_given_back)
    await plant.press("clear-faults")


async def lose_all_requests(plant: SoftPlant, runner: TestRunner) -> None:
    await plant.press("fault drop-requests")
    await comes(lambda: runner.experiment.phase.is_terminal)
    await plant.until(has_given_back)
    await plant.press("clear-faults")


async def reset_connections(plant: SoftPlant, runner: TestRunner) -> None:
    seen = len(runner.log.samples)
    await plant.press("fault close-connections")
    await comes(lambda: len(runner.log.samples) > seen + 3 or runner.experiment.phase.is_terminal)
    runner.abort("the bench")


def pressing(line: str) -> Strike:
    """Somebody at the panel, in a scan in which nothing of ours is on its way to the output."""

    async def press(plant: SoftPlant, _: TestRunner) -> State:
        await plant.until(lambda state: state["op_effect_count"] == 0 or state["op"] == state["op_request"])
        await plant.press(line)
        return await plant.state()

    return press


STRIKES: dict[str, Strike] = {
    "the plc is killed": kill,
    "the plc freezes and goes on": freeze_until_seen,
    "the plc freezes for good": freeze_for_good,
    "answers are lost until the guard gave back": lose_answers_until_the_guard_gave_back,
    "all requests are lost": lose_all_requests,
    "connections are reset once": reset_connections,
    "the mode is changed": pressing(f"mode {LOOP} AUTO"),
    "the setpoint is changed": pressing(f"sp {LOOP} 52"),
    "the output is changed": pressing(f"op {LOOP} 33"),
    "stop is pressed": pressing(f"stop {LOOP}"),
    "the plc restarts": pressing("fault restart"),
}


UNANSWERED = (kill, freeze_for_good, lose_all_requests)
"""After these nothing can be shown any more: the hand-back uses up all its time."""


async def happens(folder: Path, moment: Moment, strike: Strike) -> Story:
    async with soft_plant(rig_with(folder, PATIENT_GUARD)) as plant:
        changes = (*QUICK, *(UNHURRIED if moment is is_giving_back else SCANS))
        if strike not in UNANSWERED:
            changes = (*changes, ("hand_back_within_s = 3.0", "hand_back_within_s = 10.0"))
        workplace, loop = bench_workplace(folder, plant.port, changes)
        await plant.press(f"enable {LOOP}")
        found = await plant.until(lambda state: state["enable"])
        async with SupervisedTest(workplace, loop) as supervised:
            assert (await supervised.look(0.2)).is_fit
            runner = supervised.prepare(is_no_guard_accepted=False)
            running = asyncio.ensure_future(supervised.run(permission()))
            await comes(lambda: running.done() or moment(runner))
            struck = None if running.done() else await strike(plant, runner)
            end = await running
        left = None if strike is kill else await plant.scan_on(SCANS_AFTER)
        return Story(end, found, struck, left, len(open_intents(workplace.data_dir)))


def _scenario(moment: Moment, strike: Strike) -> Scenario[Story]:
    return lambda folder: happens(folder, moment, strike)


SCENARIOS = {
    f"{moment}, {strike}": _scenario(MOMENTS[moment], STRIKES[strike]) for strike in STRIKES for moment in MOMENTS
}


@pytest.fixture(scope="module")
def stories(together: Together) -> Outcomes[Story]:
    return together.of(Path(__file__).stem, SCENARIOS)


def at_every_moment(strike: str) -> pytest.MarkDecorator:
    return pytest.mark.parametrize("name", [f"{moment}, {strike}" for moment in MOMENTS])


def is_as_found(story: Story) -> bool:
    """Mode, setpoint and settings as found; the output near it, since the block itself moves it in automatic."""
    found, left = story.found, story.left
    assert left is not None
    same = all(found[name] == left[name] for name in ("mode", "sp", "gain", "integral", "derivative"))
    return same and abs(left["op"] - found["op"]) < 15.0 and left["holder"] == 0 and left["holder_request"] == 0


def enters_by_hand(story: Story) -> bool:
    """Whether the values as found are told, to be entered at the panel."""
    as_found = story.end.experiment.as_found
    assert as_found is not None
    return f"output {as_found.op_pct:.2f} %, setpoint {as_found.sp_pct:.2f} %, mode AUTO" in story.text


@at_every_moment("the plc is killed")
def test_a_plc_that_is_gone_leaves_the_test_stranded_with_the_values_to_enter(
    stories: Outcomes[Story], name: str
) -> None:
    story = stories.of(name)
    assert story.phase is Phase.STRANDED
    assert story.hand_back is HandBackResult.NOT_CONFIRMED
    assert "Go to the panel now" in story.text
    assert enters_by_hand(story)
    assert story.end.sheet.outcome.ended == "STRANDED"


@at_every_moment("the plc freezes and goes on")
def test_a_plc_that_stood_still_for_a_moment_gets_its_loop_back(stories: Outcomes[Story], name: str) -> None:
    story = stories.of(name)
    assert story.phase is Phase.ABORTED
    assert story.hand_back in {HandBackResult.RESTORED, HandBackResult.GUARD_GAVE_BACK}
    assert is_as_found(story)


@at_every_moment("the plc freezes for good")
def test_a_plc_that_stays_frozen_leaves_the_test_stranded_and_its_guard_gives_back_by_itself(
    stories: Outcomes[Story], name: str
) -> None:
    story = stories.of(name)
    assert story.phase is Phase.STRANDED
    assert enters_by_hand(story)
    left = story.left
    assert left is not None
    assert (left["guard_state"], left["mode"], left["sp"]) == ("gave back", "AUTO", story.found["sp"])


@at_every_moment("answers are lost until the guard gave back")
def test_when_answers_are_lost_the_guard_gives_back_and_that_is_verified(stories: Outcomes[Story], name: str) -> None:
    story = stories.of(name)
    assert story.phase is Phase.ABORTED
    assert story.hand_back is HandBackResult.GUARD_GAVE_BACK
    assert is_as_found(story)


@at_every_moment("all requests are lost")
def test_when_nothing_arrives_any_more_the_test_is_stranded_and_the_guard_has_given_back(
    stories: Outcomes[Story], name: str
) -> None:
    story = stories.of(name)
    assert story.phase is Phase.STRANDED
    assert enters_by_hand(story)
    left = story.left
    assert left is not None
    assert (left["guard_state"], left["mode"], left["sp"]) == ("gave back", "AUTO", story.found["sp"])


@at_every_moment("connections are reset once")
def test_one_reset_of_the_connections_is_borne(stories: Outcomes[Story], name: str) -> None:
    story = stories.of(name)
    assert story.phase is Phase.ABORTED
    assert story.end.sheet.outcome.code == "OPERATOR_ABORT"
    assert story.hand_back is HandBackResult.RESTORED
    assert is_as_found(story)


@at_every_moment("the mode is changed")
def test_a_loop_put_in_automatic_at_the_panel_is_let_go(stories: Outcomes[Story], name: str) -> None:
    story = stories.of(name)
    assert_taken(story)
    assert story.left is not None
    assert story.left["mode"] == "AUTO"


@at_every_moment("the setpoint is changed")
def test_a_loop_whose_setpoint_is_changed_at_the_panel_is_let_go(stories: Outcomes[Story], name: str) -> None:
    story = stories.of(name)
    assert_taken(story)
    assert story.left is not None
    assert (story.left["sp"], story.left["mode"]) == (52.0, "MAN")


@at_every_moment("the output is changed")
def test_a_loop_whose_output_is_moved_at_the_panel_is_let_go(stories: Outcomes[Story], name: str) -> None:
    story = stories.of(name)
    assert_taken(story)
    assert story.left is not None
    assert (story.left["op"], story.left["mode"]) == (33.0, "MAN")


def assert_taken(story: Story) -> None:
    """Released, and but for the token that goes back nothing of ours has landed since it was taken."""
    assert story.phase is Phase.RELEASED
    assert "Somebody took the loop" in story.text
    assert story.struck is not None
    assert story.left is not None
    assert moved(story.struck, story.left).keys() <= {"holder_request", "heartbeat"}
    assert story.left["holder_request"] == 0
    assert story.left["guard_state"] == "idle"


@at_every_moment("stop is pressed")
def test_stop_at_the_panel_gives_back_at_once_and_that_is_verified(stories: Outcomes[Story], name: str) -> None:
    story = stories.of(name)
    assert story.phase is Phase.ABORTED
    assert story.hand_back is HandBackResult.GUARD_GAVE_BACK
    assert is_as_found(story)


@at_every_moment("the plc restarts")
def test_after_a_restart_of_the_plc_nothing_is_written(stories: Outcomes[Story], name: str) -> None:
    story = stories.of(name)
    assert story.phase is Phase.STRANDED
    assert "the PLC restarted" in story.text
    assert enters_by_hand(story)
    struck, left = story.struck, story.left
    assert struck is not None
    assert left is not None
    assert moved(struck, left) == {}
    assert (left["mode"], left["op"], left["heartbeat"], left["sequence"]) == ("MAN", struck["op"], 0, 0)


@pytest.mark.parametrize("name", SCENARIOS)
def test_every_end_is_kept_with_its_sheet_and_its_journal(stories: Outcomes[Story], name: str) -> None:
    story = stories.of(name)
    assert story.open_intents == 0
    assert story.end.sheet.outcome.text
    assert story.end.sheet.permission is not None
