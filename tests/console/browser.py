"""A headless browser with a fresh profile, and a person's eyes and hands at the page."""

import shutil
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager

from playwright.async_api import Browser, ConsoleMessage, Page, async_playwright, expect

from tests.console.served_page import NAME, SECRET

CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser") or shutil.which("google-chrome")
NO_CHROMIUM = "no chromium is installed here: the page was not tried in a browser"
PATIENCE_MS = 20_000
PERMISSION = (
    ("Loop owner who gave permission", "P. Owner"),
    ("What protects the plant meanwhile", "high temperature switch TSH-204"),
    ("Permit number", "PTW-1187"),
)
_OPTIONS = (
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--no-first-run",
)


@asynccontextmanager
async def browser() -> AsyncIterator[Browser]:
    """One browser process."""
    assert CHROMIUM is not None
    async with async_playwright() as started:
        running = await started.chromium.launch(executable_path=CHROMIUM, args=list(_OPTIONS))
        try:
            yield running
        finally:
            await running.close()


class Screen:
    """A page in a browser; ``outside`` are its requests to anywhere else, ``faults`` what it complained of.

    An answer that says no has a status that the browser logs; that is no fault.
    """

    def __init__(self, page: Page, url: str) -> None:
        self.page = page
        self.url = url
        self.outside: list[str] = []
        self.faults: list[str] = []
        page.on("request", lambda request: self._note(request.url))
        page.on("console", self._hear)
        page.on("pageerror", lambda fault: self.faults.append(str(fault)))

    def _hear(self, line: ConsoleMessage) -> None:
        if line.type == "error" and not line.text.startswith("Failed to load resource: the server responded"):
            self.faults.append(line.text)

    def _note(self, url: str) -> None:
        if not url.startswith(self.url):
            self.outside.append(url)

    async def sign_in(self, name: str = NAME) -> None:
        """Open the page and sign in."""
        await self.page.goto(self.url)
        await self.page.get_by_label("Name").fill(name)
        await self.page.get_by_label("Secret").fill(SECRET)
        await self.page.get_by_role("button", name="Sign in").click()

    async def open_loop(self, loop: str) -> None:
        """From the index to a loop's sheet."""
        await self.page.get_by_role("link", name=loop).first.click()
        await expect(self.page.get_by_role("heading", level=1)).to_contain_text(loop)

    async def look(self) -> None:
        """A look that finds the loop fit."""
        await self.page.get_by_role("button", name="Look at the loop").click()
        await expect(self.page.get_by_text("fit to test", exact=False).first).to_be_visible()

    async def allow(self, loop: str) -> None:
        """Everything that permission asks for, up to the last button."""
        for box in (
            await self.page.get_by_role("group", name="Read and accept each caution").get_by_role("checkbox").all()
        ):
            await box.check()
        for label, text in PERMISSION:
            await self.page.get_by_label(label).fill(text)
        await self.page.get_by_label(f"Type {loop}").fill(loop)
        await self.page.get_by_label("Secret of").fill(SECRET)

    async def start(self, loop: str) -> None:
        """Look, allow, start, and see the test begin."""
        await self.look()
        await self.allow(loop)
        await self.page.get_by_role("button", name="Start the test").click()
        await expect(self.page.get_by_role("heading", name="The test")).to_be_visible()


@asynccontextmanager
async def screen(running: Browser, url: str, width: int = 1280, height: int = 800) -> AsyncIterator[Screen]:
    """One page of its own, with its own cookies."""
    context = await running.new_context(viewport={"width": width, "height": height})
    context.set_default_timeout(PATIENCE_MS)
    try:
        yield Screen(await context.new_page(), url)
    finally:
        await context.close()
