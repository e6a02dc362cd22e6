"""The dashboard of an instance in a cluster: who owns what, a partition that moves, an instance that dies, intakes.

Two real processes on one real broker, in a real browser.
"""

from __future__ import annotations

import asyncio
import re
import signal
from collections.abc import AsyncIterator, Iterator
from itertools import product
from pathlib import Path
from typing import Any

import pytest
import pytest_asyncio
from helpers_brokers import Nats
from helpers_browser import page_of
from helpers_cluster import Instance, settled
from helpers_dashboard import feeding, live, says, service_with, shoot, until
from helpers_in_cluster import gateways, make_parted_stream, member
from helpers_service import FEED
from playwright.async_api import Browser, Page, Route, expect
from strandline.cluster.words import FAR_BEHIND_MESSAGES, QUIET_SHARE, eyes_first, is_far_behind

pytestmark = pytest.mark.asyncio(loop_scope="module")
PARTITIONS, LEASE = 4, "4s"
KEYS = {"slack": "300ms", "idle_after": "20s", "hold_at_most": "60s"}


@pytest.fixture(scope="module", name="server")
def _server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Nats]:
    with Nats(tmp_path_factory.mktemp("broker"), synced=False) as server:
        yield server


@pytest_asyncio.fixture(scope="module", loop_scope="module", name="pair")
async def _pair(server: Nats, tmp_path_factory: pytest.TempPathFactory) -> AsyncIterator[list[Instance]]:
    """Two instances with two partitions each, and gateways that send to all."""
    await make_parted_stream(server)
    folder = tmp_path_factory.mktemp("cluster")
    texts = [member(folder, server.url, number, partitions=PARTITIONS, lease=LEASE, **KEYS) for number in range(2)]
    with (
        Instance(folder / "strandline-0", texts[0]) as one,
        Instance(folder / "strandline-1", texts[1]) as other,
    ):
        async with gateways(server, PARTITIONS):
            await balanced([one, other])
            yield [one, other]


async def balanced(pair: list[Instance]) -> None:
    await asyncio.to_thread(settled, pair, PARTITIONS, 60.0)


def owned(instance: Instance) -> list[str]:
    return [f"{FEED}-{number}" for number in sorted(instance.owned_here())]


def cells(page: Page, partition: str) -> Any:
    return page.locator("#partitions tr", has=page.get_by_text(partition, exact=True)).locator("td")


async def test_the_view_tells_who_owns_what_and_leads_there(
    launched: Browser, pair: list[Instance], shots: Path
) -> None:
    here, there = owned(pair[0]), owned(pair[1])
    async with page_of(launched, f"{pair[0].url}/?feed={here[0]}") as page:
        await live(page)
        await expect(page.locator("#cluster-says")).to_have_text("✓ 4 partitions owned, by 2 instances")
        assert not await page.locator("#partitions").is_visible(), "what is well takes no room"
        await page.locator("#cluster summary").click()
        await expect(page.locator("#partitions tr")).to_have_count(PARTITIONS)
        await expect(cells(page, here[1]).nth(0)).to_have_text("● owned")
        await expect(cells(page, there[0]).nth(3)).to_have_text("strandline-1")
        await expect(page.locator("#instances li")).to_have_count(2)
        await expect(page.locator("#instances li").nth(0)).to_contain_text("● this one")
        await expect(page.locator("#instances li").nth(1)).to_contain_text("owns 2 partitions")
        options = await page.locator("#feed option").all_text_contents()
        assert options == here, "what can be chosen is what is at work here"
        await shoot(page, shots, "cluster")
        await page.get_by_role("button", name=here[1]).click()
        await expect(page).to_have_title(re.compile(here[1]))
        await expect(page.locator("#feed")).to_have_value(here[1])
        await page.get_by_role("link", name=there[0]).click()
        await expect(page).to_have_url(re.compile(re.escape(f"{pair[1].url}/?feed={there[0]}")))
        await live(page)


