"""The file of tokens: every fault at once, who may read it; `strandline token make`, whose lines it takes."""

from __future__ import annotations

import json
import os
from pathlib import Path

import pytest
from helpers_access import asking, write_tokens
from hypothesis import given
from hypothesis import strategies as st
from strandline.access import Token, identify
from strandline.access_gate import prepare
from strandline.access_tokens import load_tokens, parse_tokens
from strandline.cli import main
from strandline.config import parse
from strandline.errors import ConfigError

FEEDS = ("river-gauges", "sea-gauges")
HASH = "sha256:" + "ab" * 32
ENTRY = f'[[token]]\nname = "gw"\nhash = "{HASH}"\n'


def faults_of(text: str) -> list[str]:
    with pytest.raises(ConfigError) as caught:
        parse_tokens(text, FEEDS, "t.toml")
    return caught.value.faults


def test_an_entry_is_read_whole() -> None:
    more = 'ingest = ["river-gauges"]\nread = ["*"]\nexpires = 2027-01-01T01:00:00+01:00\n'
    (token,) = parse_tokens(ENTRY + more, FEEDS, "t.toml")
    assert (token.name, token.digest) == ("gw", b"\xab" * 32)
    assert token.may("ingest", "river-gauges") and not token.may("ingest", "sea-gauges")
    assert token.may("read", "*") and not token.may_some("operate")
    assert token.expires_ns == 1_798_761_600 * 10**9  # 2027-01-01T00:00:00Z, by `date -u -d ... +%s`


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ("", "t.toml: token is missing: nobody could be let in"),
        ("[[token]]\nname = 1", "t.toml: token[1].name = 1 is no name"),
        ("[[token]]\nname = 'a'\nread = ['*']", "t.toml: token[1].hash is missing"),
        (ENTRY, "t.toml: token[1] of gw may do nothing: give it one of ingest, read, operate"),
        (ENTRY + "reed = ['*']\nread = ['*']", "t.toml: token[1].reed is no key of `token`; did you mean `read`?"),
        (ENTRY + "read = '*'", 'token[1].read = "*" is no list'),
        (ENTRY + "read = ['River']", 'holds "River", which is no feed'),
        (ENTRY + "read = ['river-gauge']", "names feed river-gauge, which is not configured; did you mean"),
        (ENTRY + "read = ['*']\nexpires = '2027-01-01'", "is no instant"),
        (ENTRY + "read = ['*']\nexpires = 2027-01-01", "is no instant"),
        (ENTRY + "read = ['*']\nexpires = 2027-01-01T00:00:00", "is no instant"),
        (ENTRY.replace(HASH, "sha256:00") + "read = ['*']", "token[1].hash = (not shown) is no hash"),
        (ENTRY.replace(HASH, "strandline_" + "x" * 43) + "read = ['*']", "is a token itself"),
        ((ENTRY + "read = ['*']\n") * 2, 'token[2].name = "gw" is the name of token[1] already'),
        ((ENTRY + "read = ['*']\n") * 2, "token[2].hash is that of token[1] already"),
        ("[token]\nname = 'a'", "is no list of tables: write [[token]]"),
        ("token = 1", "is no list of tables"),
        ("x = " + "[" * 5_000, "t.toml: is "),
        ("\0", "t.toml: is no TOML"),
    ],
)
def test_a_fault_is_named_with_its_place_and_value(text: str, fault: str) -> None:
    found = faults_of(text)
    assert any(fault in each for each in found), found
    assert not any("strandline_xxx" in each for each in found)


def test_all_faults_are_told_at_once() -> None:
    text = "[[token]]\nname = 'A'\nhash = 'x'\nread = 1\n"
    text += "[[token]]\nname = 'b'\nhash = 2\noperate = ['no-feed']\nq = 1\n"
    assert len(faults_of(text)) == 6


@given(st.recursive(st.none() | st.text() | st.integers() | st.booleans(), st.lists, max_leaves=5))
def test_whatever_stands_there_is_read_or_refused(value: object) -> None:
    for key in ("name", "hash", "read", "expires"):
        text = ENTRY.replace('name = "gw"\n', "") if key == "name" else ENTRY
        body = json.dumps(value).replace("null", "1979-05-27T07:32:00Z").replace("\\ud", "\\ue").replace("\\/", "/")
        try:
            assert all(isinstance(each, Token) for each in parse_tokens(f"{text}{key} = {body}\n", FEEDS, "t"))
        except ConfigError as error:
            assert all(fault.startswith("t: ") for fault in error.faults)


