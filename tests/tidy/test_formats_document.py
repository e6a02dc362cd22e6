"""deploy/formats.md against the code: every media type, every reason of a fault, every limit that it names."""

from __future__ import annotations

import re
from pathlib import Path

from strandline.config import Config, Feed, Limits
from strandline.config_read import declared
from strandline.errors import FAULT_REASONS
from strandline.ingest.encodings import CODINGS_AT_MOST
from strandline.ingest.formats import FORMATS

TEXT = (Path(__file__).resolve().parents[2] / "deploy" / "formats.md").read_text()
ROWS = [[cell.strip() for cell in row.split("|")] for row in re.findall(r"^\| *(`.*) \|$", TEXT, re.MULTILINE)]


def test_the_table_of_formats_is_the_codes() -> None:
    told = {row[0].strip("`"): row[1] for row in ROWS if "/" in row[0]}
    assert told == {name: form.what for name, form in FORMATS.items()}


def test_the_reasons_are_the_codes() -> None:
    told = {row[0].strip("`"): row[1] for row in ROWS if "/" not in row[0]}
    assert told == FAULT_REASONS


def test_the_limits_that_it_names_are_keys() -> None:
    keys = {*declared(Feed), *declared(Config), *(f"limits.{key}" for key in declared(Limits))}
    named = set(re.findall(r"`((?:limits\.)?\w+_(?:at_most|within))`", TEXT))
    assert len(named) >= 6
    assert named <= keys
    assert CODINGS_AT_MOST == 2  # "two of them one over the other"
