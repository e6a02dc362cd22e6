"""The dashboard when things break or are guarded: a restart of the service, tokens, its history, the report."""

from __future__ import annotations

import asyncio
import re
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest
from helpers_access import asking, write_tokens
from helpers_browser import page_of
from helpers_dashboard import carry_out, feeding, live, says, service_with, shoot, until
from playwright.async_api import Browser, Page, expect

pytestmark = pytest.mark.asyncio(loop_scope="module")
GATEWAYS = {f"gw-{number}": 0.05 * number for number in range(1, 7)}
FEED = "river-gauges"
REFUSED = ["ERR_CONNECTION_REFUSED", "ERR_INCOMPLETE_CHUNKED_ENCODING", "ERR_CONNECTION_RESET", "ERR_EMPTY_RESPONSE"]
ASKS_FOR_A_TOKEN, MAY_NOT = "status of 401", "status of 403"


async def test_the_page_comes_back_after_a_restart(launched: Browser, tmp_path: Path, shots: Path) -> None:
    """The same port again, so that the page's address stays right; the service is killed, not asked to go."""
    with service_with(tmp_path, {FEED: {}}) as process:
        port = process.url.rsplit(":", 1)[1]
        process.file.write_text(process.file.read_text().replace("127.0.0.1:0", f"127.0.0.1:{port}"))
        async with (
            feeding(process, FEED, GATEWAYS),
            page_of(launched, process.url, expected=[*REFUSED, "status of 503"]) as page,
        ):
            await live(page)
            await expect(says(page)).to_contain_text("Output is")
            await asyncio.to_thread(process.kill)
            await expect(page.locator("#link")).to_have_text("▲ lost")
            await expect(says(page)).to_contain_text(re.compile(r"No word from the service.*What stands here is from"))
            await expect(page.locator("#offers button")).to_have_count(0)
            await shoot(page, shots, "lost")
            before = await page.locator("#clock").text_content()
            await asyncio.to_thread(process.start)
            await expect(page.locator("#link")).to_have_text("● live")
            await expect(page.locator("#clock")).not_to_have_text(str(before))
            await expect(page.locator("#now")).to_have_attribute("data-level", "fine")
            await expect(says(page)).to_contain_text("Output is")
            await shoot(page, shots, "back-again")


async def test_tokens(launched: Browser, tmp_path: Path, shots: Path) -> None:
    roles = {"gateway": {"ingest": [FEED]}, "viewer": {"read": [FEED]}, "operator": {"read": [FEED], "operate": [FEED]}}
    tokens = write_tokens(tmp_path / "tokens.toml", roles)
    with service_with(tmp_path, {FEED: {}}, asking(tmp_path / "tokens.toml")) as process:
        async with (
            feeding(process, FEED, GATEWAYS, token=tokens["gateway"]),
            page_of(launched, process.url, expected=[ASKS_FOR_A_TOKEN, MAY_NOT]) as page,
        ):
            await expect(page.locator("#token")).to_be_visible()
            await expect(page.locator("#token-why")).not_to_be_empty()
            await shoot(page, shots, "token", whole=False)
            await give(page, "strandline_wrong")
            await expect(page.locator("#token-why")).to_have_text("That token was not accepted.")
            await give(page, tokens["viewer"])
            await live(page)
            await page.locator("#drain").click()
            await page.locator("#act-who").fill("night shift")
            await page.locator("#act-reason").fill("Just because.")
            await page.locator("#act-do").click()
            await expect(page.locator("#act-problem")).to_be_visible()
            await expect(page.locator("#act-problem-title")).to_have_text("Forbidden.")
            await expect(page.locator("#act-problem-detail")).to_contain_text("operate")
            await shoot(page, shots, "forbidden", whole=False)
            await page.keyboard.press("Escape")
            await saved_report(page)
            assert not await page.evaluate("() => Object.values(localStorage).some((each) => each.includes('token'))")
            await page.evaluate("() => sessionStorage.clear()")
            await page.reload()
            await give(page, tokens["operator"])
            await live(page)
            await page.locator("#drain").click()
            await carry_out(page, f"Drained {FEED}.")
            act = page.locator("#happened .happened-act")
            await expect(act).to_contain_text("by operator")  # the token's name, whoever one says one is


async def give(page: Page, token: str) -> None:
    """Type a token into the dialog."""
    await page.locator("#token-value").fill(token)
    await page.locator("#token button").click()


async def saved_report(page: Page) -> None:
    """With a token the report is fetched and saved: a link cannot carry the token."""
    async with page.expect_download() as download:
        await page.locator("#report").click()
    found = await download.value
    assert re.fullmatch(rf"report-{FEED}-[0-9TZ-]+\.html", found.suggested_filename)
    text = Path(await found.path()).read_text()
    assert text.lower().startswith("<!doctype html>") and FEED in text
    await expect(page.locator("#done")).to_have_text(f"The report of {FEED} is saved as a file.")


async def test_an_incident_that_is_under_way_shows_its_beginning(
    launched: Browser, tmp_path: Path, shots: Path
) -> None:
    """A page that is opened in the middle knows from the history what was before it."""
    with service_with(tmp_path, {FEED: {"idle_after": "20s"}}) as process:
        async with feeding(process, FEED, GATEWAYS) as gateways, page_of(launched, process.url) as watching:
            await live(watching)
            await until(watching, "() => document.querySelector('.book-released dd').textContent !== '0'")
            # The address tells whole seconds: the next one, for the one under way may have begun before the feed.
            before = datetime.now(UTC) + timedelta(seconds=1)
            del gateways.lag_s["gw-4"]
            await expect(says(watching)).to_contain_text("gw-4 holds it: silent since")
            async with page_of(launched, process.url) as page:
                await live(page)
                await expect(says(page)).to_contain_text("gw-4 holds it: silent since")
                await expect(page.locator("#happened .happened-hold", has_text="gw-4: silent source")).to_be_visible()
                await shoot(page, shots, "opened-late")
            async with page_of(launched, f"{process.url}/?at={before:%Y-%m-%dT%H:%M:%SZ}") as page:
                await live(page)
                await expect(says(page)).to_contain_text(re.compile(r"^At \d\d:\d\d:\d\d the output was .* behind\."))
                assert "gw-4" not in (await says(page).text_content() or "")
                await expect(page.locator("#offers button")).to_have_count(0)
                await shoot(page, shots, "before-it")
            async with watching.context.expect_page() as opened:
                await watching.locator("#report").click()
            report = await opened.value
            await expect(report.locator("body")).to_contain_text("gw-4")
            await shoot(report, shots, "report")
