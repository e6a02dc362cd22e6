"""format.md keeps to the code: its worked example is made anew and compared, its tables name every kind and limit."""

from __future__ import annotations

import re
from pathlib import Path

import msgspec
import numpy as np
from helpers_journal import FEED
from simdisk import SimDisk
from strandline import journal as journal_package
from strandline.core.columns import Arrival
from strandline.core.records import SMALL_KINDS, Kind, SourcesRecord, arrival_parts, encode_small
from strandline.journal.journal import HEADROOM_BYTES, JOURNAL_BYTES_AT_MOST, SEGMENT_BYTES, Journal
from strandline.journal.segments import FORMAT_VERSION, SEGMENT_HEADER_BYTES

PAGE = (Path(journal_package.__file__).parent / "format.md").read_text()
LINE = b'{"station":"weir-1","level":1.5}'


def example() -> bytes:
    """The segment of the worked example: one source is named, one event arrives, each synced for itself."""
    disk = SimDisk()
    journal = Journal.open(disk, FEED, segment_bytes=4096, journal_bytes_at_most=8192)
    arrival = Arrival(
        times=np.array([1_764_547_200_000_000_000]),
        sources=np.array([0], np.uint32),
        lengths=np.array([len(LINE)], np.uint32),
        payload=LINE + b"\n",
    )
    kind, body = encode_small(SourcesRecord(0, ["weir-1"]))
    journal.append(0, kind, [body])
    journal.flush()
    journal.append(journal.next_lsn, Kind.ARRIVAL, arrival_parts(arrival, 1_764_547_200_250_000_000))
    journal.flush()
    end = SEGMENT_HEADER_BYTES + journal.next_lsn
    content = bytes(disk.content(f"{FEED}/journal-{0:020d}.seg"))
    assert content[end:] == bytes(4096 - end)
    return content[:end]


def section(number: int) -> str:
    """The text of a numbered section."""
    found = re.search(rf"^## {number}\. .*?(?=^## |\Z)", PAGE, re.MULTILINE | re.DOTALL)
    assert found, f"section {number} is missing"
    return found[0]


def test_the_worked_example_is_what_the_code_writes() -> None:
    rows = re.findall(r"^ *(\d+)  ((?:[0-9a-f]{2} ?)+?)(?:  .*)?$", section(5), re.MULTILINE)
    content = b""
    for offset, row in rows:
        assert int(offset) == len(content)
        content += bytes.fromhex(row)
    assert content == example(), example().hex(" ")


def test_every_kind_of_record_is_in_the_table_with_its_fields() -> None:
    rows = {
        int(number): (name, re.findall(r"`(\w+)`", fields))
        for number, name, fields in re.findall(r"^\| (\d+) \| ([A-Z]+) \| (.*) \|$", section(6), re.MULTILINE)
    }
    assert {number: name for number, (name, _) in rows.items()} == {kind.value: kind.name for kind in Kind}
    for kind, record in SMALL_KINDS.items():
        assert rows[kind][1] == [field.name for field in msgspec.structs.fields(record)], kind.name


def test_the_numbers_in_the_text_are_those_of_the_code() -> None:
    for stated in (
        f"{SEGMENT_BYTES >> 20} MiB", f"{JOURNAL_BYTES_AT_MOST >> 30} GiB", f"{HEADROOM_BYTES >> 10} KiB",
        f"format version {FORMAT_VERSION}",
    ):  # fmt: skip
        assert stated in PAGE, stated
