"""What commands make of an address and of a refusal: the same for each of them."""

from __future__ import annotations

import asyncio
import json
import stat
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from pathlib import Path

import pytest
from helpers_service import FEED, configuration, running
from strandline import client_asking
from strandline.cli import main
from strandline.client_access import Caller, address_of, is_address, refusal
from strandline.errors import ConfigError


@pytest.mark.parametrize(
    ("written", "address"),
    [
        ("localhost:8690", "http://localhost:8690"),
        ("127.0.0.1:8690/", "http://127.0.0.1:8690/"),
        ("[::1]:8690", "http://[::1]:8690"),
        ("gauges.example", "http://gauges.example"),
        ("https://gauges.example:8600", "https://gauges.example:8600"),
    ],
)
def test_host_and_port_are_an_address(written: str, address: str) -> None:
    assert address_of(written) == address
    assert is_address(written) == (written != "gauges.example")


@pytest.mark.parametrize("written", ["ftp://a:1", "localhost:", "localhost:port", "//localhost", "a b:1", ""])
def test_what_is_no_address_says_how_to_write_one(written: str) -> None:
    with pytest.raises(ConfigError, match="write http://HOST:PORT"):
        address_of(written)
    assert not is_address(written)


@pytest.mark.parametrize("name", ["out.db", "now.capture", "strandline-data", "data/old.parquet"])
def test_files_are_no_addresses(name: str) -> None:
    assert not is_address(name)


def test_a_refusal_has_one_exit_code_and_names_what_was_not_given() -> None:
    bare, shown = Caller(), Caller({"Authorization": "Bearer x"})
    code, why = refusal(401, "detail", bare)
    assert code == 2 and "--token-file" in why and "STRANDLINE_TOKEN" in why
    assert refusal(401, "it was mistyped", shown) == (2, "it was mistyped")
    codes = {status: refusal(status, "", shown)[0] for status in (400, 403, 404, 422, 409, 429, 503)}
    assert codes == {400: 2, 403: 2, 404: 2, 422: 2, 409: 1, 429: 3, 503: 3}


async def asked(capsys: pytest.CaptureFixture[str], *arguments: str) -> tuple[int, str]:
    code = await asyncio.to_thread(main, list(arguments))
    return code, capsys.readouterr().err