async def test_a_partition_that_is_elsewhere_is_told_and_not_asked_for(
    launched: Browser, pair: list[Instance], shots: Path
) -> None:
    (there, *_) = owned(pair[1])
    async with page_of(launched, f"{pair[0].url}/?feed={there}", color_scheme="dark", width=420) as page:
        await expect(says(page)).to_have_text(f"{there} is at strandline-1.")
        await expect(page.locator("#link")).to_have_text("◇ not here")
        await expect(page.locator("#feed option:checked")).to_have_text(f"{there} (not here)")
        await expect(page.locator("#partitions tr")).to_have_count(PARTITIONS)
        assert not await page.locator("#lanes").is_visible(), "nothing is known of it here"
        await shoot(page, shots, "elsewhere-narrow-dark")
        await page.locator("#feed").select_option(owned(pair[0])[0])
        await live(page)
        await expect(page.locator("#lanes")).to_be_visible()


async def test_intakes_are_shown(launched: Browser, pair: list[Instance]) -> None:
    async with page_of(launched, f"{pair[0].url}/?feed={owned(pair[0])[0]}") as page:
        await live(page)
        intake = page.locator("#intakes li")
        await expect(intake).to_contain_text(re.compile(r"partition\s*jetstream\s*● connected since \d"))
        await expect(intake).to_contain_text(re.compile(r"\d+ messages? waits? there, \d+ in flight"))


async def test_an_instance_that_dies_and_comes_back_and_a_partition_that_moves(
    launched: Browser, pair: list[Instance], shots: Path
) -> None:
    one, other = pair
    (here, *_), theirs = owned(one), owned(other)
    async with page_of(launched, f"{one.url}/?feed={here}") as page:
        await live(page)
        await expect(page.locator("#cluster-says")).to_contain_text("✓")
        note = """() => { const seen = (window.said = []), place = document.getElementById("says");
          new MutationObserver(() => seen.push(place.textContent))
            .observe(place, { childList: true, subtree: true, characterData: true }); }"""
        await page.evaluate(note)
        other._signal(signal.SIGKILL)
        await asyncio.to_thread(other.wait)
        await expect(says(page)).to_contain_text(re.compile(r"strandline-1 (is gone: it )?was last seen \d+ s ago"))
        await expect(page.locator("#partitions")).to_be_visible()  # it opens by itself
        await expect(page.locator("#instances li").first).to_contain_text("✕ gone, last seen")
        await expect(page.locator("#instances li").first).to_contain_text("had 2 partitions")
        await asyncio.to_thread(settled, [one], PARTITIONS, 60.0)
        await expect(page.locator("#feed option")).to_have_count(PARTITIONS)
        await expect(page.locator("#next")).to_have_text(
            "What it owned runs elsewhere. Start strandline-1 again, or find out why it went."
        )
        told = " ".join(await page.evaluate("() => window.said"))
        assert f"{here}: output is" in told, "and how the feed stands that is followed"
        await shoot(page, shots, "gone")
        # Of all those here the last taken goes back: one of these.
        await page.locator("#feed").select_option(theirs[0])
        await live(page)
        async with page_of(launched, f"{one.url}/?feed={theirs[1]}") as second:
            await live(second)
            other.start()
            await balanced(pair)
            moved, stayed = (page, second) if theirs[0] in owned(other) else (second, page)
            name = theirs[0] if moved is page else theirs[1]
            await expect(says(moved)).to_contain_text(f"{name} has moved to strandline-1. What stands below is from 20")
            await expect(moved.locator("#link")).to_have_text("◇ not here")
            await expect(moved).to_have_title(f"△ {name} is not here – Strandline")
            await expect(moved.locator("#lanes")).to_be_visible()
            await expect(moved.locator(".facts[inert] #drain")).to_have_count(1)  # nothing can be done about it here
            await shoot(moved, shots, "moved")
            if theirs[0] not in owned(other) or theirs[1] not in owned(other):
                await live(stayed)
            await moved.locator("#next a").click()
            await expect(moved).to_have_url(re.compile(re.escape(f"{other.url}/?feed={name}")))
            await live(moved)
            await expect(says(moved)).to_contain_text("utput is")


