"""How commands ask a running service or tell it something, and those that have it do something again."""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Callable
from typing import Any, TypeVar

from .cli_answers import FINE, NOT_REACHED, complain, harmless
from .client_access import address_of, feed_address
from .client_asking import Refusal, Unreachable, answer_at, unreachable

Answer = TypeVar("Answer")


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
    return _heard(options, path, body, _read)


def tell(options: argparse.Namespace, path: str, body: bytes) -> int | None:
    """POST an act that is answered with nothing: None once it is done; else an exit code, and the reason is told."""
    return _heard(options, path, body, _nothing)


def ask_service(options: argparse.Namespace, path: str) -> dict[str, Any] | int:
    """What the service at --url says at this path; else an exit code, and the reason is told."""
    return _heard_at(options, f"{address_of(options.url).rstrip('/')}{path}", None, _read)


def _heard(options: argparse.Namespace, path: str, body: bytes | None, read: Callable[[bytes], Answer]) -> Answer | int:
    return _heard_at(options, feed_address(address_of(options.url), options.feed, path), body, read)


def _heard_at(
    options: argparse.Namespace, address: str, body: bytes | None, read: Callable[[bytes], Answer]
) -> Answer | int:
    try:
        content = answer_at(options, address_of(options.url), address, body)
        try:
            return read(content)
        except ValueError as error:
            raise unreachable(address, error) from None
    except Refusal as refused:
        complain(harmless(str(refused)))
        return refused.code
    except Unreachable as error:
        complain(f"{harmless(str(error))}; is the service running there? Name it with --url")
        return NOT_REACHED


def _read(content: bytes) -> dict[str, Any]:
    told: dict[str, Any] = json.loads(content)
    return told


def _nothing(content: bytes) -> None:
    """A service answers an act with nothing; whatever says something is none."""
    if content:
        raise ValueError("the answer is not a service's")
