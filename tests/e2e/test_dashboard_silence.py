"""The dashboard when a source is dead and not waited for, when all that comes is a repeat; its sentences and axes.

Sentences and scales are pure modules: the page's own are called in the browser, with moments made here.
"""

from __future__ import annotations

import re
from collections.abc import AsyncIterator, Iterator
from pathlib import Path
from typing import Any

import pytest
import pytest_asyncio
from helpers_browser import page_of
from helpers_dashboard import asked, carry_out, feeding, followed, live, says, service_with, shoot, until
from helpers_service import Process
from playwright.async_api import Browser, Page, expect

pytestmark = pytest.mark.asyncio(loop_scope="module")
GATEWAYS = {f"gw-{number}": 0.05 * number for number in range(1, 5)}
FEEDS: dict[str, dict[str, object]] = {
    "idle": {"idle_after": "2s"},
    "excused": {},
    "repeats": {"id": "/station"},  # as a configuration may have it by mistake: whoever spoke once only repeats itself
    "words": {},
    "stall": {"idle_after": "12s"},
    "minutes": {},
    "months": {},
}
NOW_MS, MINUTE, HOUR, DAY = 1_700_000_000_000, 60, 3600, 86_400


@pytest.fixture(scope="module")
def process(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Process]:
    with service_with(tmp_path_factory.mktemp("silence"), FEEDS) as one:
        yield one


@pytest_asyncio.fixture(scope="module", loop_scope="module")
async def words(launched: Browser, process: Process) -> AsyncIterator[Page]:
    """A page whose modules are called."""
    async with page_of(launched, f"{process.url}/?feed=words") as page:
        yield page


def silence(sources: int, known: int, lasting_s: float | None = 48, **more: Any) -> dict[str, Any]:
    """As the service counts: all of the silent ones for so long, gw-east the last of them."""
    came = lasting_s is not None
    heard_ms = NOW_MS - round(lasting_s * 1000) if lasting_s is not None else None
    counted = {
        "recent": sources if came and (lasting_s or 0) < DAY else 0,
        "hour": sources if came and (lasting_s or 0) >= HOUR else 0,
    }
    told = {"known": known, "active": known - sources, "sources": sources, "source": "gw-east", "heard_ms": heard_ms}
    return {**told, **counted, "excused": not came, **more}


def moment(**more: Any) -> dict[str, Any]:
    """A feed that is well, 1.2 s behind with a slack of 1 s, 6 lanes heard just now; keys in addition."""
    lanes = [
        {"source": f"gw-{number}", "role": "other", "newest_ms": NOW_MS - 200, "heard_ms": NOW_MS - 100, "active": True}
        for number in range(6)
    ]
    hold = {"why": "slack", "source": "gw-1", "sink": None, "since_ms": NOW_MS - 900, "idle_ms": None, "for_s": 0.9}
    return {
        **{"feed": "river-gauges", "now_ms": NOW_MS, "watermark_ms": NOW_MS - 1200, "newest_ms": NOW_MS - 200},
        **{"state": "running", "slack_s": 1, "idle_after_s": 30, "hold_at_most_s": 60, "failure": None, "acts": []},
        **{"held": {"events": 6}, "rates": {"received_per_s": 30, "late_per_s": 0}, "sinks": [], "hops": []},
        **{"steering": None, "lanes": lanes, "hold": hold, "ledger": {"balanced": True}},
        **{"minute": {"received": 1800, "duplicate": 0}, "silence": silence(0, 6, source=None, heard_ms=None)},
        **more,
    }


NOTHING_HELD = {
    "held": {"events": 0},
    "hold": {"why": "nothing_held", "source": None, "since_ms": NOW_MS, "for_s": 0},
}
SPEAK = """async (moment) => {
  const { speak, spokenText } = await import("/dashboard/sentence.js");
  const said = speak(moment);
  return { ...said, says: spokenText(said.says), next: spokenText(said.next) };
}"""


