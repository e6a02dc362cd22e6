"""The kinds of values that a configuration key can take: how each is read, shown and described.

A kind judges one value by itself and knows no other key. Which key has which kind, and its default, is declared in
`strandline.config`; comparing keys with each other is `strandline.config_checks`.
"""

from __future__ import annotations

import difflib
import re
from collections import Counter
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, NamedTuple
from urllib.parse import urlsplit

from .config_units import CUSTOMARY, duration_ns, duration_text, size_bytes, size_text
from .sinks.remote_write_series import LABEL_BYTES_AT_MOST, LABEL_NAME, LABELS_AT_MOST, METRIC_NAME, Pairs

TEXT_CHARACTERS_AT_MOST = 1024
LIST_ITEMS_AT_MOST = 10_000
POINTER_STEPS_AT_MOST = 64
_POINTER = re.compile(r"(?:/(?:[^~/]|~[01])*)*")  # RFC 6901, section 3


@dataclass(frozen=True, slots=True)
class Kind:
    """One kind of value.

    `read` takes what stands in the file (text, a number, a list, a table, a date) and returns the value, or raises
    ValueError with the end of a sentence that began with the value ("is no duration: ..."). `show` writes a value as
    TOML. `from_text` turns an environment variable into what would stand in the file. `about` is for the documentation.
    """

    about: str
    read: Callable[[object], Any]
    show: Callable[[Any], str]
    from_text: Callable[[str], object] = str
    secret: bool = False  # may hold a password: never shown


class Address(NamedTuple):
    """Where to listen."""

    host: str
    port: int

    def __str__(self) -> str:
        return f"[{self.host}]:{self.port}" if ":" in self.host else f"{self.host}:{self.port}"


def quoted(text: str) -> str:
    """`text` as a TOML basic string."""
    escapes = {'"': '\\"', "\\": "\\\\", "\n": "\\n", "\r": "\\r", "\t": "\\t"}
    safe = (escapes.get(char, char if char.isprintable() else f"\\U{ord(char):08x}") for char in text)
    return f'"{"".join(safe)}"'


def shown(raw: object) -> str:
    """What stands in the file, for a person: at most some 60 characters, on one line."""
    if isinstance(raw, dict):
        return "a table"
    if isinstance(raw, list):
        return f"a list of {len(raw)}" if raw else "an empty list"
    if isinstance(raw, bool):
        return "true" if raw else "false"
    if isinstance(raw, str):
        return quoted(raw if len(raw) <= 60 else raw[:57] + "...")
    if isinstance(raw, int) and abs(raw) >= 10**40:
        return "a number of more than 40 digits"
    return str(raw)[:60]


def duration(at_least: str = "0s", at_most: str = "366d") -> Kind:
    """A length of time; the value is in ns."""
    return _measure("duration", duration_ns, duration_text, at_least, at_most)


def size(at_least: str = "1B", at_most: str = "8000TiB") -> Kind:
    """A number of bytes."""
    return _measure("size", size_bytes, size_text, at_least, at_most)


def _measure(noun: str, parse: Callable[[str], int], spell: Callable[[int], str], at_least: str, at_most: str) -> Kind:
    least, most = parse(at_least), parse(at_most)
    sample = "5s" if noun == "duration" else "64MiB"

    def read(raw: object) -> int:
        if not isinstance(raw, str):
            raise ValueError(f'is no {noun}: write text with a unit, such as "{sample}"')
        amount = parse(raw)
        if not least <= amount <= most:
            raise ValueError(f"is outside of {at_least} to {at_most}")
        return amount

    return Kind(f"{noun}, {at_least} to {at_most}", read, lambda amount: quoted(spell(amount)))


def count(at_least: int, at_most: int) -> Kind:
    """A whole number."""

    def read(raw: object) -> int:
        if not isinstance(raw, int) or isinstance(raw, bool):
            raise ValueError("is no whole number: write digits without quotes")
        if not at_least <= raw <= at_most:
            raise ValueError(f"is outside of {at_least:,} to {at_most:,}")
        return raw

    return Kind(f"whole number, {at_least:,} to {at_most:,}", read, lambda value: f"{value:_}", _number_from_text)


def share() -> Kind:
    """A share of the whole, between 0 and 1."""

    def read(raw: object) -> float:
        if not isinstance(raw, float) or not 0.0 < raw < 1.0:
            raise ValueError("is no share: write a number between 0 and 1, such as 0.001")
        return raw

    return Kind("share, between 0 and 1", read, str, _number_from_text)


def address() -> Kind:
    """Where to listen: "host:port"; port 0 takes any free one."""

    def read(raw: object) -> Address:
        match = re.fullmatch(r"(?:\[([0-9A-Fa-f:.]{2,64})\]|([A-Za-z0-9.-]{1,253})):([0-9]{1,5})", _text(raw), re.ASCII)
        if match is None or int(match[3]) > 65_535:
            raise ValueError('is no address: write "127.0.0.1:8600", or "[::1]:8600" for IPv6')
        return Address(match[1] or match[2], int(match[3]))

    return Kind("`host:port`", read, lambda value: quoted(str(value)))


