"""The kept lanes in use: repairs on a schedule, resending what was late or refused, driving the quarantine again.

A real service, a real receiver over HTTP, real files.
"""

from __future__ import annotations

import asyncio
import json
import random
from collections.abc import Iterator
from pathlib import Path

import pytest
from helpers_receiver import LOSE, Receiver, refuse
from helpers_service import BEGIN_S, Running, body_of, configuration, event_line, eventually, problem_of, running
from strandline.repairing import Repairer, late_repair_rows
from strandline.sinks.delivery import Sleep
from strandline.sinks.lanes import late_rows

DAY_S = 86_400


@pytest.fixture
def receiver() -> Iterator[Receiver]:
    with Receiver() as server:
        yield server
    assert server.faults == []


def http_sink(receiver: Receiver, late: str) -> str:
    return f"""[[feed.sink]]
kind = "http"
name = "archive"
url = "{receiver.url}/ordered"
late_url = "{receiver.url}/late"
late = {late}
"""


def repaired(receiver: Receiver) -> list[dict[str, object]]:
    return [json.loads(line) for line in receiver.lines("/late", "river-gauges-repair")]


def another_repairer(service: Running, every_s: float | None, sleep: Sleep) -> Repairer:
    """One of the test's own for the same sink, that sleeps as the test says."""
    runtime = service.runtime
    return Repairer(
        "other", runtime.repairers["archive"]._sink, runtime.lane_store, runtime.lanes_file,
        every_s=every_s, partition_ns=10**9, random_source=random.Random(1), sleep=sleep,
    )  # fmt: skip


