"""How commands ask a running service, and those that have it do something again: resend, redrive."""

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

from .cli_answers import FINE, NO, NOT_REACHED, complain, harmless
from .client_access import caller_of

WITHIN_S = 600.0
ANSWER_BYTES_AT_MOST = 4 << 20


def again(options: argparse.Namespace, lane: str, act: str) -> int:
    """Ask, and say what was done; 0 where it was, 1 where the service refused, 3 where it could not be reached."""
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
    url = f"{options.url.rstrip('/')}/v1/feeds/{quote(options.feed, safe='')}/{path}"
    shown = caller_of(options, options.url, os.environ)
    request = urllib.request.Request(url, body, {"Content-Type": "application/json"} if body is not None else {})
    for name, value in shown.headers.items():
        request.add_unredirected_header(name, value)  # a token goes nowhere else
    try:
        with urllib.request.urlopen(request, timeout=WITHIN_S, context=shown.context) as answer:
            told: dict[str, Any] = json.loads(answer.read(ANSWER_BYTES_AT_MOST))
            return told
    except urllib.error.HTTPError as error:
        complain(harmless(_detail(error)))
        return NO
    except (OSError, http.client.HTTPException, ValueError) as error:
        complain(f"{url} could not be reached: {error}; is the service running there? Name it with --url")
        return NOT_REACHED


def _detail(error: urllib.error.HTTPError) -> str:
    try:
        return str(json.loads(error.read(ANSWER_BYTES_AT_MOST))["detail"])
    except (ValueError, LookupError, TypeError):
        return f"the service answered {error.code} {error.reason}"
