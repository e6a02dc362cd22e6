"""Values out of events by pointer: the fast way and the line-by-line way find what plain JSON parsing finds."""

from __future__ import annotations

import json
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st
from strandline.ingest.pointer import PointerError
from strandline.sinks.event_fields import UNHELD, EventFields

VALUES = st.recursive(
    st.none()
    | st.booleans()
    | st.integers(-(2**70), 2**70)
    | st.floats(allow_nan=False, allow_infinity=False)
    | st.text(),
    lambda inner: (
        st.lists(inner, max_size=3) | st.dictionaries(st.sampled_from(["a", "b", "0", "x~/"]), inner, max_size=3)
    ),
    max_leaves=6,
)
EVENTS = st.lists(st.dictionaries(st.sampled_from(["a", "b", 'q"uote', ""]), VALUES, max_size=4), max_size=6)
POINTERS = ["/a", "/b", "/a/b", "/a/0", "/b/0/a", "/a/x~0~1", "/"]
PARTS = {"/a": ["a"], "/b": ["b"], "/a/b": ["a", "b"], "/a/0": ["a", "0"], "/b/0/a": ["b", "0", "a"],
         "/a/x~0~1": ["a", "x~/"], "/": [""], '/q"uote': ['q"uote']}  # fmt: skip


def plain(event: Any, pointer: str) -> Any:
    """RFC 6901, section 4, over what json.loads gives."""
    for part in PARTS[pointer]:
        if isinstance(event, dict):
            event = event.get(part)
        elif isinstance(event, list) and part.isdecimal():
            event = event[int(part)] if int(part) < len(event) else None
        else:
            return None
    return event


@given(EVENTS, st.booleans())
def test_every_pointer_finds_what_stands_there(events: list[dict[str, Any]], unnameable: bool) -> None:
    """With a name that a struct's field cannot have, every line goes the slow way."""
    pointers = [*POINTERS, '/q"uote'] if unnameable else POINTERS
    block = b"".join(json.dumps(event).encode() + b"\n" for event in events)
    found = EventFields(pointers).columns(block, len(events))
    expected = [[plain(json.loads(json.dumps(event)), pointer) for event in events] for pointer in pointers]
    assert repr(found) == repr(expected)


def test_one_line_that_cannot_be_held_does_not_spoil_the_others() -> None:
    lines = [b'{"a":1,"b":"x"}', b'{"a":1e999,"b":"y"}', b'{"a":[1e999],"b":"z"}', b'{"b":3}', b'{"a":{"b":2e400}}']
    found = EventFields(["/a", "/b", "/a/b"]).columns(b"\n".join(lines) + b"\n", len(lines))
    assert found[0] == [1, UNHELD, UNHELD, None, UNHELD]
    assert found[1] == ["x", "y", "z", 3, None]
    assert found[2] == [None, UNHELD, UNHELD, None, UNHELD]


def test_a_name_that_stands_twice_counts_with_its_last_value() -> None:
    block = b'{"a":1,"a":2}\n'
    assert EventFields(["/a"]).columns(block, 1) == [[2]]
    assert EventFields(["/a", '/q"']).columns(block, 1) == [[2], [None]]


def test_lines_that_are_no_objects_hold_nothing() -> None:
    assert EventFields(["/a"]).columns(b'[1]\n{"a":1}{"a":2}\n', 2) == [[UNHELD, UNHELD]]


def test_no_lines_give_empty_columns() -> None:
    assert EventFields(["/a", "/b"]).columns(b"", 0) == [[], []]


@pytest.mark.parametrize("pointer", ["a", "/~2"])
def test_a_text_that_is_no_pointer_is_refused(pointer: str) -> None:
    with pytest.raises(PointerError):
        EventFields([pointer])
