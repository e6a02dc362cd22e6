"""A running service that asks for tokens: every address, hostile headers, reload, rebinding, others' pages, cookies."""

from __future__ import annotations

import asyncio
import json
import signal
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from pathlib import Path

import pytest
from helpers_access import asking, bearer, everything, routes_of, write_tokens
from helpers_raw import exchange, replies
from helpers_service import (
    FEED,
    Process,
    Running,
    body_of,
    config_of,
    configuration,
    event_line,
    events,
    problem_of,
    running,
)
from strandline.access import RULES, rule_of
from strandline.app import Service
from strandline.cli import main
from strandline.errors import ConfigError

SEA = '[[feed]]\nname = "sea-gauges"\n'
ENTRIES = {
    "gateway": {"ingest": [FEED]},
    "viewer": {"read": [FEED]},
    "scraper": {"read": ["*"]},
    "operator": {"operate": [FEED]},
    "elsewhere": {"ingest": ["sea-gauges"], "read": ["sea-gauges"], "operate": ["sea-gauges"]},
    "gone": everything(),
}


@asynccontextmanager
async def guarded(folder: Path) -> AsyncIterator[tuple[Running, dict[str, str]]]:
    """A service with two feeds and the tokens of ENTRIES."""
    made = write_tokens(folder / "tokens.toml", ENTRIES, {"gone": "2001-01-01T00:00:00Z"})
    text = configuration(folder, top=asking(folder / "tokens.toml")) + SEA
    async with running(text) as service:
        yield service, made


def paths(service: Running) -> list[tuple[str, str]]:
    assert service.service._runner is not None
    found = [(method, path) for method, path in routes_of(service.service._runner.app) if method != "HEAD"]
    assert ("POST", "/v1/feeds/{feed}/events") in found and len(found) > 20
    return found


def filled(path: str) -> str:
    return path.replace("{feed}", FEED).replace("{sink}", "sqlite").replace("{file}", "index.html")


async def test_every_address_asks_for_a_token_but_the_public_ones(tmp_path: Path) -> None:
    async with guarded(tmp_path) as (service, made):
        for method, path in paths(service):
            rule = rule_of(method, path)
            assert rule is not None
            if rule.role is None:
                assert (await service.ask(method, filled(path))).status == 200, path
                continue
            answer = await service.ask(method, filled(path))
            problem_of(answer, 401)
            assert answer.headers["WWW-Authenticate"] == 'Bearer realm="strandline"'  # RFC 6750, 3.1: no error here
            for name, status, error in (("elsewhere", 403, "insufficient_scope"), ("gone", 401, "invalid_token")):
                if rule.scope == "some" and name == "elsewhere":
                    continue
                answer = await service.ask(method, filled(path), headers=bearer(made[name]))
                problem_of(answer, status)
                assert f'error="{error}"' in answer.headers["WWW-Authenticate"], (path, name)


async def test_each_role_does_its_own_work_and_no_other(tmp_path: Path) -> None:
    async with guarded(tmp_path) as (service, made):
        promise, excuse = {"source": "gw-1", "time": "2023-11-14T22:13:29Z"}, {"source": "gw-1", "reason": "test"}
        work = [
            ("gateway", "POST", "events", events([1, 2]), 200),
            ("gateway", "POST", "marks", promise, 204),
            ("operator", "POST", "excuse", excuse, 204),
            ("operator", "POST", "drain", {"reason": "test"}, 204),
            ("viewer", "GET", "", None, 200),
            ("viewer", "GET", "sources", None, 200),
            ("viewer", "GET", "late", None, 200),
            ("scraper", "GET", "/metrics", None, 200),
        ]
        for name, method, path, body, status in work:
            for who in ("gateway", "viewer", "scraper", "operator"):
                send = service.post if method == "POST" else service.get
                given = {} if body is None else {"body": body}
                answer = await send(path, headers=bearer(made[who]), **given)
                same = who == name or (who == "scraper" and name == "viewer")
                assert answer.status == (status if same else 403), (who, path, answer.content)


