"""The address of a report as /openapi.json describes it. Data only."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

Json = dict[str, Any]


def report_path(feed: Json, query: Callable[[str, str, Json], Json], problems: Json) -> Json:
    """The path's operations; `feed` is the parameter in the path, `query` makes one of the query."""
    text: Json = {"type": "string"}
    kinds = {"text/html": text, "text/markdown": text, "application/json": {"type": "object"}}
    answer = {
        "200": {
            "description": "the report; as JSON the facts that it is written from",
            "content": {kind: {"schema": schema} for kind, schema in kinds.items()},
        }
    }
    return {
        "get": {
            "summary": "What happened to the feed in a stretch of time of at most 31 days, for an incident's ticket",
            "parameters": [
                feed,
                query("from", "an RFC 3339 time (an hour before `to`)", text),
                query("to", "an RFC 3339 time (now)", text),
                query("format", "html is the default", {"type": "string", "enum": ["html", "markdown", "json"]}),
            ],
            "responses": {**answer, **problems},
        }
    }
