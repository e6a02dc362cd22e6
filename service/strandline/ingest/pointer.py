"""JSON Pointers (RFC 6901) and the decoding of only the fields that they name.

Here live the parser of a pointer, the Struct types that msgspec fills with the named fields and nothing else, and the
slow general way to the same values. What a value must be to count as a time or a source is not decided here.

A member that stands twice in an object counts with its last value, as JSON parsers do. A token of digits is an index
where an array stands and a name where an object stands; `-` names no item.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from operator import attrgetter
from typing import Any, NamedTuple

import msgspec

Tokens = tuple[str, ...]

TOKENS_AT_MOST = 200  # the most that `nesting_at_most` can be

_BAD_ESCAPE = re.compile("~(?![01])")
_INDEX = re.compile("0|[1-9][0-9]*")
_UNNAMEABLE = re.compile(r'["\\\x00-\x1f]')  # what msgspec cannot give to a Struct's field as its name

_OBJECT = msgspec.json.Decoder(dict[str, msgspec.Raw])
_ARRAY = msgspec.json.Decoder(list[msgspec.Raw])


class PointerError(ValueError):
    """A text that is no JSON Pointer, or pointers that no event can satisfy. str() is a sentence for a person."""


class Missing:
    """What stands at a pointer when nothing does. One object: MISSING."""


MISSING = Missing()


class Unheld(NamedTuple):
    """A number that neither an int nor a float of Python can hold, as it was written."""

    text: str


class Values(NamedTuple):
    """What stands at the pointers of one event; None for a pointer that the feed does not have."""

    time: Any
    source: Any
    id: Any


def parse_pointer(text: str) -> Tokens:
    """The tokens of a JSON Pointer, unescaped. The empty pointer names the whole document. Raises PointerError."""
    if text and not text.startswith("/"):
        raise PointerError(f"{text!r} is no JSON Pointer: it must begin with '/'")
    bad = _BAD_ESCAPE.search(text)
    if bad is not None:
        raise PointerError(f"{text!r} is no JSON Pointer: '~' at character {bad.start()} must be '~0' or '~1'")
    if not text.isascii() and any(0xD800 <= ord(character) < 0xE000 for character in text):
        raise PointerError(f"{text!r} names half a surrogate pair, which no JSON text can contain")
    steps = text.count("/")
    if steps > TOKENS_AT_MOST:
        raise PointerError(f"the pointer has {steps} steps, and no event is nested deeper than {TOKENS_AT_MOST}")
    return tuple(token.replace("~1", "/").replace("~0", "~") for token in text.split("/")[1:])


def nameable(token: str) -> bool:
    """Whether msgspec can give a Struct's field this name."""
    return not _UNNAMEABLE.search(token)


def fits_structs(tokens: Iterable[str]) -> bool:
    """Whether Structs can hold what stands at pointers of these tokens: all are names, and such as a field can have."""
    return all(nameable(token) and not _INDEX.fullmatch(token) for token in tokens)


def decoded_lines(decoder: msgspec.json.Decoder[Any], block: bytes, count: int) -> list[Any] | None:
    """The `count` lines of a block, decoded at once; None where one of them is not what the decoder asks for."""
    try:
        records: list[Any] = decoder.decode_lines(block)
    except (msgspec.MsgspecError, RecursionError):
        return None
    return records if len(records) == count else None


def raw_at(node: bytes | msgspec.Raw, tokens: Sequence[str]) -> bytes | msgspec.Raw | None:
    """The JSON at the tokens of a JSON text; None where nothing stands. Raises msgspec.DecodeError, RecursionError."""
    for token in tokens:
        first, found = bytes(memoryview(node)[:1]), None
        if first == b"{":
            found = _OBJECT.decode(node).get(token)
        elif first == b"[" and _INDEX.fullmatch(token):
            items = _ARRAY.decode(node)
            found = items[int(token)] if _within(token, items) else None
        if found is None:
            return None
        node = found
    return node


