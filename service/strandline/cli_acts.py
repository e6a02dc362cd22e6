"""How commands ask a running service or tell it something, and those that have it do something again."""

from __future__ import annotations

import argparse
import http.client
import json
import os
import sys
import urllib.error
import urllib.request
from typing import Any
from urllib.parse import quote

from .cli_answers import FINE, NOT_REACHED, complain, harmless
from .client_access import address_of, caller_of, refusal

WITHIN_S = 600.0
ANSWER_BYTES_AT_MOST = 4 << 20


def again(options: argparse.Namespace, lane: str, act: str) -> int:
    """Ask, and say what was done; 0 where it was, else the exit code of `client_access.refusal`, or 3: not reached."""
    wanted = {"after": options.after, "through": options.through}
    if act == "resend":
        wanted["sink"] = options.sink
    elif options.narrow is not None:
        wanted["reason"] = options.narrow
    done = ask(options, f"{lane}/{act}", json.dumps(wanted).encode())
    if isinstance(done, int):
        return done
    if options.json:
        sys.stdout.write(json.dumps(done) + "\n")
    else:
        sys.stdout.write(", ".join(f"{count:,} {name.replace('_', ' ')}" for name, count in done.items()) + "\n")
    return FINE


def ask(options: argparse.Namespace, path: str, body: bytes | None = None) -> dict[str, Any] | int:
    """The answer about --feed at --url (a POST where there is a body); else an exit code, and the reason is told."""
    content = _sent(options, path, body)
    if isinstance(content, int):
        return content
    try:
        told: dict[str, Any] = json.loads(content)
        return told
    except ValueError as error:
        return _not_reached(options, path, error)


def tell(options: argparse.Namespace, path: str, body: bytes) -> int | None:
    """POST an act that is answered with nothing: None once it is done; else an exit code, and the reason is told."""
    content = _sent(options, path, body)
    if isinstance(content, int):
        return content
    if content:  # a service answers an act with nothing; whatever said this is none
        return _not_reached(options, path, ValueError("the answer is not a service's"))
    return None


def _address(options: argparse.Namespace, path: str) -> str:
    return f"{address_of(options.url).rstrip('/')}/v1/feeds/{quote(options.feed, safe='')}/{path}"


def _sent(options: argparse.Namespace, path: str, body: bytes | None) -> bytes | int:
    """The answer's bytes, or an exit code."""
    shown = caller_of(options, address_of(options.url), os.environ)
    headers = {"Content-Type": "application/json"} if body is not None else {}
    try:
        request = urllib.request.Request(_address(options, path), body, headers)
        for name, value in shown.headers.items():
            request.add_unredirected_header(name, value)  # a token goes nowhere else
        with urllib.request.urlopen(request, timeout=WITHIN_S, context=shown.context) as answer:
            content: bytes = answer.read(ANSWER_BYTES_AT_MOST)
            return content
    except urllib.error.HTTPError as error:
        code, why = refusal(error.code, _detail(error), shown)
        complain(harmless(why))
        return code
    except (OSError, http.client.HTTPException, ValueError) as error:
        return _not_reached(options, path, error)


def _not_reached(options: argparse.Namespace, path: str, error: Exception) -> int:
    url = _address(options, path)
    complain(f"{url} could not be reached: {error}; is the service running there? Name it with --url")
    return NOT_REACHED


def _detail(error: urllib.error.HTTPError) -> str:
    try:
        return str(json.loads(error.read(ANSWER_BYTES_AT_MOST))["detail"])
    except (ValueError, LookupError, TypeError):
        return f"the service answered {error.code} {error.reason}"
