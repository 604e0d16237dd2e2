"""The page in a browser, over real sockets, on the fast rig: the whole job by keyboard, and what may go wrong."""

import asyncio
import os
import re
import signal
from collections.abc import Awaitable, Callable, Mapping
from dataclasses import dataclass
from pathlib import Path

import pytest
from playwright.async_api import Browser, expect

from autotune.service.persons import Role
from tests.console.browser import CHROMIUM, NO_CHROMIUM, PERMISSION, Screen, browser, screen
from tests.console.served_page import NAME, SECRET, add_person, served_page
from tests.system.bench import Change, write_bench
from tests.system.plant import LOOP, State, as_real, moved, soft_plant

pytestmark = [pytest.mark.socket, pytest.mark.skipif(CHROMIUM is None, reason=NO_CHROMIUM)]

LONG: Change = ("cycles_to_agree = 3", "cycles_to_agree = 12")
TABS_AT_MOST = 120
_MANY_POINTS = re.compile(r"(L[\d. ]+){40}")
STORY_WITHIN_S = 120.0


@dataclass(frozen=True, slots=True)
class Evidence:
    """The panel before and after, what the page showed at the end, and what the browser had to complain of."""

    before: State
    after: State
    shown: str
    faults: list[str]
    outside: list[str]
    exit_code: int | None = None
    during: State | None = None


class Keyboard:
    """A person without a mouse."""

    def __init__(self, at: Screen) -> None:
        self._page = at.page

    async def to(self, name: str) -> None:
        """Press Tab until the control called ``name`` has the focus, and see that the focus shows."""
        for _ in range(TABS_AT_MOST):
            await self._page.keyboard.press("Tab")
            if name in await self._page.evaluate(_FOCUSED):
                assert await self._page.evaluate(_OUTLINE) >= 2, f"the focus on {name} does not show"
                return
        raise AssertionError(f"no way by keyboard to {name!r}")

    async def press(self, name: str) -> None:
        """Go to a control and press it."""
        await self.to(name)
        await self._page.keyboard.press("Enter")

    async def fill(self, name: str, text: str) -> None:
        """Go to a field and type."""
        await self.to(name)
        await self._page.keyboard.type(text)

    async def accept_all(self) -> None:
        """Tick every caution."""
        count = await self._page.get_by_role("checkbox").count()
        for _ in range(count):
            await self.to("checkbox ")
            await self._page.keyboard.press("Space")


_FOCUSED = """() => {
    const at = document.activeElement;
    const label = at.labels?.length ? at.labels[0].textContent : "";
    return `${at.type ?? ""} ${at.getAttribute("aria-label") ?? ""} ${label} ${at.textContent}`;
}"""
_OUTLINE = "() => parseFloat(getComputedStyle(document.activeElement).outlineWidth)"


async def whole_job_by_keyboard(folder: Path, running: Browser) -> Evidence:
    async with soft_plant() as plant:
        config = write_bench(folder, plant.port)
        add_person(config, Role.TEST, Role.WRITE)
        async with served_page(config) as service, screen(running, service.url) as at:
            keys, page = Keyboard(at), at.page
            before = await plant.state()
            await page.goto(at.url)
            await expect(page.get_by_label("Name")).to_be_focused()
            await page.keyboard.type(NAME)
            await keys.fill("Secret", "a wrong guess")
            await page.keyboard.press("Enter")
            await expect(page.get_by_role("alert").filter(has_text="wrong")).to_be_visible()
            await page.keyboard.type(SECRET)
            await page.keyboard.press("Enter")
            await expect(page.get_by_role("heading", name="Loops")).to_be_visible()
            await keys.press(LOOP)
            await plant.press(f"enable {LOOP}")
            await keys.press("Look at the loop")
            await expect(page.get_by_role("heading", name="Permission")).to_be_visible()
            await keys.accept_all()
            for label, text in PERMISSION:
                await keys.fill(label, text)
            await keys.fill(f"Type {LOOP}", LOOP)
            await keys.fill("Secret of", SECRET)
            await keys.press("Start the test")
            await expect(page.get_by_text("TESTING").first).to_be_visible()
            await expect(page.get_by_role("button", name="Abort")).to_be_visible()
            await expect(page.get_by_role("heading", name="Proposals")).to_be_visible(timeout=60_000)
            await keys.press("Plan the change to")
            digest = await page.locator("code.digest").inner_text()
            await keys.accept_all()
            await keys.fill("Type the digits", digest)
            await keys.fill("Secret of", SECRET)
            await keys.press("Write exactly these values")
            await expect(page.get_by_text("read back equal")).to_be_visible()
            await expect(page.get_by_text("Added later")).to_be_visible()
            shown = await page.locator("main").inner_text()
            return Evidence(before, await plant.state(), shown, at.faults, at.outside, await service.stop())


