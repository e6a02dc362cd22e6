"""The file of tokens: its keys, its rules, reading it whole, and a new entry for it.

    [[token]]
    name = "gateway-north"
    hash = "sha256:..."                 # from `strandline token make`; the token itself stands nowhere
    ingest = ["river-gauges"]           # feeds, or ["*"] for every feed
    read = []
    operate = []
    expires = 2027-01-01T00:00:00Z      # a TOML date-time with its offset; without it: until the entry is removed

Every fault is told at once, each with its place and value. What a token may do is `access`.
"""

from __future__ import annotations

import difflib
import re
import tomllib
from collections.abc import Collection, Iterator
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Annotated

import msgspec
from msgspec import field

from .access import EVERY, PREFIX, ROLES, Token, digest_of
from .config_kinds import Kind, list_text, name, quoted, shown
from .config_read import Key, Reading, Tables
from .errors import ConfigError
from .private_files import read_private

FEEDS_AT_MOST = 1_000
TOKEN_NAME = name("a-z0-9._-", "1 to 63 of a-z, 0-9, ., _ and -, the first a letter or digit")
_FEED_NAME = re.compile(r"[a-z0-9][a-z0-9-]{0,62}", re.ASCII)
_HASH = re.compile(r"sha256:([0-9a-f]{64})", re.ASCII)
_BEGIN = datetime(1970, 1, 1, tzinfo=UTC)


def _hash() -> Kind:
    def read(raw: object) -> bytes:
        if isinstance(raw, str) and raw.startswith(PREFIX):
            raise ValueError("is a token itself, which must not stand here: take it back, and make a new one")
        match = _HASH.fullmatch(raw) if isinstance(raw, str) else None
        if match is None:
            raise ValueError('is no hash: write "sha256:" and 64 digits of 0-9, a-f, as `strandline token make` does')
        return bytes.fromhex(match[1])

    return Kind("`sha256:` and 64 hexadecimal digits", read, lambda value: quoted(f"sha256:{value.hex()}"), secret=True)


def _feeds() -> Kind:
    def read(raw: object) -> frozenset[str]:
        if not isinstance(raw, list) or len(raw) > FEEDS_AT_MOST:
            raise ValueError(f'is no list of at most {FEEDS_AT_MOST:,} feeds: write ["river-gauges"], or ["*"] for all')
        for item in raw:
            if not isinstance(item, str) or (item != EVERY and _FEED_NAME.fullmatch(item) is None):
                raise ValueError(f'holds {shown(item)}, which is no feed\'s name and not "*"')
        return frozenset(raw)

    return Kind('list of feeds, or `["*"]`', read, lambda feeds: list_text(sorted(feeds)))


def _instant() -> Kind:
    def read(raw: object) -> int:
        if not isinstance(raw, datetime) or raw.tzinfo is None:
            raise ValueError("is no instant: write a date, a time and an offset, 2027-01-01T00:00:00Z, without quotes")
        try:
            return (raw - _BEGIN) // timedelta(microseconds=1) * 1_000
        except OverflowError:
            raise ValueError("lies too far away") from None

    return Kind("date-time with an offset", read, str)


class Entry(msgspec.Struct, frozen=True):
    """One token."""

    name: Annotated[str, Key(TOKEN_NAME, "who it is for: acts are noted under this name")]
    digest: Annotated[bytes, Key(_hash(), "what is kept of the token")] = field(name="hash")
    ingest: Annotated[frozenset[str], Key(_feeds(), "feeds it may send to")] = frozenset()
    read: Annotated[frozenset[str], Key(_feeds(), "feeds it may see")] = frozenset()
    operate: Annotated[frozenset[str], Key(_feeds(), "feeds it may act on")] = frozenset()
    expires_ns: Annotated[int | None, Key(_instant(), "from when on it is no longer taken")] = field(
        default=None, name="expires"
    )

    def token(self) -> Token:
        """As access is decided by it."""
        return Token(self.name, self.digest, {role: getattr(self, role) for role in ROLES}, self.expires_ns)


class TokenFile(msgspec.Struct, frozen=True):
    """The whole file."""

    tokens: Annotated[tuple[Entry, ...], Tables({"": Entry})] = field(default=(), name="token")


def load_tokens(path: Path, feeds: Collection[str]) -> tuple[Token, ...]:
    """The tokens of a file. `feeds` are the configured ones. Raises ConfigError with every fault."""
    return parse_tokens(read_private(path, by_group=True), feeds, str(path))


def parse_tokens(text: str, feeds: Collection[str], place: str) -> tuple[Token, ...]:
    """The tokens that a file with this text holds; `place` names it in faults. Raises ConfigError."""
    try:
        raw = tomllib.loads(text)
    except ValueError as error:
        raise ConfigError([f"{place}: is no TOML: {error}"]) from None
    except RecursionError:
        raise ConfigError([f"{place}: is nested too deeply"]) from None
    reading = Reading(place, {}, {})
    entries = reading.table(TokenFile, raw).tokens
    if not entries and not reading.faults:
        reading.fault(("token",), "is missing: nobody could be let in; make one with `strandline token make`")
    for index, entry in enumerate(entries):
        if not reading.is_faulty(("token", index)):
            _check_feeds(entry, index, feeds, reading)
    _check_repeats(entries, reading)
    if reading.faults:
        raise ConfigError(reading.faults)
    return tuple(entry.token() for entry in entries)


def _check_feeds(entry: Entry, index: int, feeds: Collection[str], reading: Reading) -> None:
    places = [("token", index, role) for role in ROLES]
    if not any(getattr(entry, role) for role in ROLES) and not any(map(reading.is_faulty, places)):
        reading.fault(("token", index), f"of {entry.name} may do nothing: give it one of {', '.join(ROLES)}")
    for role in ROLES:
        for feed in sorted(getattr(entry, role) - {EVERY} - set(feeds)):
            near = difflib.get_close_matches(feed, feeds, 1)
            advice = f"did you mean {near[0]}?" if near else f"there are: {', '.join(sorted(feeds)[:20]) or 'none'}"
            reading.fault(("token", index, role), f"names feed {feed}, which is not configured; {advice}")


def _check_repeats(entries: tuple[Entry, ...], reading: Reading) -> None:
    names: dict[str, int] = {}
    digests: dict[bytes, int] = {}
    for index, entry in enumerate(entries):
        here = ("token", index, "name")
        if not reading.is_faulty(here) and (first := names.setdefault(entry.name, index)) != index:
            reading.fault(here, f"is the name of token[{first + 1}] already", quoted(entry.name))
        here = ("token", index, "hash")
        if not reading.is_faulty(here) and (first := digests.setdefault(entry.digest, index)) != index:
            reading.fault(here, f"is that of token[{first + 1}] already: each entry needs a token of its own")


def entry_lines(token_name: str, token: str, grants: dict[str, list[str]], expires: str | None) -> Iterator[str]:
    """The lines of a new entry, which hold the token's hash and not the token."""
    yield "[[token]]"
    yield f"name = {quoted(token_name)}"
    yield f'hash = "sha256:{digest_of(token).hex()}"'
    for role, feeds in grants.items():
        yield f"{role} = {list_text(feeds)}"
    if expires is not None:
        yield f"expires = {expires}"