class Fields:
    """Finds time, source and id of events: all of a body's at once through `decoder`, or one line's through `read`.

    `decoder` is None where a pointer may go through an array, or holds a character that msgspec cannot name a field
    with; then every line goes through `read`, which takes some 2 µs instead of 0.3 µs.
    """

    def __init__(self, time_at: str, time_type: Any, source: str | None = None, id: str | None = None) -> None:
        """`time_type` is what msgspec shall decode the time as. Raises PointerError."""
        self._tokens = [None if text is None else parse_pointer(text) for text in (time_at, source, id)]
        paths = {tokens for tokens in self._tokens if tokens is not None}
        _check_paths(paths)
        self.decoder: msgspec.json.Decoder[Any] | None = None
        self._paths = Values(*Values._fields)
        if fits_structs(token for tokens in paths for token in tokens):
            self._build(time_type)

    def _build(self, time_type: Any) -> None:
        tree: dict[str, Any] = {}
        paths: dict[Tokens | None, str] = {None: ""}
        for role, tokens in zip(Values._fields, self._tokens, strict=True):
            if tokens is not None and tokens not in paths:
                paths[tokens] = _plant(tree, tokens, role, time_type if role == "time" else str | int)
        self._paths = Values(*(paths[tokens] for tokens in self._tokens))
        self._struct = _struct_of(tree)
        self.decoder = msgspec.json.Decoder(self._struct)

    # A comprehension over a literal name takes 8 ns a record, attrgetter 18 (measured); events are flat as a rule.

    def times(self, records: Sequence[Any]) -> Sequence[Any]:
        """The times of records that `decoder` or `record` made."""
        if self._paths.time == "time":
            return [record.time for record in records]
        return list(map(attrgetter(self._paths.time), records))

    def source_numbers(self, records: Sequence[Any], table: Mapping[str, int]) -> Sequence[int]:
        """The numbers that the table gives their sources. Raises KeyError when it lacks one."""
        if self._paths.source == "source":
            return [table[record.source] for record in records]
        return list(map(table.__getitem__, map(attrgetter(self._paths.source), records)))

    def sources(self, records: Sequence[Any]) -> Sequence[str | int]:
        """Their sources; only for a feed with a source pointer."""
        return list(map(attrgetter(self._paths.source), records))

    def ids(self, records: Sequence[Any]) -> Sequence[str | int]:
        """Their ids; only for a feed with an id pointer."""
        return list(map(attrgetter(self._paths.id), records))

    def record(self, values: Values) -> Any:
        """A record like those of `decoder` from values that `read` found and that have the types of their fields."""
        if self.decoder is None:
            return values
        nested: dict[str, Any] = {}
        for tokens, value in zip(self._tokens, values, strict=True):
            if tokens is not None:
                inner = nested
                for token in tokens[:-1]:
                    inner = inner.setdefault(token, {})
                inner[tokens[-1]] = value
        return msgspec.convert(nested, self._struct)

    def read(self, line: bytes) -> Values:
        """The values of one line, whatever they are: MISSING, an Unheld number, any JSON value.

        Raises msgspec.DecodeError when the line is not one JSON object, RecursionError when it is nested too deep.
        """
        members = _OBJECT.decode(line)
        return Values(*(None if tokens is None else _find(members, tokens) for tokens in self._tokens))

    def pick(self, document: dict[str, Any]) -> Values:
        """As `read`, of an object that was decoded already."""
        return Values(*(None if tokens is None else pick(document, tokens) for tokens in self._tokens))


def _check_paths(paths: set[Tokens]) -> None:
    for path in paths:
        if not path:
            raise PointerError("an empty pointer names the whole event, which is no time, source or id")
        for other in paths:
            if path != other and other[: len(path)] == path:
                inner, outer = ("/" + "/".join(tokens) for tokens in (other, path))
                raise PointerError(f"{inner!r} lies inside {outer!r}, which would have to be an object and a value")


def _plant(tree: dict[str, Any], tokens: Tokens, role: str, kind: Any) -> str:
    """Put a leaf into the tree of fields; return the attribute path that leads to it."""
    path = []
    for token in tokens[:-1]:
        name, tree = tree.setdefault(token, (f"inner_{len(tree)}", {}))
        path.append(name)
    tree[tokens[-1]] = (role, kind)
    return ".".join([*path, role])


def _struct_of(tree: dict[str, Any]) -> type[msgspec.Struct]:
    """A Struct with one required field for each token; gc=False: events hold no cycles, and the collector costs."""
    fields = [(name, _struct_of(kind) if isinstance(kind, dict) else kind) for name, kind in tree.values()]
    rename = {name: token for token, (name, _) in tree.items()}
    return msgspec.defstruct("Event", fields, rename=rename, gc=False)


def _find(members: dict[str, msgspec.Raw], tokens: Tokens) -> Any:
    first = members.get(tokens[0])
    node = None if first is None else raw_at(first, tokens[1:])
    if node is None:
        return MISSING
    try:
        return msgspec.json.decode(node)
    except msgspec.ValidationError:  # the syntax was checked; only a number can be beyond what Python holds
        return Unheld(bytes(node).decode())


def pick(node: Any, tokens: Sequence[str]) -> Any:
    """What stands at the tokens of a decoded value; MISSING where nothing does."""
    for token in tokens:
        if isinstance(node, dict) and token in node:
            node = node[token]
        elif isinstance(node, list) and _INDEX.fullmatch(token) and _within(token, node):
            node = node[int(token)]
        else:
            return MISSING
    return node


def _within(token: str, items: Sequence[Any]) -> bool:
    return len(token) < 19 and int(token) < len(items)  # the length first: int() of a long text is slow
