"""Pictures of the page for a person to look at: python -m tests.console.shots [FOLDER]."""

import asyncio
import os
import signal
import sys
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from pathlib import Path
from tempfile import TemporaryDirectory

from playwright.async_api import Browser, expect

from autotune.service.persons import Role
from tests.console.browser import Screen, browser, screen
from tests.console.served_page import SECRET, ServedPage, add_person, served_page
from tests.system.plant import SoftPlant, soft_plant

LOOP = "TIC-204"
ROOT = Path(__file__).parents[2]
SHOTS = Path(__file__).with_name("shots")
_LONG_MS = 90_000


async def take_all(folder: Path) -> None:
    """The whole job on the juice skid, a picture at each station, at a desk's size and at a tablet's."""
    with TemporaryDirectory(prefix="shots-") as kept:
        async with _skid(Path(kept)) as (plant, page), browser() as running:
            async with screen(running, page.url) as desk:
                await _job(desk, plant, page, folder)
            await _tablet(running, page, folder)


@asynccontextmanager
async def _skid(kept: Path) -> AsyncIterator[tuple[SoftPlant, ServedPage]]:
    async with soft_plant("juice-skid") as plant:
        text = (ROOT / "config" / "rehearsal.toml").read_text("utf-8")
        config = kept / "skid.toml"
        config.write_text(text.replace("port = 50502", f"port = {plant.port}"), "utf-8")
        add_person(config, Role.TEST, Role.WRITE)
        async with served_page(config) as page:
            yield plant, page


async def _job(desk: Screen, plant: SoftPlant, service: ServedPage, folder: Path) -> None:
    page = desk.page

    async def shot(name: str, *, whole: bool = False) -> None:
        await page.screenshot(path=folder / f"{name}.png", full_page=whole)

    await page.goto(desk.url)
    await expect(page.get_by_label("Name")).to_be_visible()
    await shot("01-sign-in")
    await desk.sign_in()
    await expect(page.get_by_role("heading", name="Loops")).to_be_visible()
    await expect(page.get_by_text("TIC-311").first).to_be_visible()
    await expect(page.get_by_text("not read yet")).to_have_count(0)
    await shot("02-index")
    await desk.open_loop(LOOP)
    await page.get_by_role("button", name="Look at the loop").click()
    await expect(page.get_by_text("not fit to test")).to_be_visible()
    await shot("03-not-fit", whole=True)
    await plant.press(f"enable {LOOP}")
    await desk.look()
    await expect(page.get_by_role("heading", name="Permission")).to_be_visible()
    await shot("04-permission", whole=True)
    await desk.allow(LOOP)
    await page.get_by_role("button", name="Start the test").click()
    await expect(page.get_by_text("TESTING").first).to_be_visible(timeout=_LONG_MS)
    await expect(page.get_by_role("cell", name="counts", exact=True).first).to_be_visible(timeout=_LONG_MS)
    await shot("05-test")
    await shot("06-test-whole", whole=True)
    console = service.console_process_id
    assert console is not None
    os.kill(console, signal.SIGSTOP)
    await expect(page.get_by_text("No live data since")).to_be_visible()
    await shot("06-lost")
    os.kill(console, signal.SIGCONT)
    await expect(page.get_by_text("No live data since")).to_be_hidden()
    await page.evaluate("document.dispatchEvent(new Event('locked'))")
    await shot("06-locked")
    await page.get_by_label("Secret of").fill(SECRET)
    await page.get_by_role("button", name="Unlock").click()
    await expect(page.get_by_role("heading", name="Findings")).to_be_visible(timeout=_LONG_MS)
    await shot("07-found", whole=True)
    await page.get_by_role("button", name="Plan the change to").first.click()
    await expect(page.get_by_role("heading", name="Confirmation")).to_be_visible()
    digest = await page.locator("code.digest").inner_text()
    await shot("08-confirmation")
    for box in await page.get_by_role("checkbox").all():
        await box.check()
    await page.get_by_label("Type the digits").fill(digest)
    await page.get_by_label("Secret of").last.fill(SECRET)
    await page.get_by_role("button", name="Write exactly these values").click()
    await expect(page.get_by_text("read back equal")).to_be_visible(timeout=_LONG_MS)
    await shot("09-read-back")
    await _second_test(desk, plant)
    await page.get_by_role("link", name="Archive", exact=True).click()
    await expect(page.get_by_role("heading", name="Archive")).to_be_visible()
    for at in range(2):
        await page.get_by_role("checkbox").nth(at).check()
    await shot("10-archive")
    await page.get_by_role("button", name="Compare the two marked").click()
    await expect(page.get_by_text("Both were made with the same configuration.")).to_be_visible()
    await shot("10-compare")
    await page.get_by_role("link", name="Archive", exact=True).click()
    await page.locator("tbody a").last.click()
    await expect(page.get_by_role("heading", name="Added later")).to_be_visible()
    await shot("11-kept-sheet", whole=True)
    await page.get_by_role("link", name="Controllers").click()
    await expect(page.get_by_text("Last heard")).to_be_visible()
    await shot("12-controllers")
    if desk.faults or desk.outside:
        sys.exit(f"the page complained: {desk.faults}; asked outside: {desk.outside}")


async def _second_test(desk: Screen, plant: SoftPlant) -> None:
    """One that is aborted, so that there are two sheets to compare."""
    page = desk.page
    await plant.press(f"enable {LOOP}")
    await desk.start(LOOP)
    await expect(page.get_by_text("TESTING").first).to_be_visible(timeout=_LONG_MS)
    await page.get_by_role("button", name="Abort").click()
    await expect(page.get_by_text("ABORTED").first).to_be_visible(timeout=_LONG_MS)
    await expect(page.get_by_role("heading", name="Record")).to_be_visible(timeout=_LONG_MS)


async def _tablet(running: Browser, page: ServedPage, folder: Path) -> None:
    async with screen(running, page.url, 800, 1280) as tablet:
        await tablet.sign_in()
        await expect(tablet.page.get_by_text("last sheet").first).to_be_visible()
        await tablet.page.screenshot(path=folder / "20-tablet-index.png")
        await tablet.open_loop(LOOP)
        await expect(tablet.page.get_by_role("heading", name="Record")).to_be_visible()
        await tablet.page.screenshot(path=folder / "21-tablet-sheet.png", full_page=True)


if __name__ == "__main__":
    wanted = Path(sys.argv[1]) if len(sys.argv) > 1 else SHOTS
    wanted.mkdir(parents=True, exist_ok=True)
    asyncio.run(take_all(wanted))