async def mishaps_in_one_test(folder: Path, running: Browser) -> Evidence:
    """Who started it closes the browser; who may only watch sees the console freeze and die, and aborts by Esc."""
    async with soft_plant() as plant:
        config = write_bench(folder, plant.port, (LONG,))
        add_person(config, Role.TEST)
        add_person(config, name="V. Isitor")
        async with served_page(config, "--lock-after", "0.1") as service:
            async with screen(running, service.url) as first:
                await first.sign_in()
                await first.open_loop(LOOP)
                await plant.press(f"enable {LOOP}")
                before = await plant.state()
                await first.start(LOOP)
                await expect(first.page.get_by_text("TESTING").first).to_be_visible()
            async with screen(running, service.url, 800, 1280) as at:
                page = at.page
                await at.sign_in(name="V. Isitor")
                await at.open_loop(LOOP)
                await expect(page.get_by_text("TESTING").first).to_be_visible()
                await expect(page.get_by_role("button", name="Finish now and keep")).to_be_hidden()
                console = service.console_process_id
                assert console is not None
                os.kill(console, signal.SIGSTOP)
                await expect(page.get_by_text("No live data since")).to_be_visible()
                os.kill(console, signal.SIGKILL)
                await expect(page.get_by_text("No live data since")).to_be_hidden()
                during = await plant.state()
                await expect(page.locator("path.pv")).to_have_attribute("d", _MANY_POINTS)
                await expect(page.get_by_role("dialog", name="Locked")).to_be_visible()
                await page.keyboard.down("Escape")
                await expect(page.get_by_text("ABORTED").first).to_be_visible()
                await page.keyboard.up("Escape")
                after = await plant.until(lambda state: not state["holder"])
                shown = await page.locator("main").inner_text()
                return Evidence(before, after, shown, at.faults, at.outside, during=during)


async def watch_only(folder: Path, running: Browser) -> Evidence:
    async with soft_plant() as plant:
        config = write_bench(folder, plant.port)
        add_person(config, Role.TEST, Role.WRITE)
        async with served_page(config, "--watch-only") as service, screen(running, service.url) as at:
            await at.sign_in()
            await at.open_loop(LOOP)
            await plant.press(f"enable {LOOP}")
            before = await plant.state()
            await at.look()
            await expect(at.page.get_by_text("This service only watches.")).to_be_visible()
            await expect(at.page.get_by_role("button", name="Start the test")).to_have_count(0)
            shown = await at.page.locator("body").inner_text()
            return Evidence(before, await plant.state(), shown, at.faults, at.outside)


Story = Callable[[Path, Browser], Awaitable[Evidence]]
STORIES: Mapping[str, Story] = {
    story.__name__: story for story in (whole_job_by_keyboard, mishaps_in_one_test, watch_only)
}


@pytest.fixture(scope="module")
def stories(tmp_path_factory: pytest.TempPathFactory) -> Mapping[str, Evidence | BaseException]:
    """All of them at once in one browser: most of their time is waiting for a plant."""
    folder = tmp_path_factory.mktemp("page")

    async def run() -> list[Evidence | BaseException]:
        async with browser() as running:

            async def one(name: str, story: Story) -> Evidence:
                async with asyncio.timeout(STORY_WITHIN_S):
                    return await story(folder / name, running)

            return await asyncio.gather(*(one(*named) for named in STORIES.items()), return_exceptions=True)

    return dict(zip(STORIES, asyncio.run(run()), strict=True))


def _of(stories: Mapping[str, Evidence | BaseException], story: Story) -> Evidence:
    ended = stories[story.__name__]
    if isinstance(ended, BaseException):
        raise ended
    return ended


def test_the_whole_job_is_done_by_keyboard_alone(stories: Mapping[str, Evidence | BaseException]) -> None:
    ended = _of(stories, whole_job_by_keyboard)
    assert (ended.before["mode"], ended.after["mode"]) == ("AUTO", "AUTO")
    assert as_real(ended.before["gain"]) != as_real(ended.after["gain"])
    assert "WRITTEN" in ended.shown
    assert "95 % interval" in ended.shown
    assert ended.exit_code == 0


def test_neither_a_closed_browser_nor_a_dead_console_ends_a_test(
    stories: Mapping[str, Evidence | BaseException],
) -> None:
    ended = _of(stories, mishaps_in_one_test)
    assert ended.during is not None
    assert ended.during["mode"] == "MAN"
    assert ended.during["holder"] != 0


def test_esc_held_at_a_locked_screen_hands_the_loop_back_whoever_holds_it(
    stories: Mapping[str, Evidence | BaseException],
) -> None:
    ended = _of(stories, mishaps_in_one_test)
    assert "ABORTED" in ended.shown
    assert (ended.after["mode"], ended.after["holder"]) == (ended.before["mode"], 0)


def test_a_service_that_only_watches_shows_no_way_to_start(stories: Mapping[str, Evidence | BaseException]) -> None:
    ended = _of(stories, watch_only)
    assert "watch only" in ended.shown
    assert not moved(ended.before, ended.after)


@pytest.mark.parametrize("story", STORIES.values(), ids=STORIES)
def test_nothing_is_asked_outside_and_the_browser_has_no_complaint(
    stories: Mapping[str, Evidence | BaseException], story: Story
) -> None:
    ended = _of(stories, story)
    assert ended.outside == []
    # A console that dies leaves unanswered what it was asked.
    assert [fault for fault in ended.faults if "net::ERR_" not in fault] == []
