"""For tests of the dashboard: a service process with several feeds, live feeds, and acting on a page.

A test has a feed of its own, so that tests share a process without seeing each other. Feeds go on sending until they
are told otherwise, as gateways do; nothing here waits for a time to pass.
"""

from __future__ import annotations

import asyncio
import json
import os
import re
import time
from collections.abc import AsyncIterator, Iterable, Iterator, Mapping
from contextlib import asynccontextmanager, contextmanager, suppress
from pathlib import Path
from typing import Any

import aiohttp
from helpers_browser import DEADLINE_MS, page_of
from helpers_service import NDJSON, Process
from playwright.async_api import Browser, Locator, Page, expect

expect.set_options(timeout=DEADLINE_MS)
EVERY_S = 0.2
PATIENT = {"slack": "1s", "idle_after": "40s", "hold_at_most": "5m", "ahead_limit": "10s"}
Keys = Mapping[str, object]


def feeds_toml(folder: Path, feeds: Mapping[str, Keys], top: str = "") -> str:
    """A configuration with these feeds, each with an SQLite sink; keys in addition to PATIENT."""
    lines = ['listen = "127.0.0.1:0"', f"data_dir = {json.dumps(str(folder / 'data'))}", top]
    for name, keys in feeds.items():
        lines += ["[[feed]]", f"name = {json.dumps(name)}", 'time = { at = "/observed_at", unit = "ms" }']
        lines += [
            'source = "/station"',
            *(f"{key} = {json.dumps(value)}" for key, value in {**PATIENT, **keys}.items()),
        ]
        lines += ["[[feed.sink]]", 'kind = "sqlite"', f"path = {json.dumps(str(folder / f'{name}.db'))}"]
    return "\n".join([*lines, ""])


@contextmanager
def service_with(folder: Path, feeds: Mapping[str, Keys], top: str = "") -> Iterator[Process]:
    """A real process with these feeds."""
    with Process(folder, feeds_toml(folder, feeds, top)) as process:
        yield process


class Gateway:
    """Sends for stations, several times a second, until its block ends; a service that is away is asked again.

    `lag_s`: by station, how old its events are when they leave. A station that is taken out falls silent.
    """

    def __init__(self, process: Process, feed: str, lag_s: Mapping[str, float], token: str = "") -> None:
        self.process, self.feed, self.lag_s = process, feed, dict(lag_s)
        self._headers = {"Content-Type": NDJSON, **({"Authorization": f"Bearer {token}"} if token else {})}
        self.sent = 0

    async def send(self, session: aiohttp.ClientSession, lag_s: Mapping[str, float] | None = None) -> None:
        """One event of each station."""
        now_ms = time.time_ns() // 1_000_000
        lines = [
            json.dumps({"observed_at": now_ms - round(lag * 1000), "station": station, "level": 4.2})
            for station, lag in (self.lag_s if lag_s is None else lag_s).items()
        ]
        if not lines:
            return
        url, data = f"{self.process.url}/v1/feeds/{self.feed}/events", ("\n".join(lines) + "\n").encode()
        with suppress(aiohttp.ClientConnectionError):
            async with session.post(url, data=data, headers=self._headers) as answer:
                if answer.status != 503:  # it is stopping
                    assert answer.status == 200, await answer.text()
                    self.sent += len(lines)

    async def run(self, session: aiohttp.ClientSession, every_s: float) -> None:
        """Send for ever."""
        while True:
            await self.send(session)
            await asyncio.sleep(every_s)  # the rate of a feed, not a wait


@asynccontextmanager
async def feeding(
    process: Process, feed: str, lag_s: Mapping[str, float], *, every_s: float = EVERY_S, token: str = ""
) -> AsyncIterator[Gateway]:
    """Stations that send; their first events are in when the block begins."""
    gateway = Gateway(process, feed, lag_s, token)
    async with aiohttp.ClientSession() as session:
        await gateway.send(session)
        task = asyncio.create_task(gateway.run(session, every_s))
        try:
            yield gateway
            assert not task.done(), task
        finally:
            task.cancel()
            with suppress(asyncio.CancelledError):
                await task