async def spoken(page: Page, **more: Any) -> Any:
    """What the page would say of a moment, with plain spaces."""
    said = await page.evaluate(SPEAK, moment(**more))
    return {**said, "says": said["says"].replace("\u00a0", " "), "next": said["next"].replace("\u00a0", " ")}


# ---- a silence that nothing waits for -------------------------------------------------------------------------------

PRESSING = [
    (silence(1, 6), "Output is current, but gw-east has been silent for 48 s and is not waited for."),
    (
        silence(1, 6, excused=True),
        "Output is current, but gw-east is excused and has been silent for 48 s.",
    ),
    (
        silence(12, 2000, 5 * MINUTE),
        "Output is current, but 12 of 2,000 sources are silent and not waited for; gw-east fell silent last, "
        "5 min ago.",
    ),
    # Just below the limits of what is told calmly: most of them, for less than an hour; half, for longer; a day's end.
    (silence(5, 6, HOUR - 1), "Output is current, but 5 of 6 sources are silent and not waited for; gw-east fell"),
    (silence(3, 6, HOUR), "Output is current, but 3 of 6 sources are silent and not waited for; gw-east fell"),
    (silence(1, 6, DAY - 60), "Output is current, but gw-east has been silent for 23 h 59 min and is not waited for."),
]
CALM = [
    (silence(1, 6, DAY), "gw-east has been silent for 1 d and is not waited for."),
    (silence(1, 6, None), "gw-east is excused and never came."),
    (silence(4, 6, HOUR), "4 of 6 sources are silent and not waited for; gw-east fell silent last, 1 h ago."),
    # One more has just fallen silent where most have been silent for long: they come and go.
    (silence(1500, 2000, 50, hour=1001), "1,500 of 2,000 sources are silent and not waited for; gw-east fell silent"),
    (silence(12, 2000, DAY), "12 of 2,000 sources are silent and not waited for, all for a day or longer."),
]


@pytest.mark.parametrize(("found", "sentence"), PRESSING)
async def test_a_silence_that_somebody_may_end_is_said_in_amber(words: Page, found: Any, sentence: str) -> None:
    said = await spoken(words, silence=found)
    assert said["says"].startswith(sentence)
    assert (said["level"], said["place"], said["places"]) == ("watch", "upstream", ["upstream"])
    assert said["upstream"] == f"{found['sources']} silent" and "Nothing to do" not in said["next"]
    out = await spoken(words, silence=found, **NOTHING_HELD)
    assert out["says"].startswith(sentence.replace("Output is current", "All that came is out"))
    assert out["level"] == "watch" and out["key"] == said["key"]  # a screen reader is not told of each turn of the hold


@pytest.mark.parametrize(("found", "sentence"), CALM)
async def test_a_silence_that_is_known_is_said_calmly(words: Page, found: Any, sentence: str) -> None:
    for more in ({}, NOTHING_HELD):
        said = await spoken(words, silence=found, **more)
        assert (said["level"], said["places"], said["upstream"]) == ("fine", [], None)
        assert sentence in said["says"] and not said["says"].startswith(sentence)
        assert said["next"] == "Nothing to do."


async def test_a_silence_comes_after_what_is_worse(words: Page) -> None:
    """A sink that fails and a source that holds the output are told first, the silence all the same."""
    sink = {"name": "sqlite", "paused": False, "waiting_events": 9, "oldest_s": 3, "connected": True}
    failing = {**sink, "failing_since_ms": NOW_MS - 60_000, "last_error": "locked"}
    said = await spoken(words, silence=silence(1, 6), sinks=[failing])
    assert said["says"].startswith("Output is 1.2 s behind now. Sink sqlite has failed since")
    assert "gw-east has been silent for 48 s" in said["says"]
    assert (said["level"], said["place"], said["places"]) == ("bad", "downstream", ["downstream", "upstream"])
    hold = {"why": "silent_source", "source": "gw-1", "since_ms": NOW_MS - 9000, "idle_ms": NOW_MS + 15_000, "for_s": 9}
    said = await spoken(words, silence=silence(1, 6), hold=hold, watermark_ms=NOW_MS - 16_000)
    assert re.match(r"Output is 16 s behind now\. gw-1 holds it: silent since", said["says"])
    assert said["says"].endswith("gw-east has been silent for 48 s and is not waited for.")