def choice(*names: str) -> Kind:
    """One of a few words."""

    def read(raw: object) -> str:
        if raw not in names:
            near = _near(raw, names) if isinstance(raw, str) else []
            raise ValueError(f"is none of {', '.join(names)}{f'; did you mean {near[0]}?' if near else ''}")
        return str(raw)

    return Kind("one of " + ", ".join(f"`{name}`" for name in names), read, quoted)


def _near(text: str, names: Sequence[str]) -> list[str]:
    """What was likely meant. Words of three letters and less are near too much to guess by their letters."""
    spelled = text[:64].strip().lower()
    found = [name for name in names if name == spelled or spelled in CUSTOMARY.get(name, ())]
    return found or (difflib.get_close_matches(spelled, names, 1) if len(spelled) > 3 else [])


def name(characters: str, about: str, reserved: str = "") -> Kind:
    """A name that becomes a label, a part of a path and of a variable's name."""
    pattern = re.compile(rf"[a-z0-9][{characters}]{{0,62}}", re.ASCII)

    def read(raw: object) -> str:
        if not isinstance(raw, str) or pattern.fullmatch(raw) is None:
            raise ValueError(f"is no name: {about}")
        if raw == reserved:
            raise ValueError("is a name that the service uses itself: choose another")
        return raw

    return Kind(about, read, quoted)


def pointer() -> Kind:
    """A JSON Pointer (RFC 6901) to a field of an event."""

    def read(raw: object) -> str:
        text = _text(raw)
        if text == "":
            raise ValueError('points at the whole event: name a field, such as "/time"')
        if _POINTER.fullmatch(text) is None:
            raise ValueError("is no JSON Pointer: a slash stands before every name; in a name ~ is written ~0 and / ~1")
        if text.count("/") > POINTER_STEPS_AT_MOST:
            raise ValueError(f"has more than {POINTER_STEPS_AT_MOST} steps")
        return text

    return Kind("JSON Pointer (RFC 6901)", read, quoted)


def path() -> Kind:
    """A file or folder; whether it exists is not asked."""

    def read(raw: object) -> Path:
        text = _text(raw)
        if not text or "\0" in text:
            raise ValueError("is no path")
        return Path(text)

    return Kind("path", read, lambda value: quoted(str(value)))


def texts(noun: str, bytes_at_most: int) -> Kind:
    """A list of texts, none empty, none twice; in an environment variable they are separated by commas."""

    def read(raw: object) -> tuple[str, ...]:
        if not isinstance(raw, list):
            raise ValueError('is no list: write ["one", "two"]')
        if len(raw) > LIST_ITEMS_AT_MOST:
            raise ValueError(f"is too long: at most {LIST_ITEMS_AT_MOST:,} can be named")
        for item in raw:
            if not isinstance(item, str) or not 1 <= len(item.encode()) <= bytes_at_most or "\0" in item:
                wanted = f"{noun} of 1 to {bytes_at_most} bytes, none of them 0"
                raise ValueError(f"holds {shown(item)}, which is no {wanted}")
        if len(set(raw)) < len(raw):
            raise ValueError(f"names {shown(Counter(raw).most_common(1)[0][0])} twice")
        return tuple(raw)

    return Kind(f"list of {noun}s", read, list_text, list_from_text)


def identifier() -> Kind:
    """The name of something in a database."""

    def read(raw: object) -> str:
        text = _text(raw)
        if not 1 <= len(text.encode()) <= 63 or not text.isprintable():
            raise ValueError("is no name: 1 to 63 bytes that can be printed; a schema is named in `schema`")
        return text

    return Kind("name of 1 to 63 bytes", read, quoted)


def secret(noun: str, bytes_at_most: int, *, hidden: bool = True) -> Kind:
    """A line of text that is not shown, unless it is only where the secret lies."""

    def read(raw: object) -> str:
        text = _text(raw, bytes_at_most)
        if not text or not text.isprintable() or (hidden and not text.isascii()):
            raise ValueError(f"is no {noun}: one line is expected{', of ASCII' if hidden else ''}")
        return text

    return Kind(noun, read, quoted, secret=hidden)


def postgres_address() -> Kind:
    """Where a PostgreSQL database is, as its own programs take it. It may hold a password."""

    def read(raw: object) -> str:
        text = _text(raw)
        try:
            parts = urlsplit(text)
            _ = parts.port if "," not in parts.netloc else None  # several hosts, each with a port, are allowed
        except ValueError:
            raise ValueError("is no address: special characters in a password are written %XX") from None
        if parts.scheme not in ("postgres", "postgresql") or not text.isprintable() or "://" not in text:
            raise ValueError('is no address of PostgreSQL: write "postgres://user@host/database"')
        return text

    return Kind("`postgres://...`", read, quoted, secret=True)


