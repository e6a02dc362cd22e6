"""What hinders an instance of a cluster, each with what it is about, so that a sentence can be made of it.

Pure: what an instance knows of itself and of the others in, words out. How the whole stands is said by `words`.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import NamedTuple

from .status import Status

AWAY, BARRED = "away", "barred"  # no broker answers; they do, and what is configured does not fit
LEASE, NAME, TAKEOVER, SETTINGS = "lease", "name", "takeover", "settings"
NAMING_PARTITIONS = frozenset({LEASE, TAKEOVER})  # not for who may not read all of them
NAMES_AT_MOST = 3


class Cause(NamedTuple):
    """`about` is one of the names above: why there is no broker, what becomes of leases then, whose name it is, ..."""

    about: str
    words: str


def of_leases(ends_s: float | None, stopped: list[str]) -> Iterator[Cause]:
    """Of one that has no broker: what becomes of what it owns, whose first lease ends in so many seconds."""
    if ends_s is not None:
        when = f"it stops in {ends_s:.0f} s unless they answer" if ends_s >= 1 else "it is stopping now"
        yield Cause(LEASE, f"what it owns {when}")
    if stopped:
        more = len(stopped) - NAMES_AT_MOST
        named = ", ".join(stopped[:NAMES_AT_MOST]) + (f" and {more} more" if more > 0 else "")
        yield Cause(LEASE, f"stopped, for want of a renewed lease: {named}")


def of_takeovers(me: str, trouble: str, others: Mapping[str, Status]) -> Iterator[Cause]:
    """Of partitions that could not be started."""
    if trouble:
        yield Cause(TAKEOVER, f"{me} could not take over {trouble}")
    for name, status in sorted(others.items()):
        if status.trouble:
            yield Cause(TAKEOVER, f"{name} could not take over {status.trouble}")


def of_settings(own: Status, others: Mapping[str, Status]) -> Iterator[Cause]:
    """Of configurations that differ. One of another version, which tells no digest, is not judged by it."""
    feeds = [name for name, status in sorted(others.items()) if status.feeds != own.feeds]
    if feeds:
        has = "has" if len(feeds) == 1 else "have"
        yield Cause(
            SETTINGS, f"{_named(feeds)} {has} other feeds or counts of partitions: give all instances one configuration"
        )
    digests = [
        name
        for name, status in sorted(others.items())
        if name not in feeds and own.digest and status.digest not in ("", own.digest)
    ]
    if digests:
        reads = "reads" if len(digests) == 1 else "read"
        yield Cause(
            SETTINGS,
            f"{_named(digests)} {reads} messages by other settings than this instance: give all the same configuration",
        )


def _named(names: list[str]) -> str:
    more = len(names) - NAMES_AT_MOST
    if more > 0:
        return f"{', '.join(names[:NAMES_AT_MOST])} and {more} more"
    return " and ".join(filter(None, [", ".join(names[:-1]), names[-1]]))
