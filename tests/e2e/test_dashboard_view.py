"""The dashboard's view in a real browser: time, address, colours, keyboard, table, sizes."""

from __future__ import annotations

import re
from collections.abc import AsyncIterator, Iterator
from itertools import product
from pathlib import Path
from urllib.parse import parse_qs, urlsplit

import pytest
import pytest_asyncio
from helpers_browser import page_of
from helpers_dashboard import asked, carry_out, feeding, live, says, service_with, shoot, until
from helpers_service import Process
from playwright.async_api import Browser, Page, expect

pytestmark = pytest.mark.asyncio(loop_scope="module")
GATEWAYS = {f"gw-{number}": 0.05 * number for number in range(1, 7)}
LAGS = {**GATEWAYS, "gw-slow": 25.0}


@pytest.fixture(scope="module")
def process(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Process]:
    with service_with(
        tmp_path_factory.mktemp("view"), {"slow": {}, "other": {}, "still": {}, "keys": {"idle_after": "20s"}}
    ) as one:
        yield one


@pytest_asyncio.fixture(scope="module", loop_scope="module", autouse=True)
async def feeds(process: Process) -> AsyncIterator[None]:
    async with feeding(process, "slow", LAGS), feeding(process, "other", GATEWAYS):
        yield


def view_of(page: Page) -> dict[str, str]:
    """The view that the page's address names."""
    return {name: values[0] for name, values in parse_qs(urlsplit(page.url).query).items()}


async def test_a_page_that_complains_fails_its_test(launched: Browser, process: Process) -> None:
    """What all the others rely on: errors on the console, errors thrown, and breaches of the policy are seen."""
    address = f"{process.url}/?feed=other"
    for wrong, said in [
        ("() => document.head.append(document.createElement('style'))", "policy: style-src-elem inline"),
        ("() => { document.body.setAttribute('style', 'color: red'); }", "policy: style-src-attr inline"),
        ("() => { const one = new Image(); one.src = 'http://127.0.0.1:9/x.png'; }", "policy: img-src"),
        ("() => { setTimeout(() => { throw new Error('on purpose'); }); }", "thrown: on purpose"),
        ("() => console.warn('on purpose')", "warning: on purpose"),
    ]:
        with pytest.raises(AssertionError, match=said):
            async with page_of(launched, address) as page:
                await page.evaluate(wrong)
                await live(page)


async def test_freeze_scroll_reload_and_back(launched: Browser, process: Process, shots: Path) -> None:
    async with page_of(launched, f"{process.url}/?feed=slow") as page:
        await live(page)
        await until(page, "() => document.querySelectorAll('#lanes-rows tr').length === 7")
        await page.locator("#freeze").click()
        await expect(page.locator("#frozen")).to_contain_text("Frozen at")
        frozen, clock = view_of(page)["at"], await page.locator("#clock").text_content()
        picture = await page.evaluate("() => document.getElementById('lanes').toDataURL()")
        await expect(page.locator("#frozen")).to_contain_text(re.compile(r", [2-9](\.\d)?\ss ago"))
        assert await page.locator("#clock").text_content() == clock  # time goes on, but not here
        assert await page.evaluate("() => document.getElementById('lanes').toDataURL()") == picture
        await expect(says(page)).to_contain_text("the output was")
        await shoot(page, shots, "frozen")
        await page.locator("#behind").locator("..").focus()
        await page.keyboard.press("ArrowLeft")
        assert view_of(page)["at"] < frozen
        await page.locator("#window").select_option("900")
        await page.locator("#zone").click()
        before = view_of(page)
        await page.reload()
        await expect(page.locator("#frozen")).to_contain_text("Frozen at")
        assert view_of(page) == before and before["at"] < frozen
        assert (before["window"], before["zone"]) == ("900", "local")
        await expect(page.locator("#window")).to_have_value("900")
        await page.locator("#feed").select_option("other")
        await expect(page.locator("#clock")).not_to_be_empty()
        assert view_of(page)["feed"] == "other"
        await page.go_back()
        await expect(page.locator("#feed")).to_have_value("slow")
        assert view_of(page) == before
        await page.locator("#live").click()
        await expect(says(page)).to_contain_text("gw-slow holds it")


async def test_dark_as_the_system_has_it_and_by_the_button(launched: Browser, process: Process, shots: Path) -> None:
    paper = "() => getComputedStyle(document.body).backgroundColor"
    async with page_of(launched, f"{process.url}/?feed=slow", color_scheme="dark") as page:
        await live(page)
        dark = await page.evaluate(paper)
        await shoot(page, shots, "dark")
        await page.emulate_media(color_scheme="light")
        light = await page.evaluate(paper)
        assert (dark, light) == ("rgb(14, 24, 32)", "rgb(251, 248, 241)")
        await expect(page.locator("#theme")).to_have_text("Colours: system")
        for words, colour in [("light", light), ("dark", dark)]:
            await page.locator("#theme").click()
            await expect(page.locator("#theme")).to_have_text(f"Colours: {words}")
            assert await page.evaluate(paper) == colour
        await page.reload()
        assert await page.evaluate(paper) == dark
        await expect(page.locator("#theme")).to_have_text("Colours: dark")


