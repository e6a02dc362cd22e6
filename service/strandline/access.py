"""Who may do what: roles, tokens, the rule of every address, and what an own page and an own host are. Decides only.

No HTTP library, no file, no clock: the time is an argument. The file of tokens is read in `access_tokens`, requests are
held to these rules in `access_gate`. Sources: RFC 9110 (status codes, challenges), RFC 6750 (bearer tokens in the
header, never in an address), RFC 6454 (origins).

A token has 256 random bits, so nobody can guess it or try it out: SHA-256 is kept of it, once per request. A slow
password hash would help nobody here, and would let strangers keep the processor busy.
"""

from __future__ import annotations

import hashlib
import hmac
import re
import secrets
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import NamedTuple

ROLES = {
    "ingest": "send events and promises",
    "read": "see feeds, events, metrics",
    "operate": "excuse, drain, steer, pause and resume, send again",
}
EVERY = "*"  # in the place of a feed's name
PREFIX = "strandline_"  # by which programs that look for leaked secrets can tell a token
_TOKEN = re.compile(rf"{PREFIX}[A-Za-z0-9_-]{{43}}", re.ASCII)
_BEARER = re.compile(r"bearer +(\S+) *", re.ASCII | re.IGNORECASE)
_HOST = re.compile(r"(\[[0-9a-f:.]{2,45}\]|[a-z0-9_.-]{1,253})(?::[0-9]{0,5})?", re.ASCII | re.IGNORECASE)
LOOPBACK_HOSTS = frozenset({"localhost", "127.0.0.1", "[::1]"})
SAFE = frozenset({"GET", "HEAD", "OPTIONS", "TRACE"})  # RFC 9110, 9.2.1


@dataclass(frozen=True, slots=True)
class Token:
    """One entry of the file: a name, the token's hash, and per role the feeds that it is for (or "*")."""

    name: str
    digest: bytes
    feeds: Mapping[str, frozenset[str]]
    expires_ns: int | None = None

    def may(self, role: str, feed: str) -> bool:
        """Whether it has the role for this feed; for "*": for every feed."""
        named = self.feeds.get(role, frozenset())
        return EVERY in named or feed in named

    def with_partitions(self, partitions: Mapping[str, Collection[str]]) -> Token:
        """With each role for a feed held for its partitions too; `partitions` are their names by feed."""
        feeds = {role: named.union(*(partitions.get(feed, ()) for feed in named)) for role, named in self.feeds.items()}
        return replace(self, feeds=feeds)

    def may_some(self, role: str) -> bool:
        """Whether it has the role for any feed at all."""
        return bool(self.feeds.get(role))


class Rule(NamedTuple):
    """What an address needs: a role (None: nothing), for the feed in the path ("feed"), "some" feed or "every" one."""

    role: str | None
    scope: str = "feed"


PUBLIC = Rule(None)
_FEED = "/v1/feeds/{feed}"
# Every address of the service. What is not here is let through to nobody once there are tokens; a test compares.
RULES: dict[tuple[str, str], Rule] = {
    ("POST", f"{_FEED}/events"): Rule("ingest"),
    ("POST", f"{_FEED}/marks"): Rule("ingest"),
    ("POST", f"{_FEED}/excuse"): Rule("operate"),
    ("POST", f"{_FEED}/drain"): Rule("operate"),
    ("POST", f"{_FEED}/slack"): Rule("operate"),
    ("POST", f"{_FEED}/sinks/{{sink}}/pause"): Rule("operate"),
    ("POST", f"{_FEED}/sinks/{{sink}}/resume"): Rule("operate"),
    ("POST", f"{_FEED}/late/resend"): Rule("operate"),
    ("POST", f"{_FEED}/refused/resend"): Rule("operate"),
    ("POST", f"{_FEED}/quarantine/readmit"): Rule("operate"),
    ("GET", "/v1/feeds"): Rule("read", "some"),  # shows those that the token may read
    ("GET", "/v1/cluster"): Rule("read", "some"),  # likewise
    ("GET", _FEED): Rule("read"),
    ("GET", f"{_FEED}/sources"): Rule("read"),
    ("GET", f"{_FEED}/slack"): Rule("read"),
    ("GET", f"{_FEED}/trace"): Rule("read"),
    ("GET", f"{_FEED}/holds"): Rule("read"),
    ("GET", f"{_FEED}/acts"): Rule("read"),
    ("GET", f"{_FEED}/report"): Rule("read"),
    ("GET", f"{_FEED}/live"): Rule("read"),
    ("GET", f"{_FEED}/history"): Rule("read"),
    ("GET", f"{_FEED}/late"): Rule("read"),
    ("GET", f"{_FEED}/quarantine"): Rule("read"),
    ("GET", f"{_FEED}/refused"): Rule("read"),
    ("GET", f"{_FEED}/ordered"): Rule("read"),
    ("GET", f"{_FEED}/capture"): Rule("read"),
    ("GET", "/metrics"): Rule("read", "every"),  # shows all feeds
    ("GET", "/health/live"): PUBLIC,
    ("GET", "/health/ready"): PUBLIC,  # without a token it tells the state, not the causes
    ("GET", "/"): PUBLIC,  # the dashboard's own files hold no data
    ("GET", "/dashboard/{file}"): PUBLIC,
    ("GET", "/openapi.json"): PUBLIC,  # the same for every installation
}


def rule_of(method: str, path: str) -> Rule | None:
    """The rule of an address, its parts in braces; None: there is none, so nobody may."""
    return RULES.get(("GET" if method == "HEAD" else method, path))


