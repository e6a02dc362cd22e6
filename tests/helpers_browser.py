"""A real browser for tests of the dashboard: Debian's Chromium, driven by Playwright, with what the page complained of.

Starting and ending only; services come from `helpers_service`. What a page must show is the tests' business.
"""

from __future__ import annotations

import shutil
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from dataclasses import dataclass, field
from typing import Any

from playwright.async_api import Browser, ConsoleMessage, Page, async_playwright

ARGUMENTS = (
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
)


def chromium() -> str | None:
    """Where Chromium is; None where it is not installed (`apt-get install chromium fonts-dejavu-core`)."""
    return shutil.which("chromium")


@dataclass(slots=True)
class Seen:
    """A page, and the errors that it wrote to the console or threw."""

    page: Page
    errors: list[str] = field(default_factory=list)

    def listen(self) -> None:
        """Collect from now on."""

        def note_console(message: ConsoleMessage) -> None:
            if message.type in ("error", "warning"):
                self.errors.append(f"{message.type}: {message.text} ({message.location.get('url', '')})")

        def note_error(error: Exception) -> None:
            self.errors.append(f"thrown: {error}")

        # Functions, not methods: the driver keeps a note on what it calls, for which a slotted object has no room.
        self.page.on("console", note_console)
        self.page.on("pageerror", note_error)


@asynccontextmanager
async def browser() -> AsyncIterator[Browser]:
    """One headless browser."""
    async with async_playwright() as playwright:
        launched = await playwright.chromium.launch(executable_path=chromium(), args=list(ARGUMENTS))
        try:
            yield launched
        finally:
            await launched.close()


@asynccontextmanager
async def page_of(
    launched: Browser, url: str, *, width: int = 1440, height: int = 900, **context: Any
) -> AsyncIterator[Seen]:
    """A page in a context of its own, opened at an address. `context`: Playwright's, such as color_scheme="dark"."""
    made = await launched.new_context(viewport={"width": width, "height": height}, **context)
    try:
        seen = Seen(await made.new_page())
        seen.listen()
        await seen.page.goto(url)
        yield seen
    finally:
        await made.close()


async def task_seconds(page: Page) -> float:
    """Seconds that the page's main thread has worked since it was opened, as the browser counts them."""
    session = await page.context.new_cdp_session(page)
    try:
        await session.send("Performance.enable")
        answer = await session.send("Performance.getMetrics")
    finally:
        await session.detach()
    return float(next(each["value"] for each in answer["metrics"] if each["name"] == "TaskDuration"))
