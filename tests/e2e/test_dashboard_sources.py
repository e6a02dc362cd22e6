"""The dashboard with many sources and hostile ones: search, what a page costs, names that are text and nothing else."""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path

import pytest
from helpers_browser import page_of, work_of
from helpers_dashboard import asked, carry_out, feeding, live, says, service_with, shoot, until
from helpers_service import Process
from playwright.async_api import Browser, Page, expect

pytestmark = pytest.mark.asyncio(loop_scope="module")
FEEDS = {"many": {}, "hostile": {"idle_after": "16s"}}
MANY = {f"gauge-{number:04}": (number % 40) * 0.02 for number in range(2_000)}
SHOWS_ALL = """(names) => {
  const shown = [...document.querySelectorAll("#lanes-rows th")].map((one) => one.textContent);
  return names.every((name) => shown.includes(name));
}"""
MEASURED_S = 2
NEXT_SECOND = """(before) => { const now = document.getElementById("clock").textContent;
  return now !== before && now; }"""

# What a page could take for markup, an attribute's end, an address, a template or a direction.
HOSTILE = {
    "markup": "<img src=x onerror=alert(1)><script>alert(2)</script>",
    "entity": "&lt;b&gt;&amp;amp;",
    "quotes": '"\' onmouseover="alert(3)" `${alert(4)}`',
    "override": "gw-\u202e3-wg\u202d-\u2066end",
    "long": "x" * 256,
    "wide": "\U0001f30a" * 64,  # 256 bytes of UTF-8
    "control": "a\x01b\x07c\x1bd\te\rf\ng\x7fh\x85i",
    "emoji": "\U0001f468\u200d\U0001f469\u200d\U0001f467 \U0001f3f3\ufe0f\u200d\U0001f308",
    "stacked": "z" + "\u0301" * 100,
    "arabic": "محطة النهر",
    "blank": "   ",
    "proto": "__proto__",
}
STEERING = "\u202a\u202b\u202c\u202d\u202e\u2066\u2067\u2068\u2069\u200e\u200f\u061c"


@pytest.fixture(scope="module")
def process(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Process]:
    with service_with(tmp_path_factory.mktemp("sources"), FEEDS) as one:
        yield one


async def shown(page: Page) -> list[str]:
    """The sources of the table, as they are shown."""
    return list(await page.locator("#lanes-rows th").all_text_contents())


async def test_two_thousand_sources_and_search(launched: Browser, process: Process, shots: Path) -> None:
    async with feeding(process, "many", MANY, every_s=0.5), page_of(launched, f"{process.url}/?feed=many") as page:
        await live(page)
        await expect(page.locator("#lanes-rows tr")).to_have_count(20)
        await shoot(page, shots, "many")
        await expect(page.locator("#rest")).to_contain_text("And 1,980 more sources")
        await page.locator("#search").fill("GAUGE-123")
        await expect(page.locator("#found")).to_have_text("10 sources found; the holder and grey ones beside them.")
        await until(page, SHOWS_ALL, [f"gauge-123{digit}" for digit in range(10)])
        assert "q=GAUGE-123" in page.url
        await shoot(page, shots, "search")
        await page.locator("#search").fill("no such gauge")
        await expect(page.locator("#found")).to_have_text("0 sources found; the holder and grey ones beside them.")
        await page.locator("#search").fill("")
        await expect(page.locator("#found")).to_be_empty()
        await page.locator("#lanes-many").select_option("100")
        await expect(page.locator("#lanes-rows tr")).to_have_count(100)


async def test_what_a_page_costs(launched: Browser, process: Process, shots: Path) -> None:
    """20 lanes of 2,000 sources: a figure for whoever looks at the build, no bar."""
    async with feeding(process, "many", MANY, every_s=0.5), page_of(launched, f"{process.url}/?feed=many") as page:
        await live(page)
        await expect(page.locator("#lanes-rows tr")).to_have_count(20)
        async with work_of(page) as seconds:
            worked_s, begin_ms = await seconds(), await page.evaluate("() => performance.now()")
            text = await page.locator("#clock").text_content()
            for _ in range(MEASURED_S):
                text = await until(page, NEXT_SECOND, text)
            worked_s = await seconds() - worked_s
            took_s = (await page.evaluate("() => performance.now()") - begin_ms) / 1000
        heap_bytes = await page.evaluate("() => performance.memory.usedJSHeapSize")
    cost = {"sources": len(MANY), "lanes": 20, "seconds": round(took_s, 1), "heap_mb": round(heap_bytes / 1e6, 1)}
    cost["main_thread_percent"] = round(100 * worked_s / took_s, 1)
    (shots / "cost.json").write_text(json.dumps(cost))
    print(f"a page that is looked at: {cost}")
    assert 0 < worked_s < took_s  # it was measured


async def test_hostile_names_are_text(launched: Browser, process: Process, shots: Path) -> None:
    names = list(HOSTILE.values())
    async with feeding(process, "hostile", dict.fromkeys(names, 0.0)) as gateways:
        sources = (await asked(process, "/v1/feeds/hostile/sources"))["sources"]
        assert {source["source"] for source in sources} == set(names)  # all of them arrived as they were sent
        async with page_of(launched, f"{process.url}/?feed=hostile") as page:
            await live(page)
            await expect(page.locator("#lanes-rows tr")).to_have_count(len(names))
            await expect_nothing_made(page)
            texts = await shown(page)
            assert not [text for text in texts if any(mark in text for mark in STEERING)]
            assert not [text for text in texts if any(ord(mark) < 32 or 127 <= ord(mark) < 160 for mark in text)]
            assert HOSTILE["entity"] in texts and HOSTILE["emoji"] in texts and HOSTILE["arabic"] in texts
            assert "gw-\ufffd3-wg\ufffd-\ufffdend" in texts
            assert all(len(text) <= 80 for text in texts)
            await shoot(page, shots, "hostile")
            del gateways.lag_s[HOSTILE["quotes"]]
            await page.locator("#as-table").click()
            await shoot(page, shots, "hostile-table")
            await excuse_hostile(page)
            await shoot(page, shots, "hostile-acts")


async def excuse_hostile(page: Page) -> None:
    """Excuse a hostile source with a hostile reason: dialog, toast and the list of what happened show text."""
    await expect(says(page)).to_contain_text("onmouseover")
    await page.locator("#offers button").click()
    await expect_nothing_made(page)
    await carry_out(page, f"Excused {await quoted(page)}.", '<i id="made">\u202e"because</i>')
    await expect(page.locator("#happened .happened-act")).to_contain_text('<i id="made">\ufffd"because</i>')
    await expect_nothing_made(page)


async def quoted(page: Page) -> str:
    """The source that the dialog is about, as it is shown."""
    return str(await page.locator("#act-title bdi").text_content())


async def expect_nothing_made(page: Page) -> None:
    """No element and no attribute was made of a name, and nothing ran."""
    made = """() => [...document.querySelectorAll("img, script:not([src]), iframe, svg, b, i, object, embed, #made")]
      .map((one) => one.outerHTML)"""
    assert await page.evaluate(made) == []
    handlers = """() => [...document.querySelectorAll("*")].flatMap((one) => one.getAttributeNames())
      .filter((name) => name.startsWith("on"))"""
    assert await page.evaluate(handlers) == []
    assert await page.evaluate("() => document.querySelectorAll('body script').length") == 0
