"""The kinds of values that only brokers need: their addresses, subjects, topic filters and names.

Each judges one value by itself. Which key has which kind is `config_intakes` and, for the sink, `config_sinks`.
"""

from __future__ import annotations

import re
from collections import Counter
from urllib.parse import urlsplit

from .config_kinds import Kind, list_from_text, list_text, quoted, shown

ITEMS_AT_MOST = 100
CHARACTERS_AT_MOST = 1024
_NAME = re.compile(r"[A-Za-z0-9_-]{1,128}", re.ASCII)
# A subject is tokens between dots; a token * stands for any one token, a last token > for any number of them
# (the NATS documentation, "Subject-Based Messaging"; from memory).
_SUBJECT = re.compile(r"(?:\*|[^\s.*>]+)(?:\.(?:\*|[^\s.*>]+))*(?:\.>)?|>")
PARTITION = "{partition}"
_SUBJECT_PREFIX = re.compile(r"[A-Za-z0-9_-]{1,64}(?:\.[A-Za-z0-9_-]{1,64}){0,7}", re.ASCII)


def address_fault(raw: object, schemes: tuple[str, ...]) -> str:
    """What is wrong with a broker's address; nothing where all is well."""
    example = f"{schemes[0]}://host:port"
    if not isinstance(raw, str) or len(raw) > CHARACTERS_AT_MOST or not raw.isascii() or not raw.isprintable():
        return f'is no address: write "{example}"'
    try:
        parts = urlsplit(raw)
        usable = parts.scheme in schemes and bool(parts.hostname) and parts.port != 0
    except ValueError:
        usable = False
        parts = urlsplit("")
    if not usable or " " in raw or parts.path not in ("", "/") or parts.query or parts.fragment:
        return f"is no address: write {' or '.join(f'{scheme}://host:port' for scheme in schemes)}"
    if parts.username is not None or parts.password is not None:
        return "names a user: write `user` and `password_file` instead"
    return ""


def broker_address(*schemes: str) -> Kind:
    """Where a broker is: scheme, host and port."""

    def read(raw: object) -> str:
        if fault := address_fault(raw, schemes):
            raise ValueError(fault)
        return str(raw)

    return Kind(" or ".join(f"`{scheme}://host:port`" for scheme in schemes), read, quoted, secret=True)


def broker_addresses(*schemes: str) -> Kind:
    """Where the servers of one cluster are; one that answers is used."""

    def read(raw: object) -> tuple[str, ...]:
        items = _items(raw, f"{schemes[0]}://127.0.0.1:4222")
        for item in items:
            if fault := address_fault(item, schemes):
                raise ValueError(f"holds an entry that {fault}")
        return items

    about = f"list of {' or '.join(f'`{scheme}://host:port`' for scheme in schemes)}"
    return Kind(about, read, list_text, list_from_text, secret=True)


def broker_name(noun: str) -> Kind:
    """The name of a stream, a consumer or a client at a broker."""

    def read(raw: object) -> str:
        if not isinstance(raw, str) or _NAME.fullmatch(raw) is None:
            raise ValueError(f"is no {noun}'s name: 1 to 128 of letters, digits, - and _")
        return raw

    return Kind("1 to 128 of letters, digits, `-` and `_`", read, quoted)


def subjects() -> Kind:
    """Subjects of a stream, wildcards allowed."""

    def read(raw: object) -> tuple[str, ...]:
        items = _items(raw, "river.>", none=True)
        for item in items:
            if _SUBJECT.fullmatch(item) is None:
                raise ValueError(f'holds {shown(item)}, which is no subject: such as "river.north" or "river.>"')
        return items

    return Kind("list of subjects, `*` and a last `>` allowed", read, list_text, list_from_text)


def partitioned_subject() -> Kind:
    """Subjects of a stream, in which one token is the number of a partition."""

    def read(raw: object) -> str:
        if not isinstance(raw, str) or len(raw) > CHARACTERS_AT_MOST or not raw.isprintable():
            raise ValueError('is no text: write "part.{partition}.>"')
        if _SUBJECT.fullmatch(raw) is None:
            raise ValueError('is no subject, such as "part.{partition}.>": no token is empty, and > only stands last')
        if raw.split(".").count(PARTITION) != 1 or raw.count(PARTITION) != 1:
            raise ValueError('needs {partition} once, as a whole token: write such as "part.{partition}.>"')
        return raw

    return Kind("subject with one token `{partition}`, `*` and a last `>` allowed", read, quoted)


def subject_prefix() -> Kind:
    """What every subject of a sink begins with."""

    def read(raw: object) -> str:
        if not isinstance(raw, str) or _SUBJECT_PREFIX.fullmatch(raw) is None:
            raise ValueError("is no beginning of a subject: letters, digits, - and _, with dots between, no wildcards")
        return raw

    return Kind("letters, digits, `-` and `_`, with dots between", read, quoted)


def topics() -> Kind:
    """Topic filters (MQTT 5.0, section 4.7)."""

    def read(raw: object) -> tuple[str, ...]:
        items = _items(raw, "river/+/level")
        for item in items:
            if fault := _topic_fault(item):
                raise ValueError(f"holds {shown(item)}, {fault}")
        return items

    return Kind("list of topic filters, `+` and a last `#` allowed", read, list_text, list_from_text)


def _topic_fault(item: str) -> str:
    *above, last = item.split("/")
    if any("#" in level for level in above) or ("#" in last and last != "#"):
        return "where # does not stand alone at the end"
    if any("+" in level and level != "+" for level in (*above, last)):
        return "where + does not stand for a whole level"
    return ""


def user() -> Kind:
    """Who to be at a broker."""

    def read(raw: object) -> str:
        if not isinstance(raw, str) or not 1 <= len(raw) <= 256 or not raw.isprintable():
            raise ValueError("is no user: 1 to 256 characters that can be printed")
        return raw

    return Kind("text", read, quoted)


def _items(raw: object, example: str, *, none: bool = False) -> tuple[str, ...]:
    """The entries of a list of texts, none twice."""
    if not isinstance(raw, list) or not (raw or none) or len(raw) > ITEMS_AT_MOST:
        raise ValueError(f'is no list of 1 to {ITEMS_AT_MOST}: write ["{example}"]')
    for item in raw:
        if not isinstance(item, str) or not 1 <= len(item) <= CHARACTERS_AT_MOST or not item.isprintable():
            raise ValueError(f"holds {shown(item)}, which is no text of 1 to {CHARACTERS_AT_MOST:,} characters")
    if len(set(raw)) < len(raw):
        raise ValueError(f"names {shown(Counter(raw).most_common(1)[0][0])} twice")
    return tuple(raw)
