"""The dashboard during an incident, in a real browser on a real service: who holds the feed, and acting on it."""

from __future__ import annotations

import re
from collections.abc import Iterator
from pathlib import Path

import pytest
from helpers_browser import page_of
from helpers_dashboard import asked, carry_out, feeding, followed, inked, live, says, service_with, shoot, until
from helpers_service import Process
from playwright.async_api import Browser, expect

pytestmark = pytest.mark.asyncio(loop_scope="module")
SILENT = {"idle_after": "20s"}  # a source is called silent after a quarter of it
FEEDS: dict[str, dict[str, object]] = {
    **{name: {} for name in ("calm", "slow", "drained", "slack", "paused")},
    "silent": SILENT,
    "none": {"slack": "0s"},
    "expected": {"expect_sources": ["gw-1", "gw-9"], "idle_after": "2s"},
}
GATEWAYS = {f"gw-{number}": 0.05 * number for number in range(1, 7)}


@pytest.fixture(scope="module")
def process(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Process]:
    with service_with(tmp_path_factory.mktemp("incident"), FEEDS) as one:
        yield one


async def test_lanes_move(launched: Browser, process: Process, shots: Path) -> None:
    async with feeding(process, "calm", GATEWAYS), page_of(launched, f"{process.url}/?feed=calm") as page:
        await live(page)
        await expect(says(page)).to_contain_text("Output is")
        await expect(page.locator("#now")).to_have_attribute("data-level", "fine")
        picture = "() => document.getElementById('lanes').toDataURL()"
        before, clock = await page.evaluate(picture), await page.locator("#clock").text_content()
        for _ in range(3):
            another = f"(before) => {{ const now = ({picture})(); return now !== before && now; }}"
            before = await until(page, another, before)
        assert await page.locator("#clock").text_content() != clock
        await shoot(page, shots, "calm")


async def test_the_holder_is_named_and_stands_out(launched: Browser, process: Process, shots: Path) -> None:
    lags = {**GATEWAYS, "gw-slow": 25.0}
    async with feeding(process, "slow", lags), page_of(launched, f"{process.url}/?feed=slow") as page:
        await live(page)
        await expect(says(page)).to_contain_text(re.compile(r"gw-slow holds it, for .*: its newest event is 2\d\ss"))
        await expect(page.locator("#now")).to_have_attribute("data-level", "watch")
        await expect(page.locator(".reach-upstream")).to_have_attribute("data-trouble", "watch")
        await expect(page.locator("#offers button")).to_have_text("Excuse gw-slow…")
        first, *others = await inked(page, range(5))
        assert first > 500 and max(others) == 0
        row = page.locator("#lanes-rows tr").first
        await expect(row).to_have_class("role-holding")
        await expect(row.locator("th")).to_have_text("gw-slow")
        await shoot(page, shots, "slow")


async def test_a_silent_source_is_named_and_excused(launched: Browser, process: Process, shots: Path) -> None:
    async with followed(launched, process, "silent", GATEWAYS) as (gateways, page):
        del gateways.lag_s["gw-3"]
        await expect(says(page)).to_contain_text(re.compile(r"gw-3 holds it: silent since \d\d:\d\d:\d\d \(\d+"))
        await expect(page.locator("#happened .happened-hold", has_text="gw-3: silent source")).to_be_visible()
        await shoot(page, shots, "silent")
        found = await asked(process, "/v1/feeds/silent")
        assert (found["hold"]["source"], found["hold"]["why"]) == ("gw-3", "silent_source")
        await page.locator("#offers button").click()
        await expect(page.locator("#act-title")).to_have_text("Excuse gw-3")
        await shoot(page, shots, "excuse-dialog", whole=False)
        await carry_out(page, "Excused gw-3.", "The mast was struck by lightning.")
        await expect(says(page)).not_to_contain_text("holds it")
        await expect(says(page)).to_contain_text("Output is current, but gw-3 is excused and has been silent for")
        act = page.locator("#happened .happened-act")
        await expect(act).to_contain_text("excuse gw-3 by night shift: The mast was struck by lightning.")
        assert "gw-6" not in (await page.locator("#happened").text_content() or "")  # the slowest when all was well
        assert (await asked(process, "/v1/feeds/silent"))["hold"]["source"] != "gw-3"
        await shoot(page, shots, "excused")


async def test_drain(launched: Browser, process: Process) -> None:
    async with page_of(launched, f"{process.url}/?feed=drained") as page:
        async with feeding(process, "drained", {"gw-1": 0.0, "gw-2": 30.0}):
            await live(page)
            await expect(says(page)).to_contain_text("gw-2 holds it")
        await page.locator("#drain").click()
        await expect(page.locator("#act-title")).to_have_text("Drain drained")
        await carry_out(page, "Drained drained.")
        await expect(page.locator("#runs-says")).to_have_text("0 open runs, 0 events held.")
        found = await asked(process, "/v1/feeds/drained")
        assert found["ledger"]["buffered"] == 0 and found["ledger"]["released"] > 0
        await expect(page.locator("#happened .happened-act")).to_contain_text("drain")


