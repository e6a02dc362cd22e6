"""The dashboard's files for a browser: a fixed list, read at the start, with a policy that lets nothing else in.

Only files that lie beside this module when the service starts are served, each by its whole name; no path is joined.
"""

from __future__ import annotations

import hashlib
import re
from dataclasses import dataclass
from importlib import resources

from aiohttp import web

from ..problems import NotThere

PAGE = "index.html"
TYPES = {
    ".html": "text/html",
    ".css": "text/css",
    ".js": "text/javascript",  # RFC 9239
    ".svg": "image/svg+xml",
}
_NAME = re.compile(r"[a-z][a-z0-9_-]{0,63}(\.[a-z]{2,4})", re.ASCII)
POLICY = (
    "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self' data:; connect-src 'self'; "
    "base-uri 'none'; form-action 'none'; frame-ancestors 'none'"
)
HEADERS = {
    "Content-Security-Policy": POLICY,
    "X-Content-Type-Options": "nosniff",
    "Referrer-Policy": "no-referrer",
    "Cross-Origin-Opener-Policy": "same-origin",
    "Cross-Origin-Resource-Policy": "same-origin",
    "Cache-Control": "no-cache",  # kept, and asked for again each time: the ETag saves the bytes
}


@dataclass(frozen=True, slots=True)
class File:
    """One file as it is sent."""

    content: bytes
    media_type: str
    tag: str


FILES = web.AppKey("dashboard_files", dict[str, File])


def read_files() -> dict[str, File]:
    """Every file of the page by name."""
    found = {}
    for path in resources.files(__package__).iterdir():
        name = _NAME.fullmatch(path.name)
        if name and name[1] in TYPES and path.is_file():
            content = path.read_bytes()
            found[path.name] = File(content, TYPES[name[1]], hashlib.sha256(content).hexdigest()[:32])
    return found


async def get_page(request: web.Request) -> web.Response:
    """The page."""
    return _answer(request, PAGE)


async def get_file(request: web.Request) -> web.Response:
    """A file that the page asks for."""
    return _answer(request, request.match_info["file"])


def _answer(request: web.Request, name: str) -> web.Response:
    file = request.app[FILES].get(name)
    if file is None:
        raise NotThere(f"the dashboard has no file {name[:100]!r}")
    headers = {**HEADERS, "ETag": f'"{file.tag}"'}
    asked = request.if_none_match or ()
    if any(tag.value in (file.tag, "*") for tag in asked):  # RFC 9110 section 13.1.2: weak comparison
        return web.Response(status=304, headers=headers)
    return web.Response(body=file.content, content_type=file.media_type, charset="utf-8", headers=headers)


def routes() -> list[web.RouteDef]:
    """The addresses of the page and its files."""
    return [web.get("/", get_page), web.get("/dashboard/{file}", get_file)]