async def test_an_instance_that_stands_by_says_so_and_follows_what_comes(
    launched: Browser, tmp_path: Path, shots: Path
) -> None:
    with Nats(tmp_path, synced=False) as server:
        await make_parted_stream(server)
        texts = [member(tmp_path, server.url, number, partitions=1, lease=LEASE, **KEYS) for number in range(2)]
        with Instance(tmp_path / "strandline-0", texts[0]) as one:
            await asyncio.to_thread(settled, [one], 1, 60.0)
            with Instance(tmp_path / "strandline-1", texts[1]) as other:
                async with gateways(server, 1), page_of(launched, f"{other.url}/") as page:
                    await expect(says(page)).to_have_text("No partition is at work at strandline-1 now.")
                    await expect(page.locator("#next")).to_contain_text("It stands by.")
                    await expect(page.get_by_role("link", name=f"{FEED}-0")).to_be_visible()
                    await shoot(page, shots, "stands-by")
                    one._signal(signal.SIGTERM)
                    await asyncio.to_thread(one.wait)
                    await live(page)
                    await expect(page.locator("#feed")).to_have_value(f"{FEED}-0")
                    await expect(page.locator("#instances")).to_contain_text("□ stopped")


async def test_without_a_cluster_there_is_no_view_and_nothing_is_asked(launched: Browser, tmp_path: Path) -> None:
    with service_with(tmp_path, {"alone": {}}) as process:
        async with feeding(process, "alone", {"gw-1": 0.0}), page_of(launched, f"{process.url}/") as page:
            asked = list[str]()
            page.on("request", lambda request: asked.append(request.url))
            await page.reload()
            await live(page)
            seen = await page.evaluate("() => performance.now()")
            await until(
                page, "(seen) => performance.now() > seen + 2500", seen
            )  # longer than from one poll to the next
            assert not await page.locator("#cluster").is_visible()
            assert not await page.locator("#intakes-panel").is_visible()
            assert asked and not [url for url in asked if "cluster" in url and "/v1/" in url]


async def test_a_cluster_that_is_heard_of_late_lists_no_partition_twice(
    launched: Browser, pair: list[Instance]
) -> None:
    here, failing = owned(pair[0]), [True]

    async def handler(route: Route) -> None:
        if failing:
            failing.clear()
            await route.fulfill(status=503, body="{}", content_type="application/problem+json")
        else:
            await route.continue_()

    async with page_of(launched, "about:blank", expected=("status of 503",)) as page:
        await page.route("**/v1/cluster", handler)
        await page.goto(f"{pair[0].url}/?feed={here[0]}")
        await live(page)
        await expect(page.locator("#cluster-says")).to_have_text("✓ 4 partitions owned, by 2 instances")
        assert not failing and await page.locator("#feed option").all_text_contents() == here


# ---- words, by calling the page's own modules ------------------------------------------------------------------------


ADDRESSES = [
    ("127.0.0.1:8600", "http:", "localhost", "http://127.0.0.1:8600/?feed=a-1"),
    ("127.0.0.1:8600", "http:", "strandline-0.example", None),  # another machine's own
    ("10.0.0.7:8600", "https:", "strandline-0.example", "https://10.0.0.7:8600/?feed=a-1"),
    ("[fd00::7]:8600", "http:", "strandline-0.example", "http://[fd00::7]:8600/?feed=a-1"),
    ("0.0.0.0:8600", "http:", "localhost", None),
    ("[::]:8600", "http:", "localhost", None),
    ("strandline-1:0", "http:", "localhost", None),
    ("javascript:alert(1)//:80", "http:", "localhost", None),
    ("a@b:80", "http:", "localhost", None),
    (None, "http:", "localhost", None),
]


async def test_only_an_address_that_can_be_reached_becomes_a_link(launched: Browser, pair: list[Instance]) -> None:
    async with page_of(launched, f"{pair[0].url}/") as page:
        for listen, protocol, hostname, wanted in ADDRESSES:
            found = await page.evaluate(
                """async ([listen, page]) => (await import("/dashboard/cluster.js")).addressOf(listen, page, "a-1")""",
                [listen, {"protocol": protocol, "hostname": hostname}],
            )
            assert found == wanted, listen


