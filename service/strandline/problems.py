"""Errors as problem details (RFC 9457): one shape for every error that leaves over HTTP, aiohttp's own too."""

from __future__ import annotations

import logging
from collections.abc import Awaitable, Callable

import msgspec
from aiohttp import web

from .errors import REFUSALS, BodyError, StrandlineError, TooManyFaults

log = logging.getLogger(__name__)
MEDIA_TYPE = "application/problem+json"
Handler = Callable[[web.Request], Awaitable[web.StreamResponse]]


class Refused(Exception):
    """A request that was refused whole, for a reason of errors.REFUSALS."""

    def __init__(self, reason: str, detail: str, retry_after_s: int) -> None:
        super().__init__(detail)
        self.reason, self.detail, self.retry_after_s = reason, detail, retry_after_s


class NotThere(Exception):
    """Something that was named does not exist; str() says what and what there is."""


def problem(
    status: int,
    title: str,
    detail: str,
    *,
    kind: str | None = None,
    headers: dict[str, str] | None = None,
    more: dict[str, object] | None = None,
) -> web.Response:
    """A problem details answer. `kind` is a stable name of the problem's type; without it the status says all.

    `more` are extension members (RFC 9457 section 3.2).
    """
    members = {
        "type": f"urn:strandline:problem:{kind}" if kind else "about:blank",
        "title": title,
        "status": status,
        "detail": detail,
        **(more or {}),
    }
    return web.Response(
        status=status, body=msgspec.json.encode(members), content_type=MEDIA_TYPE, headers=headers or {}
    )


def refused(error: Refused) -> web.Response:
    """The answer to a refusal: when to come again is said where coming again helps."""
    status, title = REFUSALS[error.reason]
    headers = {"Retry-After": str(error.retry_after_s)} if status in (409, 429, 503) else {}
    return problem(status, title, error.detail, kind=error.reason, headers=headers)


def of_http(request: web.BaseRequest, error: web.HTTPException) -> web.Response:
    """One of aiohttp's own errors."""
    kept = {name: value for name, value in error.headers.items() if name in ("Allow", "Retry-After")}
    return problem(error.status, error.reason, _detail(request, error), headers=kept)


@web.middleware
async def as_problems(request: web.Request, handler: Handler) -> web.StreamResponse:
    """Turn every error of a handler, and of the router, into problem details."""
    try:
        return await handler(request)
    except Refused as error:
        return refused(error)
    except NotThere as error:
        return problem(404, "Not Found", str(error))
    except BodyError as error:
        headers = {"Accept-Encoding": error.accept_encoding} if error.accept_encoding else {}
        return problem(error.status, error.title, error.detail, headers=headers)
    except TooManyFaults as error:
        status, title = REFUSALS[error.reason]
        named = [{"line": line, "reason": reason, "detail": detail} for line, reason, detail in error.faults]
        return problem(status, title, str(error), kind=error.reason, more={"faults": named})
    except web.HTTPException as error:
        if error.status < 400:
            raise
        return of_http(request, error)
    except StrandlineError as error:
        return problem(503, "Service Unavailable", str(error), headers={"Retry-After": "5"})
    except Exception:
        if request.writer.output_size:  # too late for another answer: the connection ends, and aiohttp logs the error
            raise
        log.exception("an unforeseen error while answering %s %s", request.method, request.path)
        return problem(500, "Internal Server Error", "an unforeseen error; the service's log has the details")


def _detail(request: web.BaseRequest, error: web.HTTPException) -> str:
    if error.status == 404:
        return f"nothing is served at {request.path[:200]}; /openapi.json lists what is"
    if error.status == 405:
        return f"{request.method} is not possible here, only {error.headers.get('Allow', 'other methods')}"
    return error.text or error.reason