async def test_repairs_come_sorted_by_source_and_cut_by_partition(tmp_path: Path, receiver: Receiver) -> None:
    sinks = http_sink(receiver, '{ deliver = "repair", every = "1h", partition = "1d" }')
    async with running(configuration(tmp_path, sinks=sinks)) as service:
        await service.send([10 * DAY_S])
        seconds = [(DAY_S + 5, "weir"), (7, "weir"), (DAY_S + 3, "mill"), (9, "mill"), (8, "mill")]
        answer = await service.post("events", body_of(*(event_line(*each) for each in seconds)))
        assert answer.json["late"] == 5
        await eventually(lambda: len(late_rows(service.runtime.lanes_file)) == 5)
        repairer = service.runtime.repairers["archive"]
        await repairer.run()
        rows = repaired(receiver)
        found = [(int(str(row["time_ns"])) // 10**9 - BEGIN_S, row["source"]) for row in rows]
        # BEGIN_S lies inside a day, so that the first day's partition ends before BEGIN_S + DAY_S.
        assert sorted(found) == sorted(seconds)
        by_partition = [((BEGIN_S + second) // DAY_S, source, second) for second, source in found]
        assert by_partition == sorted(by_partition)
        assert len(receiver.kept["/late"]) == len({partition for partition, _, _ in by_partition})
        assert "/late" not in [request.path for request in receiver.requests if "-late-" in request.key]
        assert await repairer.run() == 0, "nothing is sent twice"
        document = await service.document()
        assert document["repairs"]["archive"]["through"] == 5
        assert document["sinks"]["archive"]["lanes"].keys() == {"ordered"}


async def test_a_repair_whose_answer_was_lost_comes_again_under_its_number(tmp_path: Path, receiver: Receiver) -> None:
    sinks = http_sink(receiver, '{ deliver = "repair", every = "1h" }')
    text = configuration(tmp_path, sinks=sinks)
    async with running(text) as service:
        await service.send([100])
        await service.send([1, 2])
        await eventually(lambda: len(late_rows(service.runtime.lanes_file)) == 2)
        await eventually(lambda: len(receiver.requests) == 1)
        receiver.script.append(LOSE)
        await service.runtime.repairers["archive"].run()
        keys = [request.key for request in receiver.requests if request.path == "/late"]
        assert len(keys) == 2 and len(set(keys)) == 1


async def test_a_plan_survives_a_crash_and_sends_the_same_again(tmp_path: Path, receiver: Receiver) -> None:
    sinks = http_sink(receiver, '{ deliver = "repair", every = "1h" }')
    async with running(configuration(tmp_path, sinks=sinks)) as service:
        await service.send([100])
        await service.send([1, 2])
        runtime = service.runtime
        await eventually(lambda: len(late_rows(runtime.lanes_file)) == 2)
        first = await runtime.lane_store.plan_repair("archive", 10)
        await service.send([3])
        await eventually(lambda: len(late_rows(runtime.lanes_file)) == 3)
        assert await runtime.lane_store.plan_repair("archive", 10) == first, "until it has ended"
        await runtime.repairers["archive"].run()
        assert [len(request.content.splitlines()) for request in receiver.requests if request.path == "/late"] == [2, 1]
        numbers = [request.headers["Strandline-Batch"] for request in receiver.requests if request.path == "/late"]
        assert numbers == [str(first.number), str(first.number + 1)]


async def test_late_events_are_sent_once_more_on_request(tmp_path: Path, receiver: Receiver) -> None:
    async with running(configuration(tmp_path, sinks=http_sink(receiver, '{ deliver = "keep" }'))) as service:
        await service.send([100])
        await service.send([1, 2, 3])
        await eventually(lambda: len(late_rows(service.runtime.lanes_file)) == 3)
        answer = await service.post("late/resend", {"sink": "archive", "after": 1})
        assert (answer.status, answer.json) == (200, {"sent": 2})
        answer = await service.post("late/resend", {"sink": "archive"})
        assert answer.json == {"sent": 3}
        assert len(repaired(receiver)) == 5
        problem_of(await service.post("late/resend", {"sink": "attic"}), 404)
        problem_of(await service.post("late/resend", {"sink": 5}), 422)


async def test_what_was_refused_is_listed_and_sent_again_after_the_store_was_mended(
    tmp_path: Path, receiver: Receiver
) -> None:
    receiver.script.append(refuse(400, b"no such series"))
    async with running(configuration(tmp_path, sinks=http_sink(receiver, '{ deliver = "lane" }'))) as service:
        await service.send([5])
        await service.post("drain")
        await eventually(lambda: service.runtime.lane_store.size.refused_rows == 1)
        await service.send([6])
        await service.post("drain")
        await eventually(lambda: len(receiver.lines("/ordered", "river-gauges-ordered")) == 1)
        answer = await service.post("refused/resend", {"sink": "archive"})
        assert answer.json == {"sent": 1}
        assert [row["time_ns"] for row in repaired(receiver)] == [(BEGIN_S + 5) * 10**9]


async def test_the_quarantine_is_driven_again_after_a_fix(tmp_path: Path) -> None:
    text = configuration(tmp_path, ahead_limit="1h")
    faulty = [b'{"at":"2023-11-14T22:13:29Z","station":"gw-1"}', event_line(2), b"no json at all"]
    async with running(text) as service:
        answer = await service.post("events", body_of(*faulty))
        assert (answer.json["accepted"], answer.json["quarantined"]) == (1, 2)
        await eventually(lambda: service.runtime.lane_store.size.quarantine_rows == 2)
        nothing = await service.post("quarantine/readmit", {})
        assert nothing.json["still_faulty"] == 2 and nothing.json["accepted"] == 0
    mended = text.replace("/observed_at", "/at")
    async with running(mended) as service:
        answer = await service.post("quarantine/readmit", {})
        assert answer.json == {
            "tried": 2, "accepted": 1, "late": 0, "duplicate": 0, "quarantined": 0, "still_faulty": 1
        }  # fmt: skip
        assert (await service.post("quarantine/readmit", {})).json["tried"] == 1, "what was taken is settled"
        document = await service.document()
        assert document["ledger"]["balanced"] and document["ledger"]["buffered"] + document["ledger"]["released"] == 2
        rows = (await service.get("quarantine")).json["quarantine"]
        assert [row["event"] for row in rows] == ["no json at all"]


async def test_a_schedule_repairs_by_itself_and_survives_an_unwilling_store(
    tmp_path: Path, receiver: Receiver
) -> None:
    sinks = http_sink(receiver, '{ deliver = "repair", every = "1h" }')
    async with running(configuration(tmp_path, sinks=sinks)) as service:
        await service.send([100])
        await service.send([1])
        path = service.runtime.lanes_file
        await eventually(lambda: len(late_rows(path)) == 1)
        turns = asyncio.Semaphore(0)

        async def sleep(seconds: float) -> None:
            await turns.acquire()

        repairer = another_repairer(service, 60.0, sleep)
        receiver.script.append(refuse(503))
        repairer.start()
        await eventually(lambda: repairer.state().last_error is not None)
        assert not repaired(receiver)
        turns.release()  # the back-off is over
        await eventually(lambda: len(repaired(receiver)) == 1)
        await service.send([2])
        await eventually(lambda: len(late_rows(path)) == 2)
        turns.release()  # the next turn has come
        await eventually(lambda: len(repaired(receiver)) == 2)
        await repairer.close()
        assert late_repair_rows(path, 0, 10**9)[0].number == 1, "nothing was removed"


async def test_ndjson_repairs_are_files_of_their_own(tmp_path: Path) -> None:
    folder = tmp_path / "out"
    sinks = f'[[feed.sink]]\nkind = "ndjson"\ndirectory = {json.dumps(str(folder))}\nlate = {{ deliver = "repair" }}\n'
    async with running(configuration(tmp_path, sinks=sinks)) as service:
        await service.send([100])
        await service.send([2, 1])
        await eventually(lambda: len(late_rows(service.runtime.lanes_file)) == 2)
        await service.runtime.repairers["ndjson"].run()
        names = [path.name for path in folder.iterdir() if "repair" in path.name]
        assert names == [f"river-gauges-repair-{1:020d}-{1:020d}.ndjson"]
        lines = [json.loads(line) for line in (folder / names[0]).read_text().splitlines()]
        assert [line["time_ns"] // 10**9 - BEGIN_S for line in lines] == [1, 2]
        assert not any("late" in path.name for path in folder.iterdir())


async def test_repairs_wait_no_longer_than_an_hour_whatever_a_store_asks_for(
    tmp_path: Path, receiver: Receiver
) -> None:
    """A Retry-After that names a day of another century would else end repairs until somebody restarts the service."""
    sinks = http_sink(receiver, '{ deliver = "repair", every = "1h" }')
    async with running(configuration(tmp_path, sinks=sinks)) as service:
        await service.send([100])
        await service.send([1])
        path, asked = service.runtime.lanes_file, list[float]()
        await eventually(lambda: len(late_rows(path)) == 1)

        async def sleep(seconds: float) -> None:
            asked.append(seconds)

        repairer = another_repairer(service, None, sleep)
        receiver.script.append(refuse(503, Retry_After="999999999999"))
        assert await repairer.run() == 1
        assert asked == [3600.0]