async def asked(process: Process, path: str, **given: Any) -> Any:
    """A document of the service, while the loop goes on."""
    answer = await asyncio.to_thread(process.ask, path, **given)
    assert answer.status == 200, answer.content
    return answer.json


async def until(page: Page, expression: str, argument: Any = None) -> Any:
    """Ask the page again with each of its frames until the expression gives something true; what it gave."""
    return await (await page.wait_for_function(expression, arg=argument, timeout=DEADLINE_MS)).json_value()


async def live(page: Page) -> None:
    """Wait until the page follows its feed and has drawn it."""
    await expect(page.locator("#link")).to_have_text("● live")
    await until(page, "() => document.getElementById('clock').textContent !== ''")


@asynccontextmanager
async def followed(
    launched: Browser, process: Process, feed: str, lag_s: Mapping[str, float]
) -> AsyncIterator[tuple[Gateway, Page]]:
    """Stations that send to a feed, and a page that follows it."""
    async with feeding(process, feed, lag_s) as gateways, page_of(launched, f"{process.url}/?feed={feed}") as page:
        await live(page)
        yield gateways, page


def says(page: Page) -> Locator:
    """The sentence on top."""
    return page.locator("#says")


async def shoot(page: Page, folder: Path, name: str, *, whole: bool = True) -> None:
    """Everything on the page is drawn; with $STRANDLINE_SHOTS (0.4 s each) a picture is kept for people to look at."""
    if whole:  # what is out of sight is not drawn
        await page.evaluate("""async () => {
          const frame = () => new Promise((done) => requestAnimationFrame(() => requestAnimationFrame(done)));
          const sheet = new CSSStyleSheet(); // of its own: one that is changed heeds no change of the window's size
          sheet.replaceSync(".panel { content-visibility: visible !important }");
          document.adoptedStyleSheets = [sheet];
          for (let y = 0; y < document.body.scrollHeight; y += 800) { scrollTo(0, y); await frame(); }
          scrollTo(0, 0);
          await frame();
        }""")
    if os.environ.get("STRANDLINE_SHOTS"):
        await page.screenshot(path=folder / f"{name}.png", full_page=whole)
    if whole:
        await page.evaluate("() => { document.adoptedStyleSheets = []; }")


async def carry_out(page: Page, done: str | re.Pattern[str], reason: str = "The radio link is down.") -> None:
    """Fill in the dialog that is open, send it, and wait for the word that it was done."""
    await page.locator("#act-who").fill("night shift")
    await page.locator("#act-reason").fill(reason)
    await page.locator("#act-do").click()
    await expect(page.locator("#act")).to_be_hidden()
    await expect(page.locator("#done")).to_have_text(done)


async def inked(page: Page, rows: Iterable[int]) -> list[int]:
    """How many pixels at the right of these lanes have the colour of the watermark and of whoever holds it."""
    script = """(rows) => {
      const canvas = document.getElementById("lanes"), ratio = devicePixelRatio;
      const width = canvas.width, copy = new OffscreenCanvas(width, canvas.height);
      const context = copy.getContext("2d", { willReadFrequently: true });
      context.drawImage(canvas, 0, 0);
      const style = getComputedStyle(document.documentElement);
      const hold = style.getPropertyValue("--hold").trim().match(/[0-9a-f]{2}/gi).map((each) => parseInt(each, 16));
      const em = parseFloat(style.fontSize) * 0.8125, lane = Math.round(em * 2.1), head = 46;
      return rows.map((row) => {
        const x = Math.round(width * 0.8), top = Math.round((head + row * lane) * ratio);
        const { data } = context.getImageData(x, top, width - x, Math.round(lane * ratio));
        let count = 0;
        for (let at = 0; at < data.length; at += 4)
          if (data[at + 3] === 255 && hold.every((each, index) => data[at + index] === each)) count += 1;
        return count;
      });
    }"""
    return list(await page.evaluate(script, list(rows)))