async def test_what_needs_eyes_is_what_the_service_itself_says(launched: Browser, pair: list[Instance]) -> None:
    """The page and `cluster.words` have the same bounds and the same order; both are ours, so each checks the other."""
    script = """async ([rows, cluster]) => {
      const { eyesFirst, instancesOf, isFarBehind } = await import("/dashboard/cluster.js");
      return [eyesFirst(rows).map((row) => row.runtime), rows.filter(isFarBehind).map((row) => row.runtime),
        instancesOf(cluster).filter((one) => one.state === "quiet").map((one) => one.name)];
    }"""
    states = ["owned", "nobody's", "taking over"]
    behind = [None, 0, FAR_BEHIND_MESSAGES - 1, FAR_BEHIND_MESSAGES, FAR_BEHIND_MESSAGES + 1]
    rows = [
        {"runtime": f"{number}", "state": state, "behind_messages": messages, "words": words}
        for number, (words, messages, state) in enumerate(product(["", "slow"], behind, states))
    ]
    lease_s, edge_s = 10.0, QUIET_SHARE * 10.0
    seen = {"at the edge": edge_s, "beyond": edge_s + 0.01}
    cluster = {
        "instance": "this one", "away_s": None, "lease_s": lease_s, "gone": [],
        "instances": [{"instance": name, "seen_s": seen_s, "owns": 1, "listen": None} for name, seen_s in seen.items()],
    }  # fmt: skip
    async with page_of(launched, f"{pair[0].url}/") as page:
        order, far, quiet = await page.evaluate(script, [rows, cluster])
    assert order == [row["runtime"] for row in eyes_first(rows)]
    assert far == [row["runtime"] for row in rows if is_far_behind(row)]
    assert quiet == ["beyond"]


async def test_the_worst_is_said_first_and_the_feed_after_it(launched: Browser, pair: list[Instance]) -> None:
    script = """async ([document, moment]) => {
      const { clusterTrouble } = await import("/dashboard/cluster.js");
      const { speak, spokenText } = await import("/dashboard/sentence.js");
      const spoken = speak(moment, "utc", clusterTrouble(document));
      return [spoken.level, spokenText(spoken.says), spokenText(spoken.next)];
    }"""
    moment = {
        "feed": "a-1", "now_ms": 100_000, "newest_ms": 99_000, "watermark_ms": 98_000, "slack_s": 1, "hold": {},
        "held": {"events": 5}, "hops": [], "lanes": [], "sinks": [], "intakes": [], "state": "running",
    }  # fmt: skip
    away = {"name": "north", "kind": "jetstream", "connected": False, "since_ms": 60_000, "words": "refused",
            "paused_until_ms": None, "waiting_messages": 3, "in_flight_messages": 0, "last_error": ""}  # fmt: skip
    nobodys = "3 of 8 partitions are nobody's: strandline-2 was last seen 14 s ago."
    quiet = "strandline-1 was last seen 9 s ago."
    fine = {"level": "fine", "says": "All are owned.", "next": "Nothing to do."}
    async with page_of(launched, f"{pair[0].url}/") as page:
        for document, more, level, said in [
            (fine, {}, "fine", "Output is 2 s behind now. The newest event is 1 s old."),
            ({"level": "bad", "says": nobodys, "next": "Look."}, {}, "bad", f"{nobodys} a-1: output is 2 s behind"),
            ({"level": "watch", "says": quiet, "next": "Look."}, {}, "watch", f"{quiet} a-1: output is 2 s behind"),
            (
                {"level": "watch", "says": quiet, "next": "Look."}, {"intakes": [away]}, "bad",
                f"Output is 2 s behind now. Intake north has had no broker for 40 s: refused. {quiet}",
            ),
            ({"level": "bad", "says": nobodys, "next": "Look."}, {"past": True}, "fine", "At 00:01:40 the output was"),
        ]:  # fmt: skip
            found = await page.evaluate(script, [document, {**moment, **more}])
            assert (found[0], found[1].replace("\u00a0", " ")[: len(said)]) == (level, said)
