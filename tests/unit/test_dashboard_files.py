"""The dashboard's files: a fixed list, the policy that a browser holds them to, types, and being asked for again."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
import strandline.dashboard
from helpers_raw import exchange, replies
from helpers_service import Running, configuration, problem_of, running
from strandline.dashboard.serving import POLICY, TYPES, read_files

FOLDER = Path(strandline.dashboard.__file__).parent
KEPT = {"x-content-type-options": "nosniff", "referrer-policy": "no-referrer", "cache-control": "no-cache"}


def test_the_list_is_what_lies_beside_the_module_and_no_code() -> None:
    files = read_files()
    assert {"index.html", "dashboard.css", "main.js"} <= set(files)
    assert set(files) == {path.name for path in FOLDER.iterdir() if path.suffix in TYPES}
    assert not [name for name in files if name.endswith((".py", ".pyc", ".md"))]


async def test_every_file_is_served_with_the_policy_and_its_type(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        for name, file in [("", read_files()["index.html"]), *read_files().items()]:
            answer = await service.get(f"/dashboard/{name}" if name else "/")
            assert (answer.status, answer.content) == (200, file.content), name
            assert answer.headers["Content-Security-Policy"] == POLICY
            assert KEPT.items() <= {key.lower(): value for key, value in answer.headers.items()}.items()
            kinds = {".html": "text/html", ".css": "text/css", ".js": "text/javascript", ".svg": "image/svg+xml"}
            suffix = Path(name or "index.html").suffix
            assert answer.headers["Content-Type"] == f"{kinds[suffix]}; charset=utf-8"


def test_the_policy_lets_nothing_in_from_elsewhere() -> None:
    """The directives that the service promises; no unsafe-inline, no unsafe-eval, no wildcard."""
    told = dict(part.strip().split(" ", 1) for part in POLICY.split(";"))
    assert told == {
        "default-src": "'none'", "script-src": "'self'", "style-src": "'self'", "img-src": "'self' data:",
        "connect-src": "'self'", "base-uri": "'none'", "form-action": "'none'", "frame-ancestors": "'none'",
    }  # fmt: skip


def test_the_page_keeps_to_the_policy() -> None:
    """No inline script, style or handler, and every address is the service's own."""
    named: set[str] = set()
    for name, file in read_files().items():
        text = file.content.decode()
        if name.endswith(".html"):
            inline = r"<script(?![^>]*\bsrc=)|<style|\son[a-z]+\s*=|\sstyle\s*=|javascript:"
            assert not re.search(inline, text, re.IGNORECASE), name
            for address in re.findall(r"""(?:src|href)\s*=\s*["']([^"']*)""", text):
                assert re.match(r"/|#|data:image/|\.{0,2}/?dashboard/", address), (name, address)
                file_name = address.partition("/dashboard/")[2]
                assert not file_name or file_name in read_files(), address
        if name.endswith(".js"):
            for module in re.findall(r"""^(?:import|export)\b[^;]*?\bfrom\s+["']([^"']+)["']""", text, re.M):
                assert module.removeprefix("./") in read_files(), (name, module)
                named.add(module)
            continue
        named |= set(re.findall(r"/dashboard/[\w.-]+", text)) if name.endswith(".html") else set()
    assert len(named) >= 5, "addresses and modules were found"


async def test_a_file_that_is_known_is_not_sent_again(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        tag = (await service.get("/")).headers["ETag"]
        assert re.fullmatch(r'"[0-9a-f]{32}"', tag)
        for asked in (tag, f'"other", W/{tag}', "*"):
            again = await service.get("/", headers={"If-None-Match": asked})
            assert (again.status, again.content, again.headers["ETag"]) == (304, b"", tag)
            assert again.headers["Content-Security-Policy"] == POLICY
        assert (await service.get("/", headers={"If-None-Match": '"other"'})).status == 200
        assert (await service.ask("HEAD", "/")).content == b""
        problem_of(await service.ask("POST", "/"), 405)


OUTSIDE = [
    "serving.py", "__init__.py", "nothing.js", "..%2Fapp.py", "%2e%2e%2fapp.py", "..%5capp.py", "index.html%00.js",
    "%2Fetc%2Fpasswd", "__pycache__", "INDEX.HTML", "index.html/",
]  # fmt: skip


@pytest.mark.parametrize("name", OUTSIDE)
async def test_nothing_else_is_served(tmp_path: Path, name: str) -> None:
    async with running(configuration(tmp_path)) as service:
        assert await raw_status(service, f"/dashboard/{name}") == 404


@pytest.mark.parametrize("path", ["/dashboard/../app.py", "/dashboard/./../../pyproject.toml", "//index.html"])
async def test_no_path_leads_out(tmp_path: Path, path: str) -> None:
    async with running(configuration(tmp_path)) as service:
        assert await raw_status(service, path) == 404


async def raw_status(service: Running, path: str) -> int:
    """The status of a request whose path no client has tidied up."""
    address = service.service.address
    request = f"GET {path} HTTP/1.1\r\nHost: {address}\r\nConnection: close\r\n\r\n".encode()
    (reply,) = replies(await exchange(address.host, address.port, [request]))
    return reply.status
