"""Errors as problem details: every reason, every kind of error, and answers that had begun when the error came."""

from __future__ import annotations

import asyncio
import json
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager

import aiohttp
import pytest
from aiohttp import web
from helpers_service import PROBLEM
from strandline.errors import REFUSALS, BodyError, JournalError
from strandline.problems import MEDIA_TYPE, Handler, NotThere, Refused, as_problems, problem, refused

# RFC 9110 sections 15.5 and 15.6, RFC 6585 section 4: the names that a title should have where `type` is about:blank
# (RFC 9457 section 4.2.1). From memory; Python 3.11 still has older names for 413 and 422.
PHRASES = {
    400: "Bad Request",
    404: "Not Found",
    405: "Method Not Allowed",
    408: "Request Timeout",
    410: "Gone",
    413: "Content Too Large",
    415: "Unsupported Media Type",
    422: "Unprocessable Content",
    429: "Too Many Requests",
    500: "Internal Server Error",
    503: "Service Unavailable",
}


def raising(error: BaseException) -> Handler:
    async def handler(request: web.Request) -> web.StreamResponse:
        raise error

    return handler


@asynccontextmanager
async def served(handler: Handler) -> AsyncIterator[str]:
    """The address of a server with this one handler at /here."""
    app = web.Application(middlewares=[as_problems])
    app.router.add_post("/here", handler)
    runner = web.AppRunner(app)
    await runner.setup()
    site = web.TCPSite(runner, "127.0.0.1", 0)
    await site.start()
    try:
        yield f"http://127.0.0.1:{runner.addresses[0][1]}"
    finally:
        await runner.cleanup()


async def ask(
    handler: Handler, method: str = "POST", path: str = "/here"
) -> tuple[int, dict[str, object], dict[str, str]]:
    async with (
        served(handler) as url,
        aiohttp.ClientSession() as session,
        session.request(method, url + path) as answer,
    ):
        assert answer.headers["Content-Type"] == PROBLEM == MEDIA_TYPE
        return answer.status, json.loads(await answer.read()), dict(answer.headers)


@pytest.mark.parametrize("reason", sorted(REFUSALS))
def test_every_refusal_says_its_reason_and_when_to_come_again_where_that_helps(reason: str) -> None:
    status, title = REFUSALS[reason]
    answer = refused(Refused(reason, "because", 7))
    assert isinstance(answer.body, bytes)
    assert json.loads(answer.body) == {
        "type": f"urn:strandline:problem:{reason}",
        "title": title,
        "status": status,
        "detail": "because",
    }
    assert answer.status == status and 400 <= status <= 599
    # RFC 9110 section 10.2.3 and RFC 6585 section 4: with 503 and 429 it says how long to wait.
    assert answer.headers.get("Retry-After") == ("7" if status in (409, 429, 503) else None)


@pytest.mark.parametrize(
    ("error", "status"),
    [
        (NotThere("there is no feed"), 404),
        (BodyError(413, "Content Too Large", "too much"), 413),
        (BodyError(415, "Unsupported Media Type", "unknown", accept_encoding="gzip"), 415),
        (web.HTTPBadRequest(text="a whole number"), 400),
        (web.HTTPServiceUnavailable(text="later", headers={"Retry-After": "3"}), 503),
        (JournalError("the journal is damaged"), 503),
        (RuntimeError("secret"), 500),
    ],
    ids=repr,
)
async def test_every_error_of_a_handler(error: Exception, status: int, caplog: pytest.LogCaptureFixture) -> None:
    found, members, headers = await ask(raising(error))
    assert found == members["status"] == status
    assert members["title"] == PHRASES[status] and members["type"] == "about:blank"
    if status == 500:  # what went wrong is the log's business, not the sender's
        assert "secret" not in str(members) and "secret" in caplog.text
    else:
        told = error.text if isinstance(error, web.HTTPException) else str(error)
        assert members["detail"] == told
        assert not caplog.records
    assert ("Accept-Encoding" in headers) == (status == 415)
    assert ("Retry-After" in headers) == (status == 503)


async def test_the_routers_own_errors() -> None:
    status, members, headers = await ask(raising(RuntimeError()), "GET")
    assert (status, members["title"], headers["Allow"]) == (405, PHRASES[405], "POST")
    status, members, _ = await ask(raising(RuntimeError()), "GET", "/there")
    assert (status, members["title"]) == (404, PHRASES[404])


async def test_what_is_no_error_passes() -> None:
    async with (
        served(raising(web.HTTPFound("/there"))) as url,
        aiohttp.ClientSession() as session,
        session.post(url + "/here", allow_redirects=False) as answer,
    ):
        assert answer.status == 302


async def test_an_error_behind_a_begun_answer_ends_the_connection(caplog: pytest.LogCaptureFixture) -> None:
    """A second answer in the middle of the first would be taken for a part of it."""

    async def handler(request: web.Request) -> web.StreamResponse:
        response = web.StreamResponse()
        await response.prepare(request)
        await response.write(b"begun")
        raise RuntimeError("in the middle")

    async with served(handler) as url, aiohttp.ClientSession() as session, session.post(url + "/here") as answer:
        assert answer.status == 200
        with pytest.raises(aiohttp.ClientPayloadError):
            await answer.read()
    assert "in the middle" in caplog.text


async def test_a_handler_that_is_cancelled_stays_cancelled() -> None:
    with pytest.raises(asyncio.CancelledError):
        await as_problems(object(), raising(asyncio.CancelledError()))  # type: ignore[arg-type]


def test_a_problem_without_a_kind_is_about_blank() -> None:
    answer = problem(410, "Gone", "it is in the sinks", headers={"Retry-After": "1"})
    assert isinstance(answer.body, bytes) and json.loads(answer.body)["type"] == "about:blank"
    assert answer.headers["Retry-After"] == "1"
