"""Reads one table after the other into structs and collects every fault, each with its place, its value and advice.

Knows how keys are declared (`Key`, `Table`, `Tables` in a struct's annotations), not which keys there are: that is
`config_model`. One value's own rules are its kind's (`config_kinds`). A faulty key keeps its default, so that reading
goes on; `Reading.is_faulty` then keeps rules that compare keys from judging a value that nobody wrote.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from functools import cache
from typing import Any, TypeVar, get_type_hints

import msgspec

from .config_kinds import Kind, shown

Place = tuple[str | int, ...]  # keys and indices (from 0) from the top; people see indices from 1
Struct = TypeVar("Struct", bound=msgspec.Struct)

TABLES_AT_MOST = 1_000  # feeds of a service, sinks of a feed
NEAR_MISSES_AT_MOST = 200  # looking for the key that was meant takes some 0.1 ms; a hostile file has 10^5 unknown keys


@dataclass(frozen=True, slots=True)
class Key:
    """A key with one value. `table` is a struct that it may hold instead."""

    kind: Kind
    about: str
    table: type[msgspec.Struct] | None = None


@dataclass(frozen=True, slots=True)
class Table:
    """A key that holds a table."""

    struct: type[msgspec.Struct]


@dataclass(frozen=True, slots=True)
class Tables:
    """A key that holds a list of tables: of one struct (under ""), or of several that `kind` tells apart."""

    structs: Mapping[str, type[msgspec.Struct]]
    later: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Declared:
    """One key as its struct declares it."""

    key: str  # in the file
    attribute: str  # in the struct
    required: bool
    default: Any
    mark: Key | Table | Tables


@cache
def declared(struct: type[msgspec.Struct]) -> dict[str, Declared]:
    """The keys of a struct by their name in the file, in the order in which they are declared."""
    hints = get_type_hints(struct, include_extras=True)
    keys = {}
    for item in msgspec.structs.fields(struct):
        mark = next(mark for mark in hints[item.name].__metadata__ if isinstance(mark, Key | Table | Tables))
        keys[item.encode_name] = Declared(item.encode_name, item.name, item.required, item.default, mark)
    return keys


def singular(place: Place) -> str:
    """What the table at a place is called in a sentence."""
    last = next((step for step in reversed(place) if isinstance(step, str)), None)
    return "the configuration" if last is None else f"a {last}" if last in ("feed", "sink") else f"`{last}`"


def tables_of(struct: type[msgspec.Struct], title: str = "") -> Iterator[tuple[str, type[msgspec.Struct]]]:
    """A struct and every table below it, each with its place in the file such as `feed.time`; top: an empty place."""
    yield title, struct
    for item in declared(struct).values():
        place = f"{title}.{item.key}" if title else item.key
        if isinstance(item.mark, Table):
            yield from tables_of(item.mark.struct, place)
        elif isinstance(item.mark, Key) and item.mark.table is not None:
            yield from tables_of(item.mark.table, place)
        elif isinstance(item.mark, Tables):
            for kind, below in item.mark.structs.items():
                yield from tables_of(below, f"{place} {kind}".rstrip())


def _blank(struct: type[Struct]) -> Struct:
    """A struct of defaults, empty text where there is none."""
    return struct(**{item.attribute: "" for item in declared(struct).values() if item.required})


@dataclass(slots=True)
class Reading:
    """One reading of one file.

    `feed_names` are the names by index as far as they are known, `homes` tells per key the tables that have it,
    `variables` the environment variable that a value came from. `faulty` and `written` are the places of values that
    could not and that could be read; what is in neither has its default.
    """

    file: str
    feed_names: Mapping[int, str]
    homes: Mapping[str, list[str]]
    variables: dict[Place, str] = field(default_factory=dict)
    faults: list[str] = field(default_factory=list)
    faulty: set[Place] = field(default_factory=set)
    written: set[Place] = field(default_factory=set)

    def fault(self, place: Place, sentence: str, value: str = "") -> None:
        """Note a fault: the place, then the value as it was written (if it is told), then the sentence."""
        self.faulty.add(place)
        self.faults.append(f"{self.where(place)}{f' = {value}' if value else ''} {sentence}")

    def is_faulty(self, place: Place) -> bool:
        """Whether the value at this place, or a table around it, could not be read."""
        return any(place[:length] in self.faulty for length in range(1, len(place) + 1))

    def where(self, place: Place) -> str:
        """A place for a person: `strandline.toml: feed[2].slack of "river-gauges"`, or the variable that set it."""
        if place in self.variables:
            return f"variable {self.variables[place]}"
        return f"{self.file}: {self.spelled(place)}"

    def spelled(self, place: Place) -> str:
        """A place without the file: `feed[2].slack of "river-gauges"`."""
        text = ""
        for step in place:
            text += f"[{step + 1}]" if isinstance(step, int) else f".{step}" if text else step
        match place:
            case ("feed", int() as index, _, *_) if index in self.feed_names:
                return f"{text} of {shown(self.feed_names[index])}"
        return text

    def table(
        self, struct: type[Struct], raw: Mapping[str, object], place: Place = (), spare: Iterable[str] = ()
    ) -> Struct:
        """The struct that a table gives; keys in `spare` are not the struct's, yet known. Never raises."""
        keys = declared(struct)
        for key in raw:
            if key not in keys and key not in spare:
                self.unknown(place, key, [*keys, *spare])
        values: dict[str, Any] = {item.attribute: "" for item in keys.values() if item.required}
        for item in keys.values():
            if item.key in raw:
                values.update(self._value(item, raw[item.key], (*place, item.key)))
            elif item.required:
                self.fault((*place, item.key), f"is missing: {singular(place)} needs it")
        return struct(**values)

    def unknown(self, place: Place, key: str, known: Iterable[str]) -> None:
        """Note a key that is not known here, with the table that it belongs to or the key that was likely meant."""
        near: list[str] = []
        if len(key) <= 64 and len(self.faults) < NEAR_MISSES_AT_MOST:
            near = difflib.get_close_matches(key.lower().replace("-", "_"), list(known), 1)
        advice = f"; did you mean `{near[0]}`?" if near else ""
        if key in self.homes:
            advice = f"; it belongs to {' or '.join(self.homes[key])}"
        name = key if len(key) <= 64 else key[:61] + "..."
        self.fault((*place, shown(name)[1:-1]), f"is no key of {singular(place)}{advice}")

    def _value(self, item: Declared, raw: object, place: Place) -> Iterator[tuple[str, Any]]:
        """Attribute and value, or nothing where the value has a fault."""
        match item.mark:
            case Key(kind, _, table):
                if table is not None and isinstance(raw, dict):
                    yield item.attribute, self.table(table, raw, place)
                    return
                try:
                    value = kind.read(raw)
                    self.written.add(place)
                    yield item.attribute, value
                except ValueError as error:
                    self.fault(place, str(error), "(not shown)" if kind.secret else shown(raw))
            case Table(struct):
                if isinstance(raw, dict):
                    yield item.attribute, self.table(struct, raw, place)
                else:
                    self.fault(place, f"is no table: write {item.key} = {{ ... }}", shown(raw))
            case Tables() as tables:
                yield item.attribute, tuple(self._tables(tables, raw, place))

    def _tables(self, tables: Tables, raw: object, place: Place) -> Iterator[msgspec.Struct]:
        header = ".".join(step for step in place if isinstance(step, str))
        if not isinstance(raw, list):
            self.fault(place, f"is no list of tables: write [[{header}]], with two brackets", shown(raw))
            return
        if len(raw) > TABLES_AT_MOST:
            self.fault(place, f"has more than {TABLES_AT_MOST:,} tables", shown(raw))
        for index, item in enumerate(raw[:TABLES_AT_MOST]):
            here = (*place, index)
            struct: type[msgspec.Struct] | None = None
            if not isinstance(item, dict):
                self.fault(here, f"is no table: write [[{header}]]", shown(item))
            else:
                struct = tables.structs.get("") or self._tagged(tables, item, here)
            if struct is not None:
                yield self.table(struct, item, here, [] if "" in tables.structs else ["kind"])
            else:  # keeps the places of those that follow
                self.faulty.add(here)
                yield _blank(next(iter(tables.structs.values())))

    def _tagged(self, tables: Tables, raw: Mapping[str, object], place: Place) -> type[msgspec.Struct] | None:
        """The struct that the table's `kind` names."""
        kind = raw.get("kind")
        known = ", ".join(tables.structs)
        here = (*place, "kind")
        if isinstance(kind, str) and kind in tables.structs:
            return tables.structs[kind]
        if kind is None:
            self.fault(here, f"is missing: one of {known}")
        elif kind in tables.later:
            self.fault(here, f"is not in this version yet: one of {known}", shown(kind))
        else:
            near = difflib.get_close_matches(kind[:64].lower(), tables.structs, 1) if isinstance(kind, str) else []
            self.fault(here, f"is none of {known}{f'; did you mean {near[0]}?' if near else ''}", shown(kind))
        return None
