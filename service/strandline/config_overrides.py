"""`STRANDLINE_...` environment variables: which there are for a configuration, and putting them in the file's place.

A variable is the key's place in capitals, two underscores between steps, feeds and sinks by name and `-` written `_`:

    STRANDLINE_LISTEN                                    listen
    STRANDLINE_LIMITS__BODIES_AT_MOST                    limits.bodies_at_most
    STRANDLINE_FEED__RIVER_GAUGES__SLACK                 slack of the feed "river-gauges"
    STRANDLINE_FEED__RIVER_GAUGES__SINK__SQLITE__PATH    path of its sink "sqlite"

The value is what would stand in the file, without quotes; a list's items are separated by commas. Names and kinds
cannot be overridden, and variables add no feed and no sink: they adjust what the file describes. Values are not judged
here, but with the file's own.
"""

from __future__ import annotations

import difflib
import re
from collections.abc import Iterator, Mapping
from typing import Any

import msgspec

from .config_intakes import INTAKE_KINDS
from .config_kinds import Kind
from .config_model import Config, Feed
from .config_read import Key, Place, Reading, Table, declared
from .config_sinks import SINK_KINDS

PREFIX = "STRANDLINE_"
FIXED = ("name", "kind")
_KINDS: dict[str, Mapping[str, type[msgspec.Struct]]] = {"sink": SINK_KINDS, "intake": INTAKE_KINDS}
TOKEN_VARIABLE = "STRANDLINE_TOKEN"  # what commands show to a service; no key of it

# A Kubernetes cluster with a service called strandline (or strandline-...) gives every container such variables
# (kubernetes.io, "Service: environment variables"); from memory. They are not ours to judge.
_CLUSTER = re.compile(
    r"STRANDLINE_(?:\w+_)?"
    r"(?:SERVICE_HOST|SERVICE_PORT(?:_\w+)?|PORT(?:_\d+_(?:TCP|UDP|SCTP)(?:_(?:PROTO|PORT|ADDR))?)?)"
)


def variables(raw: Mapping[str, Any]) -> dict[str, tuple[Place, Kind]]:
    """Every variable that can override something in a file with these feeds and sinks: name -> place and kind."""
    return {PREFIX + "__".join(map(_folded, steps)): (place, kind) for steps, place, kind in _settable(raw)}


def override(raw: dict[str, Any], environ: Mapping[str, str], reading: Reading) -> None:
    """Put the variables' values into `raw`; a variable that means nothing is a fault of `reading`."""
    known = variables(raw)
    for name in sorted(name for name in environ if name.startswith(PREFIX)):
        if name in known:
            place, kind = known[name]
            _put(raw, place, kind, environ[name], name, reading)
        elif name != TOKEN_VARIABLE and _CLUSTER.fullmatch(name) is None:
            near = difflib.get_close_matches(name[:200], known, 1, 0.8)
            advice = f"; did you mean {near[0]}?" if near else "; the list of keys is in deploy/configuration.md"
            reading.faults.append(f"variable {name[:200]} overrides no key{advice}")


def _put(raw: dict[str, Any], place: Place, kind: Kind, text: str, name: str, reading: Reading) -> None:
    reading.variables[place] = name
    if not text.isprintable():
        reading.fault(place, "holds characters that cannot be printed, or is not UTF-8")
        return
    table: Any = raw
    for step in place[:-1]:
        table = table.setdefault(step, {}) if isinstance(table, dict) else table[step]
    if isinstance(table, dict):  # else the file has no table there, which is a fault of its own
        table[str(place[-1])] = kind.from_text(text)


def _folded(step: str) -> str:
    return step.upper().replace("-", "_")


def _settable(raw: Mapping[str, Any]) -> Iterator[tuple[list[str], Place, Kind]]:
    """Steps of the variable's name, place in the file, and kind."""
    yield from _keys(Config, [], ())
    for index, feed in _named(raw.get("feed"), "name"):
        steps: list[str] = ["feed", feed["name"]]
        yield from _keys(Feed, steps, ("feed", index))
        for noun, known in _KINDS.items():
            for number, table in _named(feed.get(noun), "kind"):
                name = table.get("name", table["kind"])
                if table["kind"] in known and isinstance(name, str):
                    yield from _keys(known[table["kind"]], [*steps, noun, name], ("feed", index, noun, number))


def _keys(struct: type[msgspec.Struct], steps: list[str], place: Place) -> Iterator[tuple[list[str], Place, Kind]]:
    for item in declared(struct).values():
        if isinstance(item.mark, Key) and item.key not in FIXED:
            yield [*steps, item.key], (*place, item.key), item.mark.kind
        elif isinstance(item.mark, Table):
            yield from _keys(item.mark.struct, [*steps, item.key], (*place, item.key))


def _named(tables: object, key: str) -> Iterator[tuple[int, dict[str, Any]]]:
    """The tables of a list in which `key` is text, with their index."""
    for index, table in enumerate(tables if isinstance(tables, list) else ()):
        if isinstance(table, dict) and isinstance(table.get(key), str):
            yield index, table
