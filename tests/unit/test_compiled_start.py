"""Compiled decoding from outside: what it needs to start, what it says without, and that it reads no byte too far."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest
from strandline.app import fixed_changes
from strandline.config import parse
from strandline.decoding import copier_of, decoder_of
from strandline.errors import ConfigError
from strandline.ingest.compiled import Scanner
from strandline.ingest.formats import NDJSON
from strandline.ingest.offload import Aside, decoded

TESTS = Path(__file__).resolve().parents[1]
FEED = '[[feed]]\nname = "river"\ndecoding = "compiled"\n'


def child(mode: str, **environment: str) -> subprocess.CompletedProcess[str]:
    given = [sys.executable, "-W", "error", str(TESTS / "compiled_child.py"), mode]
    return subprocess.run(given, env=os.environ | environment, capture_output=True, text=True, timeout=120, check=False)


def test_no_byte_is_read_behind_a_payload() -> None:
    """Bodies end where memory ends: the process would die of a segmentation fault."""
    run = child("guard")
    assert run.returncode == 0, run.stderr
    scanned, taken = map(int, run.stdout.split())
    assert scanned > 10_000
    assert 1_000 < taken < scanned - 1_000


def test_no_byte_is_copied_from_behind_a_mapping() -> None:
    run = child("copies")
    assert run.returncode == 0, run.stderr
    assert run.stdout == "all\n"


def test_where_no_code_can_be_made_it_says_so() -> None:
    run = child("mdwe")
    assert run.returncode == 0, run.stderr
    decoder, copier = run.stdout.splitlines()
    assert decoder.startswith('decoding = "compiled" needs to make code while it runs: let it (systemd: MemoryDeny')
    assert copier == decoder


def test_copies_are_compiled_before_the_first_batch() -> None:
    run = child("warm")
    assert (run.returncode, run.stdout) == (0, "1\n"), run.stderr


def test_where_numba_is_not_installed_it_says_so() -> None:
    run = child("bare")
    assert run.returncode == 0, run.stderr
    assert run.stdout.count("needs the package") == 2
    assert run.stdout.count("pip install 'strandline[compiled]', or write decoding = \"plain\"") == 2


def test_where_numba_cannot_be_loaded_it_says_so() -> None:
    run = child("unwilling")
    assert run.returncode == 0, run.stderr
    refusals = run.stdout.splitlines()
    assert len(refusals) == 2
    for said in refusals:
        assert said.startswith('decoding = "compiled" cannot load numba: cannot import name ')
        assert said.endswith('; mend that, or write decoding = "plain"')


def test_what_was_made_is_kept_where_the_environment_says(tmp_path: Path) -> None:
    run = child("guard", NUMBA_CACHE_DIR=str(tmp_path))
    assert run.returncode == 0, run.stderr
    assert list(tmp_path.rglob("compiled_lines.scan-*.nbi"))


def test_a_feed_that_asks_for_it_gets_it() -> None:
    (feed,) = parse(FEED + 'time = { at = "/ts", unit = "ns" }\nsource = "/station"\n', {}).feeds
    arrival = decoder_of(feed).decode(b'{"ts":1,"station":"weir"}\n', NDJSON, {})
    assert (arrival.times.tolist(), arrival.new_sources) == ([1], ["weir"])
    assert decoder_of(feed).is_compiled
    assert copier_of(feed) is not None
    (feed,) = parse('[[feed]]\nname = "river"\n', {}).feeds
    assert not decoder_of(feed).is_compiled
    assert copier_of(feed) is None


@pytest.mark.parametrize("more", ['id = "/id"', 'time = { at = "/data/time" }', 'source = "/time"', 'source = "/0"'])
def test_a_feed_that_cannot_be_served_is_told(more: str) -> None:
    with pytest.raises(ConfigError, match="reads events whose time and source are two members of the event"):
        parse(FEED + more, {})


def test_it_changes_only_with_a_restart() -> None:
    """The code is made at the start: in a running service it would hold everything up for seconds."""
    before, after = parse(FEED, {}), parse(FEED.replace("compiled", "plain"), {})
    assert fixed_changes(before, after) == ["decoding of feed river"]


@pytest.mark.parametrize("end", [b"", b"\n"])
async def test_a_body_that_was_not_proven_is_scanned_no_second_time(
    end: bytes, monkeypatch: pytest.MonkeyPatch
) -> None:
    """One with lines to be taken out is: the scan takes none."""
    (feed,) = parse(FEED + 'time = { at = "/ts", unit = "ns" }\nsource = "/station"\n', {}).feeds
    decoder, aside, scans = decoder_of(feed), Aside(), []
    for name in ("columns", "columns_of"):
        monkeypatch.setattr(Scanner, name, lambda *_given, name=name: scans.append(name))
    line = b'{"ts":1,"station":"weir"}'
    for body, expected in (
        (line + b"\n" + line + end, ["columns_of"]),
        (line + b"\r\n" + line + end, ["columns_of", "columns"]),
        (line + b"\n\n" + line + end, ["columns_of", "columns"]),
    ):
        assert len(decoder.decode(body, NDJSON, {}).times) == 2
        assert scans == expected
        scans.clear()
        assert len((await decoded(decoder, body, NDJSON, {}, aside)).times) == 2
        assert scans == expected
        scans.clear()
    assert len(decoder.decode(b"[" + line + b"]", "application/json", {}).times) == 1
    assert scans == ["columns"]
    aside.close()