async def test_where_nobody_speaks_the_feed_is_silent(words: Page) -> None:
    """Soon after the last source fell idle, and days later."""
    for lasting_s, age in [(12, "12 s"), (3 * DAY, "3 d")]:
        lanes = [{**lane, "heard_ms": NOW_MS - lasting_s * 1000} for lane in moment()["lanes"]]
        rates = {"received_per_s": 0, "late_per_s": 0}
        found = silence(6, 6, lasting_s)
        said = await spoken(words, silence=found, lanes=lanes, rates=rates, **NOTHING_HELD)
        assert said["says"] == f"All that came is out. Nothing has come for {age}."
        assert (said["level"], said["places"], said["upstream"]) == ("watch", ["upstream"], "6 silent")


async def test_of_the_past_it_is_told_as_past(words: Page) -> None:
    said = await spoken(words, silence=silence(1, 6), past=True)
    assert said["says"].endswith("gw-east had been silent for 48 s and was not waited for.")


@pytest.mark.parametrize(
    ("received", "duplicate", "told"),
    [(3700, 3642, True), (10, 10, True), (9, 9, False), (3700, 3400, False), (0, 0, False)],
)
async def test_nothing_but_repeats_is_said(words: Page, received: int, duplicate: int, told: bool) -> None:
    said = await spoken(words, minute={"received": received, "duplicate": duplicate}, **NOTHING_HELD)
    asks = (
        f"All that came is out. Nearly all that comes is a repeat ({duplicate:,} in the last minute): "
        "does a sender use its ids again?"
    )
    assert (said["says"] == asks) == told
    assert (said["level"], said["places"]) == (("watch", ["upstream"]) if told else ("fine", []))
    assert ("Look at who sends" in said["next"]) == told


async def test_an_idle_gateway_stays_in_sight(launched: Browser, process: Process, shots: Path) -> None:
    async with feeding(process, "idle", GATEWAYS) as gateways, page_of(launched, f"{process.url}/?feed=idle") as page:
        await live(page)
        await expect(page.locator("#now")).to_have_attribute("data-level", "fine")
        del gateways.lag_s["gw-3"]
        sentence = re.compile(r"^Output is current, but gw-3 has been silent for \d+(\.\d)?\ss and is not waited for\.")
        await expect(says(page)).to_have_text(sentence)
        await expect(page.locator("#now")).to_have_attribute("data-level", "watch")
        upstream = page.locator(".reach-upstream")
        await expect(upstream).to_have_attribute("data-trouble", "watch")
        await expect(upstream.locator(".verdict")).to_have_text("▲ 1 silent")
        await expect(upstream.locator(".hop-rate")).to_have_text("3 active, 1 silent")
        await expect(page.locator("#lanes-rows tr", has_text="gw-3")).to_have_class("role-silent")
        await shoot(page, shots, "idle")
        await page.set_viewport_size({"width": 380, "height": 800})
        await until(page, "() => document.documentElement.scrollWidth <= innerWidth")
        await shoot(page, shots, "idle-phone")
        await page.set_viewport_size({"width": 1440, "height": 900})
        gateways.lag_s["gw-3"] = 0.1
        await expect(page.locator("#now")).to_have_attribute("data-level", "fine")
        await expect(upstream.locator(".verdict")).to_have_text("✓ clear")


