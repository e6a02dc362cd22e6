"""A line that is called too short to be deep is not deep: held against the shortest text of each kind of nesting."""

from __future__ import annotations

import json

from hypothesis import example, given
from hypothesis import strategies as st
from strandline.ingest.nesting import too_short_to_be_deep


def depth_of(value: object) -> int:
    """Levels of a document, by the standard library's reading of it."""
    inner = value.values() if isinstance(value, dict) else value if isinstance(value, list) else None
    return 0 if inner is None else 1 + max(map(depth_of, inner), default=0)


def shortest(kinds: str) -> str:
    """The shortest text of this nesting, outermost first: o an object with an empty key, a an array."""
    text = ""
    for kind in reversed(kinds):
        text = ('{"":' + text + "}" if text else "{}") if kind == "o" else f"[{text}]"
    return text


@given(st.text("oa", max_size=14), st.integers(1, 14), st.integers(0, 4))
@example("o" * 8, 8, 0)
@example("a" * 8, 8, 0)
def test_no_deep_object_is_called_too_short(inner: str, limit: int, blanks: int) -> None:
    text = shortest("o" + inner)
    text = text[:-1] + " " * blanks + "}"
    assert depth_of(json.loads(text)) == len(inner) + 1
    if len(inner) + 1 > limit:
        assert not too_short_to_be_deep(text.encode(), len(text), limit)


def test_usual_events_are_called_so() -> None:
    """Else nothing would be spared."""
    assert too_short_to_be_deep(b'{"ts":1,"x":[1]}', 132, 64)
    assert not too_short_to_be_deep(b'{"ts":1,"x":[1]}', 133, 64)
    assert too_short_to_be_deep(b'{"ts":1,"x":1}', 321, 64)
    assert not too_short_to_be_deep(b'{"ts":1,"x":1}', 322, 64)
