"""The keys that say who is let in: `[access]` and `[tls]`, and the rules between them.

Declarations and rules only. What a token may do is `access`, the file of tokens `access_tokens`, certificates `tls`.
"""

from __future__ import annotations

import ipaddress
import re
from collections.abc import Iterable
from pathlib import Path
from typing import Annotated

import msgspec
from msgspec import field

from .config_kinds import Kind, list_from_text, list_text, path, quoted, shown
from .config_read import Key, Reading

NAMES_AT_MOST = 100
_HOST = re.compile(r"\[[0-9a-f:.]{2,45}\]|[a-z0-9_.-]{1,253}", re.ASCII)
_ORIGIN = re.compile(rf"https?://(?:{_HOST.pattern})(?::[1-9][0-9]{{0,4}})?", re.ASCII)


def flag() -> Kind:
    """Yes or no."""

    def read(raw: object) -> bool:
        if not isinstance(raw, bool):
            raise ValueError("is neither true nor false: write one of them, without quotes")
        return raw

    return Kind(
        "`true` or `false`",
        read,
        lambda value: "true" if value else "false",
        lambda text: {"true": True, "false": False}.get(text, text),
    )


def _names(about: str, pattern: re.Pattern[str], example: str) -> Kind:
    """A list of texts of one form, in lower case."""

    def read(raw: object) -> tuple[str, ...]:
        if not isinstance(raw, list) or len(raw) > NAMES_AT_MOST:
            raise ValueError(f"is no list of at most {NAMES_AT_MOST}: write [{quoted(example)}]")
        for item in raw:
            if not isinstance(item, str) or pattern.fullmatch(item.lower()) is None:
                raise ValueError(f"holds {shown(item)}: write {quoted(example)}")
        return tuple(item.lower() for item in raw)

    return Kind(about, read, list_text, list_from_text)


class Access(msgspec.Struct, frozen=True):
    """Who may use the service; access.md explains it."""

    tokens: Annotated[
        Path | None, Key(path(), "the file of tokens; without it nobody is asked for one, on this machine only")
    ] = None
    open: Annotated[
        bool, Key(flag(), "let everybody in who can reach it, beyond this machine too, without any token")
    ] = False
    hosts: Annotated[
        tuple[str, ...],
        Key(
            _names("list of host names", _HOST, "strandline.example"),
            "names beside localhost, 127.0.0.1 and [::1] by which it may be addressed, without ports; "
            "empty: no others on this machine, any beyond it",
        ),
    ] = ()
    origins: Annotated[
        tuple[str, ...],
        Key(
            _names("list of origins", _ORIGIN, "https://strandline.example"),
            "origins beside its own whose pages may act, such as that of a proxy which ends TLS in front of it",
        ),
    ] = ()


class Tls(msgspec.Struct, frozen=True):
    """TLS for the service's own address; with neither file it speaks plain HTTP."""

    certificate: Annotated[
        Path | None, Key(path(), "the certificate and those between it and the root (PEM), its own first")
    ] = None
    key: Annotated[Path | None, Key(path(), "the certificate's private key (PEM, not encrypted)")] = field(default=None)


def check_access(access: Access, tls: Tls, reading: Reading) -> None:
    """Judge the rules between these keys; what is broken becomes a fault of `reading`."""
    if access.open and access.tokens is not None:
        reading.fault(("access", "open"), "contradicts access.tokens: with tokens it is not open", "true")
    for missing, other in (("key", "certificate"), ("certificate", "key")):
        if getattr(tls, missing) is None and getattr(tls, other) is not None:
            place = ("tls", missing)
            if not reading.is_faulty(place):
                reading.fault(place, f"is missing: tls.{other} is there, and TLS needs both")


def is_loopback(address: str) -> bool:
    """Whether an IP address, as text, cannot be reached from another machine."""
    given = ipaddress.ip_address(address.partition("%")[0])
    mapped = given.ipv4_mapped if isinstance(given, ipaddress.IPv6Address) else None
    return (mapped or given).is_loopback


def addresses_beyond(found: Iterable[str]) -> list[str]:
    """Those of some IP addresses that other machines can reach, each once."""
    return sorted({address for address in found if not is_loopback(address)})


def needs_tokens(access: Access, host: str, beyond: list[str]) -> str:
    """Why the service must not start listening there; nothing where it may."""
    if not beyond or access.tokens is not None or access.open:
        return ""
    named = host if host in beyond else f"{host} ({', '.join(beyond[:3])})"
    return (
        f"listen: {named} can be reached from other machines, and nobody would be asked for a token. "
        "Make one (`strandline token make`) and name its file in access.tokens; "
        "or listen on 127.0.0.1; or, where others guard the way, write open = true below [access]"
    )


def literal_beyond(host: str) -> list[str]:
    """The host itself where it is an IP address that other machines can reach; names are looked up at the start."""
    try:
        return addresses_beyond([host])
    except ValueError:
        return []