async def test_a_list_of_feeds_holds_those_that_may_be_read(tmp_path: Path) -> None:
    async with guarded(tmp_path) as (service, made):
        for name, feeds in (("viewer", [FEED]), ("scraper", [FEED, "sea-gauges"]), ("elsewhere", ["sea-gauges"])):
            answer = await service.get("/v1/feeds", headers=bearer(made[name]))
            assert [feed["name"] for feed in answer.json["feeds"]] == feeds
        assert (await service.get("/v1/feeds", headers=bearer(made["gateway"]))).status == 403


async def test_what_there_is_not_is_told_to_nobody_without_a_token(tmp_path: Path) -> None:
    async with guarded(tmp_path) as (service, made):
        assert (await service.get("/v1/none")).status == 401
        assert (await service.ask("DELETE", "events")).status == 401
        assert (await service.get("/v1/feeds/none")).status == 401
        assert (await service.get("/v1/feeds/none", headers=bearer(made["viewer"]))).status == 403
        assert (await service.get("/v1/feeds/none", headers=bearer(made["scraper"]))).status == 404
        assert (await service.get("/v1/none", headers=bearer(made["viewer"]))).status == 404
        assert (await service.ask("DELETE", "events", headers=bearer(made["viewer"]))).status == 405


async def test_readiness_tells_the_state_and_the_causes_only_to_readers(tmp_path: Path) -> None:
    async with guarded(tmp_path) as (service, made):
        assert (await service.get("/health/ready")).json == {"ready": True}
        service.runtime.accepting = False
        assert "starting or stopping" not in problem_of(await service.get("/health/ready"), 503)
        told = problem_of(await service.get("/health/ready", headers=bearer(made["viewer"])), 503)
        assert "starting or stopping" in told
        assert "starting" not in problem_of(await service.get("/health/ready", headers=bearer(made["elsewhere"])), 503)
        service.runtime.accepting = True


async def test_a_token_in_an_address_or_a_cookie_is_no_token_and_no_cookie_is_set(tmp_path: Path) -> None:
    """RFC 6750, 2.3 is not supported on purpose: addresses stand in logs and histories."""
    async with guarded(tmp_path) as (service, made):
        token = made["scraper"]
        for path in (f"/v1/feeds?access_token={token}", f"/v1/feeds?token={token}"):
            assert (await service.get(path)).status == 401
        cookie = {"Cookie": f"token={token}; access_token={token}"}
        assert (await service.get("/v1/feeds", headers=cookie)).status == 401
        for method, path in paths(service):
            if not path.endswith(("/live", "/ordered", "/capture")):  # these have no end
                answer = await service.ask(method, filled(path), headers={**bearer(token), **cookie})
                assert "Set-Cookie" not in answer.headers
                assert not [name for name in answer.headers if name.lower().startswith("access-control-")]


HOSTILE = {
    "a NUL": b"authorization: Bearer \0\r\n",
    "a NUL in the name": b"authorization\0: Bearer x\r\n",
    "1 MB": b"authorization: Bearer " + b"a" * 1_000_000 + b"\r\n",
    "8,000 bytes": b"authorization: Bearer " + b"a" * 8_000 + b"\r\n",
    "bytes that are no UTF-8": b"authorization: Bearer strandline_" + b"\xff\xed\xb0\x80" * 10 + b"\r\n",
    "no scheme": b"authorization: x\r\n",
    "nothing": b"authorization:\r\n",
    "another scheme": b"authorization: Basic dXNlcjpwYXNz\r\n",
    "folded": b"authorization: Bearer\r\n x\r\n",
    "control characters": b"authorization: Bearer \x01\x7f\r\n",
}


@pytest.mark.parametrize("name", HOSTILE)
async def test_hostile_headers_let_nobody_in(tmp_path: Path, name: str, caplog: pytest.LogCaptureFixture) -> None:
    async with guarded(tmp_path) as (service, _):
        address = service.service.address
        request = b"GET /v1/feeds HTTP/1.1\r\nhost: localhost\r\nconnection: close\r\n" + HOSTILE[name] + b"\r\n"
        found = replies(await exchange(address.host, address.port, [request]))
        assert len(found) == 1 or name == "1 MB"  # which is given up while it comes, so that the answer may be lost
        for reply in found:
            assert reply.status in (400, 401, 431)
            assert json.loads(reply.content)["status"] == reply.status
        assert (await service.get("/health/live")).status == 200
        assert [record for record in caplog.records if record.levelname == "ERROR"] == []