def test_a_role_for_a_feed_is_one_for_its_partitions_once_the_file_is_in_force(tmp_path: Path) -> None:
    text = (
        asking(tmp_path / "t")
        + '\n[cluster]\nname = "c"\nurls = ["nats://h:1"]\n[[feed]]\nname = "river"\n'
        + 'partitions = { stream = "R", subject = "{partition}", count = 2 }\n'
    )
    write_tokens(tmp_path / "t", {"gw": {"read": ["river-0"]}})
    with pytest.raises(ConfigError, match="names feed river-0, which is not configured; did you mean river"):
        prepare(parse(text, {}), [], 0)
    write_tokens(tmp_path / "t", {"gw": {"read": ["river"]}})
    tokens = prepare(parse(text, {}), [], 0).tokens
    assert tokens is not None
    assert [name for name in ("river", "river-0", "river-1", "river-2") if tokens[0].may("read", name)] == [
        "river", "river-0", "river-1",
    ]  # fmt: skip


# --- the file itself ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("mode", [0o600, 0o400, 0o640, 0o440])
def test_a_file_that_others_cannot_read_is_taken(tmp_path: Path, mode: int) -> None:
    made = write_tokens(tmp_path / "t", {"gw": {"read": ["*"]}})
    (tmp_path / "t").chmod(mode)
    (token,) = load_tokens(tmp_path / "t", FEEDS)
    assert identify([token], [f"Bearer {made['gw']}"], 0) is token


@pytest.mark.parametrize("mode", [0o644, 0o604, 0o602, 0o660, 0o620, 0o777, 0o601])
def test_a_file_that_others_can_read_or_change_is_refused(tmp_path: Path, mode: int) -> None:
    write_tokens(tmp_path / "t", {"gw": {"read": ["*"]}})
    (tmp_path / "t").chmod(mode)
    with pytest.raises(ConfigError, match=f"has mode {mode:o}, so others can read or change it: chmod 640"):
        load_tokens(tmp_path / "t", FEEDS)


def test_what_is_no_file_is_refused_without_waiting(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe", 0o600)
    for path in (tmp_path / "pipe", tmp_path, tmp_path / "none", Path("a\0b")):
        with pytest.raises(ConfigError):
            load_tokens(path, FEEDS)
    (tmp_path / "large").touch(0o600)
    (tmp_path / "large").write_bytes(b"#" * (2**20 + 1))
    (tmp_path / "odd").touch(0o600)
    (tmp_path / "odd").write_bytes(b"\xff")
    for name, why in (("large", "larger than"), ("odd", "is not UTF-8 at byte 0")):
        with pytest.raises(ConfigError, match=why):
            load_tokens(tmp_path / name, FEEDS)


# --- the command -------------------------------------------------------------------------------------------------


def test_token_make_prints_a_token_and_an_entry_that_lets_it_in(capsys: pytest.CaptureFixture[str]) -> None:
    given = ["--name", "gateway-north", "--role", "ingest", "--role", "read", "--feed", "river-gauges"]
    assert main(["token", "make", *given, "--expires", "2027-01-01T00:00:00Z"]) == 0
    printed = capsys.readouterr().out
    text = next(line for line in printed.splitlines() if line.startswith("strandline_"))
    entry = printed[printed.index("[[token]]") :]
    assert printed.count(text) == 1 and text not in entry
    (token,) = parse_tokens(entry, FEEDS, "t")
    assert identify([token], [f"Bearer {text}"], 0) is token
    assert token.may("ingest", "river-gauges") and token.may("read", "river-gauges")
    assert not token.may("read", "sea-gauges") and not token.may_some("operate") and token.expires_ns is not None


def test_token_make_for_programs_and_for_every_feed(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["token", "make", "--name", "ops", "--role", "operate", "--json"]) == 0
    made = json.loads(capsys.readouterr().out)
    (token,) = parse_tokens(made["entry"], (), "t")
    assert identify([token], [f"Bearer {made['token']}"], 0) is token
    assert token.may("operate", "*")


@pytest.mark.parametrize("wrong", [["--name", "A B"], ["--feed", "No"], ["--expires", "tomorrow"], ["--name", 'a"\nb']])
def test_token_make_refuses_what_the_file_would(wrong: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["token", "make", "--name", "ops", "--role", "read", *wrong]) == 2
    told = capsys.readouterr()
    assert told.out == "" and "strandline token make" in told.err