async def test_the_slack_is_set_and_ended(launched: Browser, process: Process, shots: Path) -> None:
    async with feeding(process, "slack", GATEWAYS), page_of(launched, f"{process.url}/?feed=slack") as page:
        await live(page)
        await page.locator("#set-slack").click()
        await page.locator("#act-slack-value").fill("2500 ms")
        await page.locator("#act-slack-for").fill("30m")
        await shoot(page, shots, "slack-dialog", whole=False)
        await carry_out(page, "Set the slack of slack.")
        await expect(page.locator("#behind-says")).to_contain_text("slack 2.5 s")
        assert (await asked(process, "/v1/feeds/slack"))["slack_s"] == 2.5
        await page.locator("#end-slack").click()
        await carry_out(page, "The configured slack of slack is in force again.")
        await expect(page.locator("#behind-says")).to_contain_text("slack 1 s")
        await expect(page.locator("#end-slack")).to_be_hidden()
        assert (await asked(process, "/v1/feeds/slack"))["slack_s"] == 1.0
        acts = page.locator("#happened .happened-act")
        await expect(acts.first).to_contain_text("as configured again")
        await expect(acts.last).to_contain_text("to 2.5 s, until")


async def test_no_slack_at_all_has_its_share_too(launched: Browser, process: Process, shots: Path) -> None:
    """A station with two radios of which one is 0.4 s slower: with a slack of 0 half of the events are late."""
    fast, slow = {"gw-1": 0.0}, {"gw-1": 0.4}
    async with (
        feeding(process, "none", fast),
        feeding(process, "none", slow),
        page_of(launched, f"{process.url}/?feed=none") as page,
    ):
        await live(page)
        words = re.compile(r"With 1\ss you would have 0\s% late.*; now 0\ss: [45]\d(\.\d)?\s%")
        await expect(page.locator("#slacks-says")).to_have_text(words)
        await until(page, "() => Number(document.querySelector('.book-late dd').textContent) > 5")
        await expect(page.locator("#lanes-rows tr td").nth(5)).to_contain_text("newest 0.4 s old on arrival")
        await expect(says(page)).to_contain_text(re.compile(r"[45]\d(\.\d)?\s% of what came just now was late\."))
        await expect(page.locator("#offers button")).to_have_text("Set the slack of none…")
        await shoot(page, shots, "late")


async def test_a_paused_sink_is_shown_and_resumed(launched: Browser, process: Process, shots: Path) -> None:
    async with feeding(process, "paused", GATEWAYS), page_of(launched, f"{process.url}/?feed=paused") as page:
        await live(page)
        sink = page.locator(".sink", has_text="sqlite")
        await expect(sink).to_contain_text("taking")
        await sink.get_by_role("button").click()
        await carry_out(page, "Paused sqlite.", "The disk is being swapped.")
        words = re.compile(r"Sink sqlite is paused by night shift .*The disk is being swapped")
        await expect(says(page)).to_contain_text(words)
        await expect(page.locator(".reach-downstream")).to_have_attribute("data-trouble", "watch")
        await expect(sink).to_have_attribute("data-state", "paused")
        await expect(sink).to_contain_text("by night shift")
        await expect(sink.locator(".sink-waits").last).to_contain_text("wait")
        await shoot(page, shots, "paused")
        await page.locator("#offers button").click()
        await expect(page.locator("#act-title")).to_have_text("Resume sink sqlite")
        await carry_out(page, "Resumed sqlite.", "The new disk is in.")
        await expect(sink).to_have_attribute("data-state", "fine")
        await expect(page.locator("#now")).to_have_attribute("data-level", "fine")


async def test_an_expected_source_that_never_spoke_stays_in_sight(
    launched: Browser, process: Process, shots: Path
) -> None:
    async with feeding(process, "expected", {"gw-1": 0.0}), page_of(launched, f"{process.url}/?feed=expected") as page:
        await live(page)
        await expect(says(page)).to_contain_text("gw-9 never came though expected; the output goes on without.")
        row = page.locator("#lanes-rows tr", has_text="gw-9")
        await expect(row).to_contain_text("expected, not heard yet")
        await shoot(page, shots, "expected")
        await page.locator("#offers button").click()
        await carry_out(page, "Excused gw-9.", "It is to be mounted next week.")
        await expect(row).to_contain_text("excused")
        await expect(page.locator("#now")).to_have_attribute("data-level", "fine")