async def test_several_tokens_are_none_even_where_one_is_good(tmp_path: Path) -> None:
    async with guarded(tmp_path) as (service, made):
        address = service.service.address
        for headers in ((made["scraper"], made["viewer"]), (made["scraper"],) * 2):
            lines = "".join(f"authorization: Bearer {each}\r\n" for each in headers)
            request = f"GET /v1/feeds HTTP/1.1\r\nhost: localhost\r\nconnection: close\r\n{lines}\r\n".encode()
            (reply,) = replies(await exchange(address.host, address.port, [request]))
            assert reply.status == 400


async def test_what_is_not_let_in_is_told_once_a_minute_without_the_token(
    tmp_path: Path, caplog: pytest.LogCaptureFixture
) -> None:
    async with guarded(tmp_path) as (service, made):
        for _ in range(20):
            await service.get("late", headers=bearer(made["gateway"]))
    told = [record.getMessage() for record in caplog.records if "not let in" in record.getMessage()]
    assert len(told) == 1 and "with 403" in told[0] and "/late" in told[0]
    assert not any(token in caplog.text for token in made.values())


# --- where nobody is asked ---------------------------------------------------------------------------------------


async def test_a_host_of_another_name_is_refused_on_this_machine(tmp_path: Path) -> None:
    """DNS rebinding: a page's own name is made to lead to 127.0.0.1, and so is its origin."""
    top = '[access]\nhosts = ["Gauges.example"]'
    async with running(configuration(tmp_path, top=top)) as service:
        for method, path in paths(service):
            answer = await service.ask(method, filled(path), headers={"Host": "attacker.example:8600"})
            problem_of(answer, 421)
        for host in ("gauges.example", "localhost:1", "[::1]", "127.0.0.1:99"):
            assert (await service.get("/v1/feeds", headers={"Host": host})).status == 200


