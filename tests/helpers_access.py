"""For tests of access: files of tokens, certificates that the test makes, and what a client shows."""

from __future__ import annotations

import json
import ssl
from collections.abc import Iterable, Mapping
from pathlib import Path

import trustme
from aiohttp import web
from strandline.access import ROLES, Token, digest_of, new_token
from strandline.access_tokens import entry_lines

Grants = Mapping[str, Iterable[str]]
SECOND_NS = 1_000_000_000


def token_of(name: str = "gw", expires_ns: int | None = None, **grants: Iterable[str]) -> tuple[str, Token]:
    """A new token and its entry; `grants` by role."""
    text = new_token()
    return text, Token(name, digest_of(text), {role: frozenset(feeds) for role, feeds in grants.items()}, expires_ns)


def write_tokens(file: Path, entries: Mapping[str, Grants], expires: Mapping[str, str] | None = None) -> dict[str, str]:
    """A file with new tokens for these names; the tokens."""
    made = {name: new_token() for name in entries}
    lines: list[str] = []
    for name, grants in entries.items():
        named = {role: list(feeds) for role, feeds in grants.items()}
        lines += entry_lines(name, made[name], named, (expires or {}).get(name))
    file.touch(0o600)
    file.write_text("\n".join(lines) + "\n")
    return made


def asking(file: Path) -> str:
    """TOML for a service that asks for tokens of this file."""
    return f"[access]\ntokens = {json.dumps(str(file))}"


def bearer(token: str) -> dict[str, str]:
    """The header."""
    return {"Authorization": f"Bearer {token}"}


def everything() -> dict[str, list[str]]:
    """Every role for every feed."""
    return {role: ["*"] for role in ROLES}


def write_pair(folder: Path, authority: trustme.CA, *hosts: str) -> str:
    """A certificate for these hosts and its key; TOML for a service that has it."""
    made = authority.issue_cert(*hosts)
    certificate, key = folder / "service.pem", folder / "service.key"
    certificate.write_bytes(b"".join(blob.bytes() for blob in made.cert_chain_pems))
    key.write_bytes(made.private_key_pem.bytes())
    return f"[tls]\ncertificate = {json.dumps(str(certificate))}\nkey = {json.dumps(str(key))}"


def trusting(authority: trustme.CA) -> ssl.SSLContext:
    """A client's context that trusts this authority and nobody else."""
    context = ssl.SSLContext(ssl.PROTOCOL_TLS_CLIENT)
    authority.configure_trust(context)
    return context


def routes_of(app: web.Application) -> list[tuple[str, str]]:
    """Method and address of every route, HEAD too."""
    return sorted(
        (route.method, route.resource.canonical) for route in app.router.routes() if route.resource is not None
    )