def url() -> Kind:
    """An address that events are sent to. It may hold a password, or a token in its query."""

    def read(raw: object) -> str:
        text = _text(raw)
        try:
            parts = urlsplit(text)
            usable = parts.scheme in ("http", "https") and bool(parts.hostname) and parts.port != 0
        except ValueError:
            usable = False
        if not usable or not text.isascii() or not text.isprintable() or " " in text:
            raise ValueError('is no address: write "http://host:port/path" or "https://..."')
        if parts.fragment:
            raise ValueError("ends with a fragment (#...), which is never sent")
        return text

    return Kind("`http://...` or `https://...`", read, quoted, secret=True)


_HEADER_NAME = re.compile(r"[!#$%&'*+.^_`|~0-9A-Za-z-]{1,64}")  # RFC 9110, 5.1: a token
HEADERS_AT_MOST = 32
OWN_HEADERS = re.compile(
    "host|connection|expect|content-type|content-encoding|content-length|transfer-encoding|accept-encoding"
    "|idempotency-key|strandline-.*",
    re.IGNORECASE,
)


def headers() -> Kind:
    """A table of header fields; their values may be secrets."""

    def read(raw: object) -> tuple[tuple[str, str], ...]:
        if not isinstance(raw, dict):
            raise ValueError('is no table: write { X-Station = "north" }')
        if len(raw) > HEADERS_AT_MOST or len({key.lower() for key in raw}) < len(raw):
            raise ValueError(f"names more than {HEADERS_AT_MOST} headers, or one of them twice")
        for key, value in raw.items():
            if _HEADER_NAME.fullmatch(key) is None or OWN_HEADERS.fullmatch(key):
                raise ValueError(f"holds {shown(key)}, which is no header's name or one that the sink sets itself")
            if not isinstance(value, str) or not value.isascii() or not value.isprintable() or len(value) > 4096:
                raise ValueError(f"holds {shown(key)}, whose value is no line of at most 4,096 ASCII characters")
        return tuple(raw.items())

    return Kind("table of header fields", read, _pairs_table, secret=True)


def _pairs_table(pairs: tuple[tuple[str, str], ...]) -> str:
    return "{ " + ", ".join(f"{key} = {quoted(value)}" for key, value in pairs) + " }" if pairs else "{}"


def metric_name() -> Kind:
    """The name of a series."""

    def read(raw: object) -> str:
        if METRIC_NAME.fullmatch(_text(raw)) is None:
            raise ValueError("is no series name: letters, digits, _ and :, at most 200, the first one no digit")
        return str(raw)

    return Kind("letters, digits, `_` and `:`, the first one no digit", read, quoted)


def labels(of: Kind) -> Kind:
    """A table of labels by name, each with a value of a kind."""

    def read(raw: object) -> Pairs:
        if not isinstance(raw, dict):
            raise ValueError('is no table: write { station = "..." }')
        if len(raw) > LABELS_AT_MOST:
            raise ValueError(f"names more than {LABELS_AT_MOST} labels")
        for key, value in raw.items():
            if LABEL_NAME.fullmatch(key) is None:
                raise ValueError(f"holds {shown(key)}, which is no label's name: letters, digits and _, none of the "
                                 "receiver's own, which begin with __")  # fmt: skip
            try:
                of.read(value)
            except ValueError as error:
                raise ValueError(f"holds {key} = {shown(value)}, which {error}") from None
        return tuple(raw.items())

    return Kind(f"table of labels, each a {of.about}", read, _pairs_table)


def label_value() -> Kind:
    """The value of a label that never changes."""

    def read(raw: object) -> str:
        if not 1 <= len(_text(raw).encode()) <= LABEL_BYTES_AT_MOST:
            raise ValueError(f"is no text of 1 to {LABEL_BYTES_AT_MOST:,} bytes")
        return str(raw)

    return Kind("text", read, quoted)


def _text(raw: object, characters_at_most: int = TEXT_CHARACTERS_AT_MOST) -> str:
    if not isinstance(raw, str):
        raise ValueError("is no text: put it in quotes")
    if len(raw) > characters_at_most:
        raise ValueError(f"is longer than {characters_at_most:,} characters")
    return raw


def _number_from_text(text: str) -> object:
    """The number in `text`, or the text itself, which no number's kind accepts."""
    if re.fullmatch(r"-?[0-9]{1,20}(?:_[0-9]{1,20}){0,5}", text, re.ASCII):
        return int(text)
    return float(text) if re.fullmatch(r"[0-9]{1,10}\.[0-9]{1,30}", text, re.ASCII) else text


def list_text(items: Iterable[str]) -> str:
    """A list of texts as TOML has it."""
    return f"[{', '.join(map(quoted, items))}]"


def list_from_text(text: str) -> object:
    """The list in a variable: its texts stand between commas."""
    return [item.strip() for item in text.split(",")] if text.strip() else []