async def test_only_pages_of_the_services_own_may_act(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        body, own = events([1]), service.url
        for origin, site, status in (
            (own, "same-origin", 200),
            (None, None, 200),
            ("http://attacker.example", None, 403),
            (own.replace("http:", "https:"), None, 403),
            ("null", "cross-site", 403),
            (None, "cross-site", 403),
        ):
            headers = {"Origin": origin, "Sec-Fetch-Site": site}
            answer = await service.post("events", body, headers={k: v for k, v in headers.items() if v is not None})
            assert answer.status == status, (origin, site)
        asked = {"Origin": "http://a", "Access-Control-Request-Method": "POST"}
        answer = await service.ask("OPTIONS", "events", headers=asked)
        assert answer.status == 405 and not [name for name in answer.headers if name.startswith("Access-Control")]


@pytest.mark.parametrize("host", ["0.0.0.0", "[::]"])
async def test_beyond_this_machine_it_does_not_start_without_tokens(tmp_path: Path, host: str) -> None:
    text = configuration(tmp_path).replace("127.0.0.1:0", f"{host}:0")
    with pytest.raises(ConfigError, match=r"strandline token make.*listen on 127\.0\.0\.1.*open = true"):
        await Service(config_of(text)).start()
    made = write_tokens(tmp_path / "t", {"all": everything()})
    for top, headers in (("[access]\nopen = true", {}), (asking(tmp_path / "t"), bearer(made["all"]))):
        async with running(text.replace("[[feed]]", top + "\n[[feed]]", 1)) as service:
            port = service.service.address.port
            url = f"http://{'127.0.0.1' if host == '0.0.0.0' else '[::1]'}:{port}/v1/feeds"
            async with service.session.get(url, headers={**headers, "Host": "whatever.example"}) as answer:
                assert answer.status == 200


async def test_a_name_that_leads_beyond_this_machine_counts_as_that(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """What a name leads to is the resolver's answer, which is put in its place here."""
    text = configuration(tmp_path).replace("127.0.0.1:0", "gauges.example:0")
    answers = [(2, 1, 6, "", ("127.0.0.1", 0)), (2, 1, 6, "", ("192.0.2.1", 0))]

    async def resolve(*_: object, **__: object) -> object:
        return answers

    monkeypatch.setattr(asyncio.get_running_loop(), "getaddrinfo", resolve)
    with pytest.raises(ConfigError, match=r"gauges\.example \(192\.0\.2\.1\) can be reached from other machines"):
        await Service(config_of(text)).start()


def test_check_says_so_too(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = tmp_path / "s.toml"
    file.write_text(configuration(tmp_path).replace("127.0.0.1:0", "0.0.0.0:8600"))
    assert main(["check", str(file)]) == 2
    assert "can be reached from other machines" in capsys.readouterr().err


# --- reload ------------------------------------------------------------------------------------------------------


def test_sighup_takes_new_tokens_or_keeps_the_old_ones_and_says_why(tmp_path: Path) -> None:
    tokens = tmp_path / "tokens.toml"
    old = write_tokens(tokens, {"first": everything()})
    with Process(tmp_path, configuration(tmp_path, top=asking(tokens))) as process:

        def status(token: str) -> int:
            return process.ask("/v1/feeds", headers=bearer(token)).status

        def hang_up(word: str) -> None:
            before = process.log.read_text().count(word)
            assert process.process is not None
            process.process.send_signal(signal.SIGHUP)
            process.until(lambda: process.log.read_text().count(word) > before, f"it did not say: {word}")

        assert status(old["first"]) == 200
        new = write_tokens(tokens, {"second": everything()})
        assert status(new["second"]) == 401  # not before it is told
        hang_up("is in force")
        assert (status(new["second"]), status(old["first"])) == (200, 401)
        good = tokens.read_text()
        tokens.write_text(good.replace('read = ["*"]', 'read = ["no-feed"]'))
        hang_up("stays as it was")
        assert "token[1].read names feed no-feed, which is not configured" in process.log.read_text()
        assert status(new["second"]) == 200
        tokens.write_text(good)
        tokens.chmod(0o644)
        hang_up("stays as it was")
        assert "has mode 644" in process.log.read_text() and status(new["second"]) == 200
        process.file.write_text(configuration(tmp_path))
        tokens.chmod(0o600)
        hang_up("is in force")
        assert process.ask("/v1/feeds").status == 200


def test_the_rules_name_every_role() -> None:
    assert {rule.role for rule in RULES.values()} == {None, "ingest", "read", "operate"}


async def test_who_acts_is_the_tokens_name(tmp_path: Path) -> None:
    async with guarded(tmp_path) as (service, made):
        await service.post("events", body_of(event_line(1)), headers=bearer(made["gateway"]))
        act = {"source": "gw-1", "reason": "dead", "who": "somebody else"}
        assert (await service.post("excuse", act, headers=bearer(made["operator"]))).status == 204
        acts = (await service.get("acts", headers=bearer(made["viewer"]))).json["acts"]
        assert [each["who"] for each in acts] == ["operator"]


async def test_an_expectation_in_bytes_that_are_no_utf_8(tmp_path: Path, caplog: pytest.LogCaptureFixture) -> None:
    """Found by fuzzing: aiohttp failed over quoting it, before any handler, and the log told of an error of our own."""
    async with running(configuration(tmp_path)) as service:
        address = service.service.address
        request = b"GET /v1/feeds HTTP/1.1\r\nhost: localhost\r\nconnection: close\r\nexpect: \xc5\r\n\r\n"
        (reply,) = replies(await exchange(address.host, address.port, [request]))
        assert (reply.status, json.loads(reply.content)["status"]) == (417, 417)
    assert [record for record in caplog.records if record.levelname == "ERROR"] == []


async def test_a_reload_cannot_leave_the_door_open_beyond_this_machine(
    tmp_path: Path, caplog: pytest.LogCaptureFixture
) -> None:
    made = write_tokens(tmp_path / "t", {"all": everything()})
    bare = configuration(tmp_path).replace("127.0.0.1:0", "0.0.0.0:0")
    text = bare.replace("[[feed]]", asking(tmp_path / "t") + "\n[[feed]]", 1)
    async with running(text) as service:
        file, url = tmp_path / "s.toml", f"http://127.0.0.1:{service.service.address.port}/v1/feeds"
        file.write_text(bare)
        assert not service.service.reload(file, {})
        assert "nobody would be asked for a token" in caplog.records[-1].getMessage()
        async with service.session.get(url) as answer:
            assert answer.status == 401
        async with service.session.get(url, headers=bearer(made["all"])) as answer:
            assert answer.status == 200
