"""A real service that hands its batches to a receiver over HTTP: refusals are kept, repeats are recognised (P5)."""

from __future__ import annotations

from pathlib import Path

from helpers_receiver import LOSE, Answer, Receiver, refuse
from helpers_service import FEED, Process, configuration, events, eventually, running
from strandline.sinks.lanes import forget_rows, refused_rows


def configured(folder: Path, receiver: Receiver) -> str:
    sinks = f'[[feed.sink]]\nkind = "http"\nurl = "{receiver.url}/in"\nlate_url = "{receiver.url}/late"\n'
    return configuration(folder, sinks=sinks, batch_events_at_most=10)


async def test_what_is_refused_for_good_is_kept_and_all_else_comes_through(tmp_path: Path) -> None:
    """The receiver loses an answer, asks for time, takes the batch, and refuses the next one for good."""
    with Receiver() as receiver:
        receiver.script += [LOSE, refuse(503, Retry_After="0"), Answer(202), refuse(422, b"no such gauge")]
        async with running(configured(tmp_path, receiver)) as service:
            await service.send(range(40))
            await eventually(lambda: len(receiver.requests) >= 6, "all four batches were sent")
            await service.send(range(5), station="gw-2")
            await eventually(lambda: len(receiver.requests) >= 7, "the late ones too")
            sink = (await service.document())["sinks"]["http"]
            assert "422" in sink["last_error"] and sink["failing_since"] is None, "it works, and says what was wrong"
            answer = await service.get("refused?sink=http")
            assert (await service.get("refused?sink=other")).json["refused"] == []
        keys = [request.key for request in receiver.requests if request.path == "/in"]
        assert keys == [f'"{FEED}-ordered-{number}"' for number in (1, 1, 1, 2, 3, 4)]
        assert receiver.faults == [], "what came again was the same"
        refused = answer.json["refused"]
        assert {(row["sink"], row["lane"], row["batch"]) for row in refused} == {("http", "ordered", 2)}
        assert refused[0]["detail"].endswith("batch 2 of lane ordered with 422 Unprocessable Entity: no such gauge")
        stored = receiver.lines("/in", f"{FEED}-ordered")
        stored[10:10] = [row["event"].encode() for row in refused]
        assert stored == events(range(40)).split(b"\n")[:-1]
        assert len(receiver.lines("/late", f"{FEED}-late")) == 5


def test_a_service_that_is_killed_sends_again_under_the_same_keys(tmp_path: Path) -> None:
    """The answer to the second batch never comes, and the service dies waiting: the next start offers it again."""
    with Receiver() as receiver, Process(tmp_path, configured(tmp_path, receiver)) as process:
        receiver.script += [Answer(), Answer(then="hang")]
        assert process.ask(f"/v1/feeds/{FEED}/events", events(range(40))).status == 200
        process.until(lambda: len(receiver.requests) == 2, "nothing is sent")
        process.kill()
        receiver.go_on.set()
        process.start()
        process.drain()
        assert process.terminate() == 0
        assert receiver.faults == []
        keys = [request.key for request in receiver.requests]
        assert keys[1] == f'"{FEED}-ordered-2"' and keys.count(keys[1]) == 2
        assert receiver.lines("/in", f"{FEED}-ordered") == events(range(40)).split(b"\n")[:-1]


def test_at_the_limit_of_the_lanes_a_refused_batch_waits_and_says_so(tmp_path: Path) -> None:
    """Promise P6: nothing is let go before it is kept. Once room was made, the feed goes on."""
    store = tmp_path / "data/feeds" / FEED / "lanes.db"
    with Receiver() as receiver:
        text = configured(tmp_path, receiver).replace("[[feed.sink]]", 'lanes_at_most = "1MiB"\n[[feed.sink]]', 1)
        with Process(tmp_path, text) as process:
            receiver.script += [Answer(400, take=False, then="hang"), *[refuse(400, b"too long")] * 1000]
            sent: list[bytes] = []
            filler = b'"filler":"%b","station"' % (b"x" * 40_000)
            for first in range(0, 60, 10):
                body = events(range(first, first + 10)).replace(b'"station"', filler)
                assert process.ask(f"/v1/feeds/{FEED}/events", body).status == 200
                sent += body.split(b"\n")[:-1]
            receiver.go_on.set()  # only now does the lane store fill
            process.until(lambda: "lanes_at_most" in str(process.document()["sinks"]["http"]["last_error"]), "no limit")
            kept = [row.event for row in refused_rows(store, limit=1000)]
            assert 0 < len(kept) < len(sent)
            assert forget_rows(store, "refused", len(kept)) == len(kept)
            receiver.script.clear()
            assert process.terminate() == 0  # a new start does not wait for the next try
            process.start()
            process.drain()
        assert kept + receiver.lines("/in", f"{FEED}-ordered") == sent