async def test_an_excused_gateway_stays_in_sight(launched: Browser, process: Process, shots: Path) -> None:
    async with followed(launched, process, "excused", GATEWAYS) as (gateways, page):
        del gateways.lag_s["gw-2"]
        await until(page, "() => Number.parseFloat(document.querySelector('#behind-says').textContent) > 3")
        await page.locator("#lanes-rows tr", has_text="gw-2").get_by_role("button").evaluate("(one) => one.click()")
        await carry_out(page, "Excused gw-2.")
        sentence = re.compile(r"^Output is current, but gw-2 is excused and has been silent for \d+(\.\d)?\ss\.")
        await expect(says(page)).to_have_text(sentence)
        await expect(page.locator(".reach-upstream .verdict")).to_have_text("▲ 1 silent")
        await expect(page.locator(".reach-upstream .hop-rate")).to_have_text("3 active, 1 silent")
        await shoot(page, shots, "excused-silent")


async def test_a_feed_of_repeats(launched: Browser, process: Process, shots: Path) -> None:
    async with feeding(process, "repeats", GATEWAYS), page_of(launched, f"{process.url}/?feed=repeats") as page:
        await live(page)
        sentence = re.compile(r"Nearly all that comes is a repeat \((\d+) in the last minute\): does a sender use")
        await expect(says(page)).to_contain_text(sentence)
        await expect(page.locator("#now")).to_have_attribute("data-level", "watch")
        await expect(page.locator(".reach-upstream")).to_have_attribute("data-trouble", "watch")
        await expect(page.locator(".reach-upstream .verdict")).to_have_text("▲ repeats")
        found = sentence.search(await says(page).text_content() or "")
        assert found is not None
        assert 10 <= int(found[1]) <= (await asked(process, "/v1/feeds/repeats"))["ledger"]["duplicate"]
        await shoot(page, shots, "repeats")
        await page.set_viewport_size({"width": 380, "height": 800})
        await shoot(page, shots, "repeats-phone")


# ---- one stall, one beginning ---------------------------------------------------------------------------------------


async def test_a_stall_begins_at_one_time(launched: Browser, process: Process) -> None:
    """The sentence and "What happened" name the same second, live and with the service's history."""
    async with feeding(process, "stall", GATEWAYS) as gateways, page_of(launched, f"{process.url}/?feed=stall") as page:
        await live(page)
        del gateways.lag_s["gw-4"]
        for _ in range(2):
            await expect(says(page)).to_contain_text("gw-4 holds it: silent since")
            spell = page.locator("#happened .happened-hold", has_text="gw-4: silent source")
            await expect(spell).to_be_visible()
            since = re.search(r"silent since (\d\d:\d\d:\d\d)", await says(page).text_content() or "")
            assert since is not None
            await expect(spell).to_have_text(re.compile(rf"^{since[1]}\s"))
            await page.reload()
            await live(page)


WHOLE = """async ([holds, idle_after_s]) => (await import("/dashboard/panels.js")).whole(holds, idle_after_s)
  .map(({ from_ms, to_ms, why, source }) => [from_ms, to_ms, why, source])"""


async def test_a_slow_source_that_falls_silent_is_slow_until_its_last_word(words: Page) -> None:
    """With idle_after 40 s it is called silent 10 s after its last word; what it held before as a slow one stays."""

    def hold(why: str, from_ms: int, to_ms: int, source: str = "gw-1") -> dict[str, Any]:
        return {"why": why, "from_ms": from_ms, "to_ms": to_ms, "source": source}

    slow, silent = hold("slow_source", 1000, 70_000), hold("silent_source", 70_000, 90_000)
    joined = [60_000, 90_000, "silent_source", "gw-1"]
    assert await words.evaluate(WHOLE, [[slow, silent], 40]) == [[1000, 60_000, "slow_source", "gw-1"], joined]
    brief = hold("slow_source", 60_400, 70_000)  # it became the slowest shortly after it had spoken last
    assert await words.evaluate(WHOLE, [[brief, silent], 40]) == [joined]
    other = hold("slow_source", 1000, 70_000, "gw-2")
    assert await words.evaluate(WHOLE, [[other, silent], 40]) == [
        [1000, 70_000, "slow_source", "gw-2"],
        [70_000, 90_000, "silent_source", "gw-1"],
    ]


