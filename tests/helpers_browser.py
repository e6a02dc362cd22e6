"""A real browser for tests of the dashboard: Debian's Chromium, driven by Playwright, with what the page complained of.

Starting and ending only; services come from `helpers_service`, feeds from `helpers_dashboard`. What a page must show is
the tests' business, but for one thing: a page that wrote an error or broke its policy fails the test that opened it.
"""

from __future__ import annotations

import shutil
from collections.abc import AsyncIterator, Awaitable, Callable, Sequence
from contextlib import asynccontextmanager
from dataclasses import dataclass, field
from typing import Any

import pytest
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
DEADLINE_MS = 30_000  # long, because it decides nothing
# Kept where a page that is loaded again does not lose it: every violation is told on.
VIOLATIONS = """
addEventListener("securitypolicyviolation", (event) =>
  console.error(`policy: ${event.effectiveDirective} ${event.blockedURI} ${event.sourceFile}:${event.lineNumber}`));
"""


def chromium() -> str:
    """Where Chromium is; the test is skipped where it is not installed, which fails it where no test may be."""
    found = shutil.which("chromium")
    if found is None:
        pytest.skip("chromium is not installed (Debian: apt-get install chromium fonts-dejavu-core)")
    return found


@dataclass(slots=True)
class Seen:
    """A page, and the errors that it wrote to the console, threw, or made against its policy."""

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
    where = chromium()
    async with async_playwright() as playwright:
        launched = await playwright.chromium.launch(executable_path=where, args=list(ARGUMENTS))
        try:
            yield launched
        finally:
            await launched.close()


@asynccontextmanager
async def page_of(
    launched: Browser, url: str, *, width: int = 1440, height: int = 900, expected: Sequence[str] = (), **context: Any
) -> AsyncIterator[Page]:
    """A page in a context of its own, opened at an address; at the end it must have complained of nothing.

    `expected`: parts of the errors that the test itself brings about. `context`: Playwright's, as color_scheme="dark".
    """
    made = await launched.new_context(viewport={"width": width, "height": height}, **context)
    made.set_default_timeout(DEADLINE_MS)
    try:
        await made.add_init_script(VIOLATIONS)
        seen = Seen(await made.new_page())
        seen.listen()
        await seen.page.goto(url)
        yield seen.page
        unexpected = [error for error in seen.errors if not any(part in error for part in expected)]
        assert not unexpected, unexpected
    finally:
        await made.close()


@asynccontextmanager
async def work_of(page: Page) -> AsyncIterator[Callable[[], Awaitable[float]]]:
    """A function that tells for how many seconds the page's main thread has worked, as the browser counts them."""
    session = await page.context.new_cdp_session(page)
    await session.send("Performance.enable")

    async def seconds() -> float:
        answer = await session.send("Performance.getMetrics")
        return float(next(each["value"] for each in answer["metrics"] if each["name"] == "TaskDuration"))

    try:
        yield seconds
    finally:
        await session.detach()