NAME = """(one) => one === document.body ? "" : one.id || one.querySelector(":scope > canvas")?.id ||
  `${one.tagName} ${one.textContent.trim().slice(0, 40)}`"""


async def focused(page: Page) -> str:
    """What has the focus: its id or words; it must be marked by an outline that can be seen (WCAG 2.2, 2.4.7)."""
    what, width, style = await page.evaluate(
        f"""() => {{ const one = document.activeElement, style = getComputedStyle(one);
        return [({NAME})(one), parseFloat(style.outlineWidth), style.outlineStyle]; }}"""
    )
    assert not what or (style == "solid" and width >= 2), (what, width, style)
    return str(what)


REACHABLE = f"""() => [...document.querySelectorAll("a[href], button, select, input, [tabindex='0']")]
  .filter((one) => one.checkVisibility() && !one.disabled && one.tabIndex >= 0 && !one.closest("dialog:not([open])"))
  .map({NAME})"""


async def test_keyboard_only(launched: Browser, process: Process, shots: Path) -> None:
    async with feeding(process, "keys", GATEWAYS) as gateways, page_of(launched, f"{process.url}/?feed=keys") as page:
        await live(page)
        del gateways.lag_s["gw-2"]
        reached: list[str] = []
        await page.keyboard.press("Tab")
        while (what := await focused(page)) and what not in reached and len(reached) < 80:
            reached.append(what)
            await page.keyboard.press("Tab")
        assert reached[0] == "A Skip to the state of the feed"
        reachable = await page.evaluate(REACHABLE)
        assert set(reachable) <= {*reached, *[each for each in reachable if "Excuse" in each]}
        order = ["feed", "zone", "theme", "freeze", "earlier", "window", "report", "search", "lanes-many", "as-table"]
        order += ["lanes-box", "BUTTON Pause…", "slacks-box", "set-slack", "drain"]
        assert [each for each in reached if each in order] == order
        await expect(says(page)).to_contain_text("gw-2 holds it: silent since")
        await page.locator("#lanes-box").focus()
        await page.keyboard.press("ArrowDown")
        await expect(page.locator("#chosen-says")).to_contain_text("gw-2: holds the output; newest event")
        await page.keyboard.press("Enter")
        await expect(page.locator("#act-title")).to_have_text("Excuse gw-2")
        assert await focused(page) == "act-who"
        await page.keyboard.press("Escape")
        await expect(page.locator("#act")).to_be_hidden()
        assert await focused(page) == "lanes-box"
        await page.keyboard.press("Enter")
        for text in ("night shift", "The battery is flat."):
            await page.keyboard.type(text)
            await page.keyboard.press("Tab")
        assert await focused(page) == "act-cancel"
        await page.keyboard.press("Tab")
        assert await focused(page) == "act-do"
        await shoot(page, shots, "keyboard", whole=False)
        await page.keyboard.press("Enter")
        await expect(page.locator("#done")).to_have_text("Excused gw-2.")
        await expect(says(page)).to_contain_text("Output is current, but gw-2 is excused")


async def test_every_act_can_be_opened_and_left_by_keys(launched: Browser, process: Process) -> None:
    async with page_of(launched, f"{process.url}/?feed=slow") as page:
        await live(page)
        pause = page.locator(".sink", has_text="sqlite").get_by_role("button")
        for button in (page.locator("#offers button"), page.locator("#set-slack"), page.locator("#drain"), pause):
            await button.focus()
            await page.keyboard.press("Enter")
            await expect(page.locator("#act")).to_be_visible()
            assert (await focused(page)).startswith("act-")
            await page.keyboard.press("Escape")
            await expect(page.locator("#act")).to_be_hidden()
            await expect(button).to_be_focused()
        assert (await asked(process, "/v1/feeds/slow"))["slack_set"] is None


async def test_no_motion_where_none_is_wanted(launched: Browser, process: Process) -> None:
    moving = """() => [...document.querySelectorAll("*")].filter((one) => {
      const style = getComputedStyle(one);
      const long = (text) => text.split(",").some((each) => parseFloat(each) > 0);
      return long(style.transitionDuration) || (style.animationName !== "none" && long(style.animationDuration));
    }).map((one) => one.id || one.tagName)"""
    async with page_of(launched, f"{process.url}/?feed=other", reduced_motion="reduce") as page:
        await live(page)
        await page.locator("#drain").click()
        await carry_out(page, "Drained other.")
        assert await page.evaluate(moving) == []
        assert await page.evaluate("() => document.getAnimations().length") == 0
        assert await page.evaluate("() => getComputedStyle(document.documentElement).scrollBehavior") == "auto"


