"""The OpenAPI document against a real process: schemathesis makes requests, sound and unsound, and judges the answers.

Its checks ask: no 5xx but a documented one, only documented statuses, content types and headers as documented, bodies
that keep their schemas, 405 for methods that are not offered, unsound requests refused. Not asked is
`positive_data_acceptance`: in JSON Schema 1.0 is an integer and any text is a time, and to refuse both is right.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from typing import Any

import msgspec
import pytest
import requests
import schemathesis
from helpers_service import FEED, Process, configuration
from hypothesis import HealthCheck, Phase, settings
from strandline.openapi import document

EXAMPLES = 120  # of each address, beside schemathesis' own list of cases at the edges; some 25 s in all (measured)
TEXTS = ("application/x-ndjson", "application/jsonl", "application/json-seq", "application/vnd.msgpack")
TEXTS += ("application/vnd.apache.arrow.stream",)


EVENT = {"observed_at": {"type": "string"}, "station": {"type": ["string", "integer"]}, "id": {"type": "string"}}


def asked() -> Any:
    """The document with the name of the feed that is there, and with what the bodies of lines may look like."""
    made = json.loads(msgspec.json.encode(document()))
    for operations in made["paths"].values():
        for operation in operations.values():
            for parameter in operation["parameters"]:
                if parameter["name"] == "feed":
                    parameter["schema"] = {"enum": [FEED]}
    content = made["paths"]["/v1/feeds/{feed}/events"]["post"]["requestBody"]["content"]
    for name in TEXTS:
        content[name]["schema"] = {"anyOf": [{}, {"type": "object", "properties": EVENT, "required": list(EVENT)}]}
    return made


@schemathesis.serializer(*TEXTS)
def as_it_is(context: schemathesis.SerializationContext, value: Any) -> bytes:
    """Texts are sent as they are; whatever else is drawn, as JSON."""
    if isinstance(value, bytes):
        return value
    return value.encode("utf-8", "surrogatepass") if isinstance(value, str) else json.dumps(value).encode()


# Two have no end, the third lasts as long as it is asked to.
ENDLESS = [f"/v1/feeds/{{feed}}/{name}" for name in ("ordered", "live", "capture")]
schema = schemathesis.openapi.from_dict(asked()).exclude(path=ENDLESS)


@pytest.fixture(scope="module")
def service(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Process]:
    folder = tmp_path_factory.mktemp("schemathesis")
    keys = {"id": "/id", "sources_at_most": 50, "body_bytes_at_most": "64KiB", "keys_at_most": 10}
    with Process(folder, configuration(folder, **keys)) as process:
        yield process
        assert process.document()["ledger"]["balanced"] is True
        assert "unforeseen" not in process.log.read_text(errors="replace")
        assert process.terminate() == 0


@pytest.fixture(scope="module")
def session() -> Iterator[requests.Session]:
    with requests.Session() as session:
        yield session


@schema.parametrize()
@settings(
    max_examples=EXAMPLES,
    phases=[Phase.explicit, Phase.generate],
    suppress_health_check=list(HealthCheck),
    database=None,
    derandomize=True,
)
def test_answers_are_as_documented(case: schemathesis.Case, service: Process, session: requests.Session) -> None:
    case.call_and_validate(
        base_url=service.url,
        session=session,
        excluded_checks=[schemathesis.checks.positive_data_acceptance],
    )


@pytest.mark.parametrize("name", ["after", "through"])
@pytest.mark.parametrize("number", [-1, 2**63, 10**30])
@pytest.mark.parametrize("path", ["late/resend", "refused/resend", "quarantine/readmit"])
def test_row_numbers_that_no_store_can_hold(service: Process, path: str, name: str, number: int) -> None:
    """Found by hand where schemathesis did not look, because the document had no bounds: SQLite holds 64 bits."""
    sink = {} if path == "quarantine/readmit" else {"sink": "sqlite"}
    answer = requests.post(f"{service.url}/v1/feeds/{FEED}/{path}", json={**sink, name: number}, timeout=30)
    assert (answer.status_code, answer.json()["status"]) == (422, 422)
