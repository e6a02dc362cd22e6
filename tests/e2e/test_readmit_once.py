"""Driving the quarantine again: each line once a run, and one that is still no event stays exactly as it was."""

from __future__ import annotations

import time
from pathlib import Path

from helpers_service import BEGIN_S, body_of, configuration, event_line, eventually, running
from strandline.sinks.lane_reading import forget_rows, last_number

AHEAD = event_line(2_000_000_000, "gw-far")  # in 2087


async def test_lines_that_are_still_ahead_or_faulty_stay_as_they_were(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        await service.post("events", body_of(AHEAD, b"no json at all"))
        await service.post("events", body_of(AHEAD, event_line(1)))
        await eventually(lambda: service.runtime.lane_store.size.quarantine_rows == 3)
        before, ledger = (await service.get("quarantine")).json, (await service.document())["ledger"]
        sources = [each["source"] for each in (await service.get("sources")).json["sources"]]
        for _ in range(3):
            answer = await service.post("quarantine/readmit", {})
            assert answer.json == {
                "tried": 3, "accepted": 0, "late": 0, "duplicate": 0, "quarantined": 0, "still_faulty": 3
            }  # fmt: skip
        assert (await service.get("quarantine")).json == before, "numbers, batches and arrival times too"
        assert (await service.document())["ledger"] == ledger
        assert [each["source"] for each in (await service.get("sources")).json["sources"]] == sources


async def test_a_line_that_is_no_longer_ahead_is_taken_and_the_books_balance(tmp_path: Path) -> None:
    text = configuration(tmp_path)
    soon = event_line(time.time() - BEGIN_S + 7_200)
    async with running(text) as service:
        await service.post("events", body_of(soon, b"no json at all", event_line(1)))
        await eventually(lambda: service.runtime.lane_store.size.quarantine_rows == 2)
        kept = (await service.get("quarantine")).json["quarantine"]
    async with running(text.replace('ahead_limit = "1h"', 'ahead_limit = "30d"')) as service:
        answer = (await service.post("quarantine/readmit", {})).json
        assert (answer["tried"], answer["accepted"], answer["still_faulty"]) == (2, 1, 1)
        rows = (await service.get("quarantine")).json["quarantine"]
        assert rows == [row for row in kept if row["reason"] != "ahead"]
        ledger = (await service.document())["ledger"]
        assert ledger["balanced"] and (ledger["received"], ledger["quarantined"]) == (4, 2)


async def test_a_run_ends_at_the_highest_number_at_its_start(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        path = service.runtime.lanes_file
        await service.post("events", body_of(b"x", b"y"))
        await eventually(lambda: service.runtime.lane_store.size.quarantine_rows == 2)
        assert (last_number(path, "quarantine"), last_number(path, "late")) == (2, 0)
        forget_rows(path, "quarantine", 2)
        assert last_number(path, "quarantine") == 2, "numbers are never given again"
        assert (await service.post("quarantine/readmit", {})).json["tried"] == 0
    assert last_number(tmp_path / "nothing.db", "quarantine") == 0