async def test_the_table_tells_what_the_service_tells(launched: Browser, process: Process, shots: Path) -> None:
    """Figures of a feed that stands still, so that both can be asked one after the other."""
    async with feeding(process, "still", LAGS, every_s=3600):
        pass  # its first events are in
    async with page_of(launched, f"{process.url}/?feed=still&view=table") as page:
        await live(page)
        await expect(page.locator("#lanes-table")).to_be_visible()
        await expect(page.locator("#lanes-box")).to_be_hidden()
        found = await asked(process, "/v1/feeds/still")
        books = {word: str(found["ledger"][word]) for word in ("received", "released", "late", "duplicate", "buffered")}
        for word, number in books.items():
            await expect(page.locator(f".book-{word} dd")).to_have_text(number)
        sources = (await asked(process, "/v1/feeds/still/sources"))["sources"]
        rows = page.locator("#lanes-rows tr")
        assert {source["source"] for source in sources} == set(LAGS)
        await expect(rows).to_have_count(len(LAGS))
        assert found["hold"]["source"] == "gw-slow"
        await expect(rows.first).to_contain_text("gw-slow")
        for source in sources:
            cells = rows.filter(has=page.get_by_text(source["source"], exact=True)).locator("td")
            await expect(cells.nth(1)).to_have_text(source["newest"][11:19])
        held = sum(int(text) for text in await page.locator("#lanes-rows td:nth-of-type(5)").all_text_contents())
        assert held == found["ledger"]["buffered"]
        await shoot(page, shots, "table")


@pytest.mark.parametrize(
    ("name", "width", "height", "scale"),
    [("wide", 1440, 900, 1), ("zoomed-200", 720, 450, 2), ("phone", 380, 800, 2), ("narrowest", 320, 640, 1)],
)
async def test_sizes(
    launched: Browser, process: Process, shots: Path, name: str, width: int, height: int, scale: int
) -> None:
    """WCAG 2.2, 1.4.10: no scrolling in two directions down to 320 CSS pixels; 200 % zoom is half the pixels."""
    address = f"{process.url}/?feed=slow"
    async with page_of(launched, address, width=width, height=height, device_scale_factor=scale) as page:
        await live(page)
        await expect(says(page)).to_contain_text("gw-slow holds it")
        beyond = """() => [...document.querySelectorAll("body *")].filter((one) => one.checkVisibility() &&
          !one.closest(".hidden, .skip, .table-box") && one.getBoundingClientRect().right > innerWidth + 1)
          .map((one) => one.id || one.className || one.tagName)"""
        assert await page.evaluate(beyond) == []
        assert await page.evaluate("() => document.documentElement.scrollWidth <= innerWidth")
        await shoot(page, shots, name)
        await shoot(page, shots, f"{name}-first-look", whole=False)


TEXTS = ("ink", "quiet", "fine", "alarm-text")
PAIRS = [*product(TEXTS, ("paper", "panel")), ("ink", "released"), ("hold-text", "hold"), ("late-text", "late")]
SHAPES = ["strand", "late", "silent", "warn", "hold", "edge", "fine"]


def luminance(colour: str) -> float:
    """Relative luminance of #rrggbb: WCAG 2.2, definitions."""
    parts = [int(colour[at : at + 2], 16) / 255 for at in (1, 3, 5)]
    red, green, blue = (part / 12.92 if part <= 0.04045 else ((part + 0.055) / 1.055) ** 2.4 for part in parts)
    return 0.2126 * red + 0.7152 * green + 0.0722 * blue


def contrast(one: str, other: str) -> float:
    """The contrast ratio of two colours: WCAG 2.2, definitions."""
    darker, lighter = sorted((luminance(one), luminance(other)))
    return (lighter + 0.05) / (darker + 0.05)


@pytest.mark.parametrize("scheme", ["light", "dark"])
async def test_contrast(launched: Browser, process: Process, scheme: str) -> None:
    """WCAG 2.2: 1.4.3 (text, 4.5:1) and 1.4.11 (shapes that carry a meaning, 3:1), from the sheet's own colours."""
    assert contrast("#000000", "#ffffff") == pytest.approx(21)  # WCAG 2.2: from 1 to 21
    async with page_of(launched, f"{process.url}/?feed=slow", color_scheme=scheme) as page:
        names = sorted({*SHAPES, *(name for pair in PAIRS for name in pair)})
        script = "(names) => names.map((name) => getComputedStyle(document.body).getPropertyValue(`--${name}`).trim())"
        colour = dict(zip(names, await page.evaluate(script, names), strict=True))
    weak = {pair: ratio for pair in PAIRS if (ratio := contrast(*(colour[name] for name in pair))) < 4.5}
    weak |= {(name, "paper"): ratio for name in SHAPES if (ratio := contrast(colour[name], colour["paper"])) < 3}
    assert not weak
