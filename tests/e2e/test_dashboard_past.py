"""The dashboard at a frozen time, while the service answers slowly, refuses, or has kept nothing of it."""

from __future__ import annotations

import asyncio
import json
from collections.abc import AsyncIterator, Iterator
from datetime import UTC, datetime
from typing import Any

import pytest
import pytest_asyncio
from helpers_browser import page_of
from helpers_dashboard import asked, feeding, says, service_with, until
from helpers_service import Process
from playwright.async_api import Browser, Page, Request, Route, expect

pytestmark = pytest.mark.asyncio(loop_scope="module")
FEED = "river-gauges"
EMPTY = "about:blank"  # what the page asks for can be turned aside before it is opened
HOUR_MS = 3_600_000
REFUSED = {"title": "Too Many Requests", "detail": "Come again in a while.", "status": 429}
FRAMES = "() => new Promise((done) => requestAnimationFrame(() => requestAnimationFrame(() => setTimeout(done))))"


@pytest.fixture(scope="module")
def process(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Process]:
    with service_with(tmp_path_factory.mktemp("past"), {FEED: {}}) as one:
        yield one


@pytest_asyncio.fixture(scope="module", loop_scope="module", autouse=True)
async def feed(process: Process) -> AsyncIterator[None]:
    async with feeding(process, FEED, {"gw-1": 0.05, "gw-2": 0.1}):
        yield


async def kept_ms(process: Process) -> int:
    """An instant at which the feed put something out, and that a step of the history ends with."""
    while True:
        found = await asked(process, f"/v1/feeds/{FEED}/history")
        told = [each for each, watermark in zip(found["t_ms"], found["watermark_ms"], strict=True) if watermark]
        if len(told) > 1:
            return int(told[0]) + 1000
        await asyncio.sleep(0.1)  # asks again; nothing is decided by it


def at(ms: int) -> str:
    """As the page's address tells an instant."""
    return f"{datetime.fromtimestamp(ms / 1000, UTC):%Y-%m-%dT%H:%M:%S}Z"


async def opened(page: Page, process: Process, ms: int, handler: Any) -> None:
    """The page at a time; what it asks of the history goes to the handler."""
    await page.route("**/history?*", handler)
    await page.goto(f"{process.url}/?feed={FEED}&at={at(ms)}")


def the_output_was(page: Page) -> Any:
    return expect(says(page)).to_contain_text("the output was")


async def test_a_time_that_was_refused_at_first_is_shown_later(launched: Browser, process: Process) -> None:
    ms, answers = await kept_ms(process), [429, 503]

    async def handler(route: Route) -> None:
        if answers:
            body = json.dumps({**REFUSED, "title": f"Refused with {answers[0]}"})
            await route.fulfill(status=answers.pop(0), body=body, content_type="application/problem+json")
        else:
            await route.continue_()

    expected = ("status of 429", "status of 503")
    async with page_of(launched, EMPTY, expected=expected) as page:
        await opened(page, process, ms, handler)
        await expect(says(page)).to_contain_text(f"{at(ms)[11:19]} was not given.")
        await expect(page.locator("#next")).to_contain_text("Refused with")
        await expect(page.locator("#next")).to_contain_text("tries again by itself")
        await the_output_was(page)
        await expect(page.locator("#clock")).to_contain_text(at(ms)[11:19])


async def test_an_answer_that_breaks_off_is_asked_for_again(launched: Browser, process: Process) -> None:
    ms, broken = await kept_ms(process), [True]

    async def handler(route: Route) -> None:
        if broken:
            await route.fulfill(status=200, body='{"step_s": 1, "t_ms": [', content_type="application/json")
            broken.clear()
        else:
            await route.continue_()

    async with page_of(launched, EMPTY) as page:
        await opened(page, process, ms, handler)
        await the_output_was(page)


