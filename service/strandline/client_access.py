"""What a command shows to a service that asks: a token from a file or STRANDLINE_TOKEN, and whom it trusts (`--ca`).

Also how its address may be written, and what a refusal means: the same words and exit codes, whichever command asked.
For every command that calls a service, the load generator's too. What a service makes of it is `access_gate`.
"""

from __future__ import annotations

import argparse
import re
import ssl
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from urllib.parse import quote, urlsplit

import msgspec

from .cli_answers import NO, NOT_REACHED, WRONG_USE, complain
from .config_overrides import TOKEN_VARIABLE
from .errors import ConfigError
from .private_files import read_private
from .tls import trusting

_TOKEN = re.compile(r"[A-Za-z0-9._~+/-]{1,4096}=*", re.ASCII)  # b64token of RFC 6750, 2.1
_HOST_AND_PORT = re.compile(r"(\[[0-9A-Fa-f:.]+\]|[A-Za-z0-9._-]+)(:[0-9]{1,5})?/?", re.ASCII)
_WRONG_USE = (400, 401, 403, 404, 405, 413, 415, 421, 422)
NEEDS_TOKEN = (
    "this needs a token: name its file with --token-file, or set STRANDLINE_TOKEN; `strandline token make` makes one"
)
_THIS_MACHINE = ("localhost", "127.0.0.1", "::1")


@dataclass(frozen=True, slots=True)
class Caller:
    """Headers for each request, and the context for https (None: the system's own certificates)."""

    headers: Mapping[str, str] = field(default_factory=dict)
    context: ssl.SSLContext | None = None


def address_of(text: str, option: str = "--url") -> str:
    """A service's address as it may be written: http://..., https://..., or HOST:PORT for http. Raises ConfigError."""
    if text.startswith(("http://", "https://")):
        return text
    if _HOST_AND_PORT.fullmatch(text) is None:
        raise ConfigError([f"{option} {text!a} is no service's address: write http://HOST:PORT or https://HOST:PORT"])
    return f"http://{text}"


def is_address(text: str) -> bool:
    """Whether a text that may also name a file is an address: http://..., https://..., or HOST:PORT with its port."""
    found = _HOST_AND_PORT.fullmatch(text)
    return text.startswith(("http://", "https://")) or (found is not None and found[2] is not None)


def feed_address(url: str, feed: str, path: str) -> str:
    """Where a service has something about a feed, whose name never becomes a part of the path. Raises ConfigError."""
    try:
        return f"{url.rstrip('/')}/v1/feeds/{quote(feed, safe='')}/{path}"
    except UnicodeEncodeError:
        raise ConfigError([f"--feed {feed!a} is not UTF-8"]) from None


def detail_of(content: bytes) -> str:
    """The sentence in an answer that is no success; nothing where it holds none."""
    try:
        return str(msgspec.json.decode(content)["detail"])
    except (msgspec.DecodeError, LookupError, TypeError):
        return ""


def refusal(status: int, detail: str, shown: Caller) -> tuple[int, str]:
    """Exit code and words for an answer that is no success.

    2: asked wrongly, or not let in; 1: it refuses this now (409); 3: it cannot answer now, as one that is not there.
    """
    if status == 401 and not shown.headers:
        return WRONG_USE, NEEDS_TOKEN
    return WRONG_USE if status in _WRONG_USE else NO if status == 409 else NOT_REACHED, detail


def caller_of(options: argparse.Namespace, url: str, environ: Mapping[str, str]) -> Caller:
    """What --token-file (or STRANDLINE_TOKEN) and --ca say, for this address. Raises ConfigError."""
    return caller(url, options.token_file, options.ca, environ)


def caller(url: str, token_file: Path | None, ca: Path | None, environ: Mapping[str, str]) -> Caller:
    """See `caller_of`."""
    try:
        parts = urlsplit(url)
        host = parts.hostname
    except ValueError as error:
        raise ConfigError([f"{url}: is no address: {error}"]) from None
    token = ""
    if token_file is not None:
        token = _token(read_private(token_file, by_group=False), str(token_file))
    elif environ.get(TOKEN_VARIABLE):
        token = _token(environ[TOKEN_VARIABLE], f"variable {TOKEN_VARIABLE}")
    if ca is not None and parts.scheme != "https":
        raise ConfigError([f"--ca {ca}: only for https://..., not for {url}"])
    if token and parts.scheme != "https" and host not in _THIS_MACHINE:
        complain(f"warning: the token goes to {host} unencrypted, and whoever sees it can use it; use https://...")
    headers = {"Authorization": f"Bearer {token}"} if token else {}
    return Caller(headers, trusting(ca, "--ca") if ca is not None else None)


def _token(text: str, place: str) -> str:
    """The token in a text, which is never shown. Raises ConfigError."""
    token = text.strip(" \t\r\n")
    if _TOKEN.fullmatch(token) is None:
        raise ConfigError([f"{place}: holds no token: one line is expected, as `strandline token make` printed it"])
    return token
