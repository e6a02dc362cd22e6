"""`strandline late resend`, `refused resend`, `quarantine redrive`: have a running service do it again."""

from __future__ import annotations

import argparse
import http.client
import json
import sys
import urllib.error
import urllib.request
from urllib.parse import quote

from .cli_answers import FINE, NO, NOT_REACHED, complain, harmless

WITHIN_S = 600.0
ANSWER_BYTES_AT_MOST = 1 << 20


def again(options: argparse.Namespace, lane: str, act: str) -> int:
    """Ask, and say what was done; 0 where it was, 1 where the service refused, 3 where it could not be reached."""
    wanted = {"after": options.after, "through": options.through}
    if act == "resend":
        wanted["sink"] = options.sink
    elif options.narrow is not None:
        wanted["reason"] = options.narrow
    url = f"{options.url.rstrip('/')}/v1/feeds/{quote(options.feed, safe='')}/{lane}/{act}"
    request = urllib.request.Request(url, json.dumps(wanted).encode(), {"Content-Type": "application/json"})
    try:
        with urllib.request.urlopen(request, timeout=WITHIN_S) as answer:
            done = json.loads(answer.read(ANSWER_BYTES_AT_MOST))
    except urllib.error.HTTPError as error:
        complain(harmless(_detail(error)))
        return NO
    except (OSError, http.client.HTTPException, ValueError) as error:
        complain(f"{url} could not be reached: {error}; is the service running there? Name it with --url")
        return NOT_REACHED
    if options.json:
        sys.stdout.write(json.dumps(done) + "\n")
    else:
        sys.stdout.write(", ".join(f"{count:,} {name.replace('_', ' ')}" for name, count in done.items()) + "\n")
    return FINE


def _detail(error: urllib.error.HTTPError) -> str:
    try:
        return str(json.loads(error.read(ANSWER_BYTES_AT_MOST))["detail"])
    except (ValueError, LookupError, TypeError):
        return f"the service answered {error.code} {error.reason}"