class Denied(NamedTuple):
    """Why a request is not let in: status, title, detail, and the challenge (WWW-Authenticate) or nothing."""

    status: int
    title: str
    detail: str
    challenge: str = ""


_REALM = 'Bearer realm="strandline"'


def _challenge(error: str, description: str, more: str = "") -> str:
    return f'{_REALM}, error="{error}", error_description="{description}"{more}'


NO_TOKEN = Denied(
    401,
    "Unauthorized",
    "this needs a token: send Authorization: Bearer TOKEN; `strandline token make` makes one",
    _REALM,  # RFC 6750, 3.1: without an error where nothing was sent
)
UNKNOWN = Denied(
    401,
    "Unauthorized",
    "what Authorization holds is no token of this service: it was mistyped, or taken out of the tokens file",
    _challenge("invalid_token", "the token is not known"),
)
EXPIRED = Denied(
    401,
    "Unauthorized",
    "the token has expired: make a new one with `strandline token make`",
    _challenge("invalid_token", "the token has expired"),
)
SEVERAL = Denied(
    400,
    "Bad Request",
    "there are several Authorization headers: send one",
    _challenge("invalid_request", "several Authorization headers"),
)


def identify(tokens: Sequence[Token], headers: Sequence[str], now_ns: int) -> Token | Denied:
    """The token that the Authorization headers of a request hold, or why there is none.

    All entries are compared, each in constant time: how long it takes tells nothing about which one is near. What has
    not the form of a token is not hashed.
    """
    if not headers:
        return NO_TOKEN
    if len(headers) > 1:
        return SEVERAL
    match = _BEARER.fullmatch(headers[0]) if len(headers[0]) <= 256 else None
    if match is None or _TOKEN.fullmatch(match[1]) is None:
        return UNKNOWN
    digest = digest_of(match[1])
    found: Token | None = None
    for token in tokens:  # measured: 0.13 us an entry; a file has at most 1,000
        if hmac.compare_digest(token.digest, digest):
            found = token
    if found is None:
        return UNKNOWN
    return EXPIRED if found.expires_ns is not None and found.expires_ns <= now_ns else found


def permit(token: Token, rule: Rule | None, feed: str) -> Denied | None:
    """Why this token may not do what the rule is for, in this feed; None where it may."""
    if rule is None:
        detail = "no token is for this: it is not known here (/openapi.json lists what is)"
        return Denied(403, "Forbidden", detail, _challenge("insufficient_scope", "no token is for this"))
    if rule.role is None:
        return None
    match rule.scope:
        case "feed":
            allowed, what = token.may(rule.role, feed), f"feed {feed[:100]!a}"
        case "some":
            allowed, what = token.may_some(rule.role), "any feed"
        case _:
            allowed, what = token.may(rule.role, EVERY), 'every feed ("*")'
    if allowed:
        return None
    detail = f"token {token.name} has not the role {rule.role} for {what}: add it to its entry in the tokens file"
    scope = f', scope="{rule.role}"'
    return Denied(403, "Forbidden", detail, _challenge("insufficient_scope", f"the role {rule.role} is needed", scope))


@dataclass(frozen=True, slots=True)
class Doors:
    """Which hosts and which pages' origins are the service's own. `hosts`: None where any name may be used."""

    scheme: str
    hosts: frozenset[str] | None = LOOPBACK_HOSTS
    origins: frozenset[str] = field(default_factory=frozenset)

    def check_host(self, headers: Sequence[str], *, required: bool) -> Denied | None:
        """RFC 9112, 3.2: exactly one Host. A host of another name means that the browser was led here by that name."""
        if not headers and not required:  # HTTP/1.0, which no browser speaks
            return None
        match = _HOST.fullmatch(headers[0]) if len(headers) == 1 else None
        if match is None:
            return Denied(400, "Bad Request", "exactly one Host header is needed, with a host and a port")
        if self.hosts is None or match[1].lower() in self.hosts:
            return None
        detail = f"{match[1][:100]} is no name of this service: add it to access.hosts if it should be"
        return Denied(421, "Misdirected Request", detail)

    def check_page(self, method: str, origins: Sequence[str], site: str, host: str) -> Denied | None:
        """Whether a page of somebody else's makes the browser send this; only a browser sends these headers."""
        if method in SAFE:
            return None
        if len(origins) > 1:
            return Denied(403, "Forbidden", "there are several Origin headers, so this is no page of the service's own")
        if origins and origins[0].lower() in self.origins:
            return None
        if origins and _origin(origins[0]) != f"{self.scheme}://{_plain(host, self.scheme)}":
            shown = ascii(origins[0][:100])
            detail = f"the page at {shown} is not this service's own: it may not act here, see access.origins"
            return Denied(403, "Forbidden", detail)
        if site.strip().lower() == "cross-site":  # Fetch Metadata, W3C working draft
            return Denied(403, "Forbidden", "a page of another site may not act here")
        return None


def _plain(host: str, scheme: str) -> str:
    """A host and port as an origin has it: lower case, without the scheme's own port (RFC 6454, 6.2)."""
    return host.lower().removesuffix(":443" if scheme == "https" else ":80")


def _origin(text: str) -> str:
    scheme, _, host = text.lower().partition("://")
    return f"{scheme}://{_plain(host, scheme)}"


def new_token() -> str:
    """A token of 256 random bits, in characters that need no quoting anywhere."""
    return PREFIX + secrets.token_urlsafe(32)


def digest_of(token: str) -> bytes:
    """What is kept of a token."""
    return hashlib.sha256(token.encode()).digest()