async def test_commands_take_host_and_port_and_agree_on_exit_codes(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.delenv("STRANDLINE_TOKEN", raising=False)
    assert main(["token", "make", "--name", "a", "--role", "operate", "--role", "read", "--json"]) == 0
    made = json.loads(capsys.readouterr().out)
    tokens, own = tmp_path / "tokens.toml", tmp_path / "own.token"
    for file, text in ((tokens, made["entry"]), (own, made["token"])):
        file.write_text(text)
        file.chmod(stat.S_IRUSR | stat.S_IWUSR)
    questions = [["holds"], ["report"], ["trace", "--time", "2026-01-01T00:00:00Z"]]
    # `more` stands behind the keys of the feed: a table of its own may not, so the access table comes first.
    text = f"{configuration(tmp_path)}\n[access]\ntokens = {json.dumps(str(tokens))}\n"
    async with running(text) as service:
        place = service.url.removeprefix("http://")
        for question in [*questions, ["quarantine", "readmit"]]:
            code, err = await asked(capsys, *question, "--feed", FEED, "--url", place)
            assert code == 2 and "--token-file" in err, question
        capture = ["capture", place, "--seconds", "1", "--out", str(tmp_path / "now.capture")]
        code, err = await asked(capsys, *capture, "--feed", FEED)
        assert code == 2 and "--token-file" in err and "Bearer" not in err
        monkeypatch.setenv("STRANDLINE_TOKEN", made["token"])
        for question in questions:
            code, err = await asked(capsys, *question, "--feed", "none", "--url", place)
            assert code == 2, (question, err)
            code, err = await asked(capsys, *question, "--feed", FEED, "--url", place)
            assert code == (1 if question[0] == "trace" else 0), (question, err)
    for question in questions:
        assert (await asked(capsys, *question, "--feed", FEED, "--url", "localhost:1"))[0] == 3
        code, err = await asked(capsys, *question, "--feed", FEED, "--url", "ftp://localhost")
        assert code == 2 and "write http://HOST:PORT" in err


@pytest.mark.parametrize("feed", ["river-gauges?", "river-gauges/sources?", "river-gauges#", "no/such", "bytes-\udcff"])
async def test_a_feeds_name_never_changes_what_is_asked_for(
    feed: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    out, made = tmp_path / "now.capture", tmp_path / "made.capture"
    async with running(configuration(tmp_path)) as service:
        await service.send([1])
        taken = ["capture", str(tmp_path / "data"), "--feed", FEED, "--out", str(made)]
        commands = [
            ["holds", "--url", service.url],
            ["report", "--url", service.url],
            ["trace", "--time", "2026-01-01T00:00:00Z", "--url", service.url],
            ["act", "drain", "--reason", "why", "--url", service.url],
            ["quarantine", "readmit", "--url", service.url],
            ["capture", service.url, "--seconds", "1", "--out", str(out)],
            ["replay", str(made), "--into", service.url],
        ]
        code, err = await asked(capsys, *taken)
        assert code == 0, err
        for command in commands:
            code, err = await asked(capsys, *command, "--feed", feed)
            assert code == 2 and ("no feed" in err or "not UTF-8" in err), (command, err)
        assert not out.exists()


@asynccontextmanager
async def answering(*answers: bytes) -> AsyncIterator[str]:
    """The address of a server that gives these answers, one a connection, whatever it is asked, and then hangs up."""
    left = iter(answers)

    async def answer(reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        await reader.readuntil(b"\r\n\r\n")
        writer.write(next(left))
        await writer.drain()
        writer.close()
        await writer.wait_closed()

    async with await asyncio.start_server(answer, "127.0.0.1", 0) as server:
        yield f"http://127.0.0.1:{server.sockets[0].getsockname()[1]}"


@pytest.mark.parametrize("status", [200, 503])
async def test_an_answer_that_breaks_off_is_told_and_no_traceback(
    status: int, capsys: pytest.CaptureFixture[str]
) -> None:
    """Whatever its status says: what came of it cannot be read."""

    async with answering(b"HTTP/1.1 %d -\r\nTransfer-Encoding: chunked\r\n\r\nno number\r\n" % status) as url:
        code, told = await asked(capsys, "holds", "--feed", FEED, "--url", url)
    assert code == 3 and told.startswith(f"strandline: {url}/v1/feeds/{FEED}/holds?"), told
    assert "could not be reached: " in told


@pytest.mark.parametrize(
    ("question", "advice"),
    [
        (["holds", "--feed", FEED], "ask for less: bring --from and --to closer together, or name a smaller --limit"),
        (["report", "--feed", FEED], "ask for less: bring --from and --to closer together"),
        (["trace", "--feed", FEED, "--id", "1"], "ask for less: name --id, --time and --source together"),
        (["cluster"], "fetch {url}/v1/cluster with another client"),
    ],
)
async def test_an_answer_that_is_too_long_is_refused_and_never_cut(
    question: list[str], advice: str, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """One that just fits is read whole: then its content is judged, which here is no service's."""
    monkeypatch.setattr(client_asking, "ANSWER_BYTES_AT_MOST", 1 << 20)
    bodies = [b"[" + b" " * (size - 1) for size in (1 << 20, (1 << 20) + 1)]
    head = b"HTTP/1.1 200 -\r\nContent-Length: %d\r\n\r\n%b"
    async with answering(*(head % (len(body), body) for body in bodies)) as url:
        code, told = await asked(capsys, *question, "--url", url)
        assert code == 3 and "line 1 column" in told, told
        code, told = await asked(capsys, *question, "--url", url)
    assert code == 2 and "more than 1 MiB" in told and told.rstrip().endswith(advice.format(url=url)), told


@pytest.mark.parametrize("sent", [b"", b'{"holds": []}'])
async def test_a_success_that_sends_less_than_it_said_is_no_answer(
    sent: bytes, capsys: pytest.CaptureFixture[str]
) -> None:
    """What came may even read as a whole answer."""

    async with answering(b"HTTP/1.1 200 -\r\nContent-Length: 90\r\n\r\n%b" % sent) as url:
        code, told = await asked(capsys, "holds", "--feed", FEED, "--url", url)
    assert code == 3 and told.startswith(f"strandline: {url}/v1/feeds/{FEED}/holds?"), told
    assert f" could not be reached: its answer broke off after {len(sent)} bytes; " in told, told
