"""The OpenAPI document: valid, in agreement with the router, and kept by the answers of a running service."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import msgspec
import pytest
from helpers_service import FEED, Answer, body_of, configuration, event_line, events, eventually, running
from openapi_schema_validator import OAS31Validator
from openapi_spec_validator import OpenAPIV31SpecValidator
from strandline.errors import FAULT_REASONS, REFUSALS
from strandline.ingest.formats import MEDIA_TYPES
from strandline.openapi import document as made

MISSING = "sea-gauges"


def document() -> Any:
    """The document as it leaves: as JSON."""
    return json.loads(msgspec.json.encode(made()))


def resolved(node: Any) -> Any:
    """The document with every reference replaced by what it refers to."""
    if isinstance(node, dict):
        if "$ref" in node:
            found: Any = document()
            for name in node["$ref"].removeprefix("#/").split("/"):
                found = found[name]
            return resolved(found)
        return {key: resolved(value) for key, value in node.items()}
    return [resolved(each) for each in node] if isinstance(node, list) else node


def test_the_document_is_valid() -> None:
    """Outside opinion: openapi-spec-validator, against the OpenAPI Initiative's own schema of version 3.1."""
    assert list(OpenAPIV31SpecValidator(document()).iter_errors()) == []


async def test_its_addresses_are_the_routers(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        assert service.service._runner is not None
        served = {
            (route.resource.canonical, route.method.lower())
            for route in service.service._runner.app.router.routes()
            if route.resource is not None and route.method != "HEAD"
        }
    told = {(path, method) for path, operations in document()["paths"].items() for method in operations}
    assert {row for row in served if not is_page(row[0])} == told


def is_page(path: str) -> bool:
    """Whether an address belongs to the dashboard, whose pages are no interface for programs."""
    return not path.startswith(("/v1/", "/health/", "/metrics", "/openapi.json"))


def test_its_closed_lists_are_the_codes() -> None:
    schemas = document()["components"]["schemas"]
    assert all(reason in schemas["AnswerFault"]["description"] for reason in FAULT_REASONS)
    assert all(reason in schemas["Problem"]["description"] for reason in REFUSALS)
    content = document()["paths"]["/v1/feeds/{feed}/events"]["post"]["requestBody"]["content"]
    assert set(content) == set(MEDIA_TYPES)


@pytest.mark.parametrize("reason", sorted(REFUSALS))
def test_every_refusal_has_its_status_at_some_address(reason: str) -> None:
    statuses = {
        status
        for path, operations in document()["paths"].items()
        if path.startswith("/v1/feeds/{feed}/")
        for operation in operations.values()
        for status in operation["responses"]
    }
    assert str(REFUSALS[reason][0]) in statuses


def keeps(path: str, method: str, answer: Answer) -> None:
    """Assert that the document foresees this answer, and that its content is as the document says."""
    responses = resolved(document()["paths"][path][method]["responses"])
    assert str(answer.status) in responses, f"{method} {path} answered {answer.status}: {answer.content!r}"
    content = responses[str(answer.status)].get("content")
    if not content:
        assert answer.content == b""
        return
    media_type = answer.headers["Content-Type"].split(";")[0]
    schema = content[media_type]["schema"]
    value = json.loads(answer.content) if "json" in media_type else answer.content.decode()
    assert [error.message for error in OAS31Validator(schema).iter_errors(value)] == []


async def test_answers_of_a_running_service_are_as_the_document_says(tmp_path: Path) -> None:
    of_feed = "/v1/feeds/{feed}"
    text = configuration(tmp_path, slack="5s", sources_at_most=2, body_bytes_at_most="2KiB")
    async with running(text) as service:
        await service.send([100, 101])
        mixed = body_of(event_line(1), b"{", event_line(102))
        promise = {"source": "gw-1", "time": "2023-11-14T22:13:29Z"}
        posts: list[tuple[str, Any, int, dict[str, str]]] = [
            ("events", mixed, 200, {}),
            ("events", events([1], "gw-2") + events([1], "gw-3"), 429, {}),
            ("events", events(range(100)), 413, {}),
            ("events", mixed, 415, {"Content-Encoding": "br"}),
            ("events", mixed, 415, {"Content-Type": "text/plain"}),
            ("events", b"[", 422, {"Content-Type": "application/json"}),
            ("events", mixed, 400, {"Idempotency-Key": "bare"}),
            ("marks", promise, 204, {}),
            ("marks", {}, 422, {}),
            ("excuse", {"source": "gw-1"}, 204, {}),
            ("excuse", {"source": "gw-9"}, 404, {}),
            ("excuse", {"source": 1}, 422, {}),
            ("drain", b"", 204, {}),
        ]
        for name, body, status, headers in posts:
            answer = await service.post(name, body, headers=headers)
            assert answer.status == status, answer.content
            keeps(f"{of_feed}/{name}", "post", answer)
        await eventually(lambda: service.runtime.feed.state.outbox.aside_events == 0)
        for name in ("", "/sources", "/late", "/quarantine", "/refused"):
            keeps(of_feed + name, "get", await service.get(f"/v1/feeds/{FEED}{name}"))
            keeps(of_feed + name, "get", await service.get(f"/v1/feeds/{MISSING}{name}"))
            if name:
                keeps(of_feed + name, "get", await service.get(f"/v1/feeds/{FEED}{name}?after=x"))
        for query, status in (("?after=x", 400), ("?after=99", 400)):
            answer = await service.get(f"ordered{query}")
            assert answer.status == status
            keeps(f"{of_feed}/ordered", "get", answer)
        for path in ("/v1/feeds", "/metrics", "/health/live", "/health/ready", "/openapi.json"):
            keeps(path, "get", await service.get(path))
        assert json.loads((await service.get("/openapi.json")).content) == document()
        service.runtime.accepting = False
        keeps("/health/ready", "get", await service.get("/health/ready"))
        keeps(f"{of_feed}/events", "post", await service.post("events", mixed))
        service.runtime.accepting = True
