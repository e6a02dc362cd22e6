"""How a command asks a running service, or tells it something: one request, the answer's bytes, or why there is none.

What to ask for, and what is said about the answer, is each command's own. Whom to show a token: `client_access`.
"""

from __future__ import annotations

import argparse
import http.client
import os
import urllib.error
import urllib.request

from .cli_answers import WRONG_USE
from .client_access import Caller, caller_of, detail_of, feed_address, refusal

WITHIN_S = 600.0
ANSWER_BYTES_AT_MOST = 16 << 20
# What narrows a question, by an option that the command has.
_NARROWER = {
    "from_time": "bring --from and --to closer together",
    "limit": "name a smaller --limit",
    "time": "name --id, --time and --source together",
}


class Refusal(Exception):
    """The service answered, but with no success, or with too much. `code` is the exit code; the text says why."""

    def __init__(self, code: int, detail: str) -> None:
        super().__init__(detail)
        self.code = code


class Unreachable(Exception):
    """Nothing answered, or nothing that is a service; the text names the address."""


def answer_of(options: argparse.Namespace, url: str, path: str, body: bytes | None = None) -> bytes:
    """What the service at `url` says about --feed (a POST of JSON where there is a body).

    Raises Refusal, Unreachable, ConfigError.
    """
    return answer_at(options, url, feed_address(url, options.feed, path), body)


def answer_at(options: argparse.Namespace, url: str, address: str, body: bytes | None = None) -> bytes:
    """What the service at `url` says at one of its addresses. Raises as `answer_of`."""
    shown = caller_of(options, url, os.environ)
    headers = {"Content-Type": "application/json"} if body is not None else {}
    try:
        request = urllib.request.Request(address, body, headers)
        for name, value in shown.headers.items():
            request.add_unredirected_header(name, value)  # a token goes nowhere else
        content = _content(request, shown)
    except (OSError, http.client.HTTPException, ValueError) as error:
        raise unreachable(address, error) from None
    if len(content) > ANSWER_BYTES_AT_MOST:  # a part of it would be taken for the whole, or for a fault of the service
        raise Refusal(WRONG_USE, _too_long(options, address))
    return content


def _too_long(options: argparse.Namespace, address: str) -> str:
    ways = [way for name, way in _NARROWER.items() if hasattr(options, name)]
    advice = f"ask for less: {', or '.join(ways)}" if ways else f"fetch {address} with another client"
    return f"the answer has more than {ANSWER_BYTES_AT_MOST >> 20} MiB, which is more than is read; {advice}"


def _content(request: urllib.request.Request, shown: Caller) -> bytes:
    """The answer, or as much of it as tells that it is too long.

    Raises Refusal, and what the library raises; IncompleteRead where the answer breaks off.
    """
    try:
        with urllib.request.urlopen(request, timeout=WITHIN_S, context=shown.context) as answer:
            content: bytes = answer.read(ANSWER_BYTES_AT_MOST + 1)
            # CPython 3.11 says nothing where a read of so many bytes finds the end too early.
            if answer.length and len(content) <= ANSWER_BYTES_AT_MOST:
                raise http.client.IncompleteRead(content, answer.length)
            return content
    except urllib.error.HTTPError as error:
        with error:
            told = detail_of(error.read(ANSWER_BYTES_AT_MOST)) or f"the service answered {error.code} {error.reason}"
        raise Refusal(*refusal(error.code, told, shown)) from None


def unreachable(address: str, error: Exception) -> Unreachable:
    """For an answer that cannot be a service's, too."""
    why = str(error)
    if isinstance(error, http.client.IncompleteRead):
        why = f"its answer broke off after {len(error.partial)} bytes"
    return Unreachable(f"{address} could not be reached: {why}")