# ---- axes -----------------------------------------------------------------------------------------------------------

AXIS = """async (values) => {
  const { durationTicks } = await import("/dashboard/scales.js"), { oneUnit } = await import("/dashboard/format.js");
  return values.map((to_s) => [durationTicks(to_s, 4), durationTicks(to_s, 4).map(oneUnit)]);
}"""


async def test_durations_have_round_steps_and_one_unit(words: Page) -> None:
    wanted = {
        1: ["0 s", "0.5 s", "1 s"],
        100: ["0 s", "30 s", "1 min", "90 s", "2 min"],
        160: ["0 s", "1 min", "2 min", "3 min"],
        3 * HOUR: ["0 s", "1 h", "2 h", "3 h"],
        40 * HOUR: ["0 s", "12 h", "1 d", "36 h", "2 d"],
        231 * DAY: ["0 s", "100 d", "200 d", "300 d"],
        5000 * DAY: ["0 s", "2,000 d", "4,000 d", "6,000 d"],
    }
    for (_, labels), right in zip(await words.evaluate(AXIS, list(wanted)), wanted.values(), strict=True):
        assert [label.replace("\u00a0", " ") for label in labels] == right
    values = [1.13**power for power in range(-20, 180)]
    for to_s, (ticks, labels) in zip(values, await words.evaluate(AXIS, values), strict=True):
        assert ticks[-1] >= to_s * (1 - 1e-9) and ticks[-2] < to_s and 2 <= len(ticks) <= 5, to_s
        assert len(set(labels)) == len(labels)
        assert all(re.fullmatch(r"[\d,.]+\s(ms|s|min|h|d)", label) for label in labels), labels


WATCH_TEXTS = """() => {
  globalThis.cut = [];
  globalThis.drawn = new Set();
  const real = CanvasRenderingContext2D.prototype.fillText;
  CanvasRenderingContext2D.prototype.fillText = function (text, x, y) {
    const width = this.measureText(text).width, align = this.textAlign;
    const left = align === "right" ? x - width : align === "center" ? x - width / 2 : x;
    const across = this.canvas.width / devicePixelRatio;
    if (left < -0.5 || left + width > across + 0.5) cut.push([this.canvas.id, text, left, left + width, across]);
    drawn.add(`${this.canvas.id}|${text}`);
    real.call(this, text, x, y);
  };
}"""
DRAWN = "(name) => [...drawn].some((each) => each.startsWith(`${name}|`))"


@pytest.mark.parametrize(("width", "far"), [(1440, 160.0), (380, 160.0), (1440, 231 * DAY), (320, 231 * DAY)])
async def test_no_label_is_cut_off(launched: Browser, process: Process, shots: Path, width: int, far: float) -> None:
    """An output that is minutes or months behind: whatever a picture writes lies within it."""
    feed, label = ("minutes", "3\u00a0min") if far == 160 else ("months", "300\u00a0d")
    async with (
        feeding(process, feed, {"gw-1": 0.0, "gw-far": far}),
        page_of(launched, f"{process.url}/?feed={feed}", width=width) as page,
    ):
        await live(page)
        await page.evaluate(WATCH_TEXTS)
        for name in ("lanes", f"behind|{label}", "lateness", "share", "slacks", "runs"):
            await page.locator(f"#{name.partition('|')[0]}").scroll_into_view_if_needed()
            await until(page, DRAWN.replace("|`", "`") if "|" in name else DRAWN, name)
        await shoot(page, shots, f"axis-{width}-{round(far)}")
        assert await page.evaluate("() => cut") == []