async def test_what_may_not_be_seen_is_said_and_not_asked_for_again(launched: Browser, process: Process) -> None:
    questions: list[str] = []

    async def handler(route: Route) -> None:
        questions.append(route.request.url)
        body = json.dumps({"title": "Forbidden", "detail": "This token may not read.", "status": 403})
        await route.fulfill(status=403, body=body, content_type="application/problem+json")

    async with page_of(launched, EMPTY, expected=("status of 403",)) as page:
        await opened(page, process, await kept_ms(process), handler)
        await expect(page.locator("#next")).to_have_text("Forbidden. This token may not read.")
        await expect(says(page)).to_contain_text("was not given")
        assert len(questions) == 1


async def test_an_answer_that_was_overtaken_does_not_replace_the_newer_one(launched: Browser, process: Process) -> None:
    """The first time, of which nothing is kept, is told of last."""
    ms, go = await kept_ms(process), asyncio.Event()
    first: list[Request] = []

    async def handler(route: Route) -> None:
        if not first:
            first.append(route.request)
            await go.wait()
        await route.continue_()

    async with page_of(launched, EMPTY) as page:
        await opened(page, process, ms - HOUR_MS, handler)
        await expect(says(page)).to_contain_text("is being fetched")
        await page.evaluate(
            """(query) => { history.pushState(null, "", query); dispatchEvent(new PopStateEvent("popstate")); }""",
            f"/?feed={FEED}&at={at(ms)}",
        )
        await the_output_was(page)
        async with page.expect_event("requestfinished", lambda request: request == first[0]):
            go.set()
        await page.evaluate(FRAMES)
        await page.evaluate(FRAMES)
        await the_output_was(page)
        assert "unknown" not in (await page.locator("body").get_attribute("class") or "")


async def test_a_time_of_which_nothing_is_kept_stands_on_the_clock(launched: Browser, process: Process) -> None:
    before = await kept_ms(process) - HOUR_MS
    async with page_of(launched, f"{process.url}/?feed={FEED}&at={at(before)}") as page:
        await expect(says(page)).to_have_text(f"Nothing is kept of {at(before)[:10]} {at(before)[11:19]}.")
        await expect(page.locator("#clock")).to_contain_text(at(before)[11:19])
        await expect(page.locator("#next")).to_contain_text("back to live")


RECORD = """async ([history, moments, at_ms]) => {
  const { Record } = await import("/dashboard/record.js"), record = new Record();
  record.load(history);
  for (const moment of moments) record.append(moment);
  return record.momentAt(at_ms, moments.at(-1))?.now_ms;
}"""


async def test_a_time_within_the_first_step_is_kept_as_its_end(launched: Browser, process: Process) -> None:
    """Steps of three minutes, where a day is seen: what came before the first one ended is known as of its end."""
    found = await asked(process, f"/v1/feeds/{FEED}/history")
    first_ms = found["t_ms"][0]
    async with page_of(launched, f"{process.url}/?feed={FEED}") as page:
        for step_s, at_ms, shown_ms in [
            (180, first_ms + 60_000, first_ms + 180_000),
            (180, first_ms - 1, None),
            (1, first_ms, first_ms + 1_000),
        ]:
            given = [{**found, "step_s": step_s}, [], at_ms]
            assert await page.evaluate(RECORD, given) == shown_ms, (step_s, at_ms - first_ms)


async def test_moments_within_a_step_that_is_not_over_are_kept(launched: Browser, process: Process) -> None:
    """The last step of a day's history ends minutes from now; what comes until then is known to half a second."""
    found = await asked(process, f"/v1/feeds/{FEED}/history")
    last_ms = found["t_ms"][-1]
    found = {**found, "step_s": 180}
    plain = {
        **{"watermark_ms": last_ms, "newest_ms": last_ms, "slack_s": 1, "acts": [], "lanes": []},
        **{"ledger": {"received": 0, "duplicate": 0, "quarantined": 0, "late": 0}},
        **{"lateness": {"edges_s": [], "counts": []}, "hold": {"why": "slack", "source": None, "since_ms": last_ms}},
    }
    async with page_of(launched, f"{process.url}/?feed={FEED}") as page:
        await until(page, "() => document.getElementById('clock').textContent !== ''")
        moments = [{**plain, "now_ms": last_ms + 500 * number} for number in (5, 6, 7)]
        assert await page.evaluate(RECORD, [found, moments, last_ms + 3_100]) == last_ms + 3_000
