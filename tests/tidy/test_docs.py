"""What the documents say is so: links resolve, options exist, tables are the code's, promises have tests."""

from __future__ import annotations

import argparse
import re
import textwrap
from collections.abc import Iterator
from pathlib import Path

import pytest
from strandline.cli import parser
from strandline.config import parse
from strandline.config_table import BEGIN, END, config_table
from strandline.metrics_reference import METRICS

ROOT = Path(__file__).resolve().parents[2]
DOCUMENTS = sorted(
    path for folder in (ROOT, *(ROOT / name for name in ("service", "tests", "deploy", "loadgen")))
    for path in (folder.glob("*.md") if folder == ROOT else folder.rglob("*.md"))
)  # fmt: skip
README = ROOT / "README.md"
LINK = re.compile(r"(?<!!)\[[^\]]*\]\(([^)\s]+)\)|!\[[^\]]*\]\(([^)\s]+)\)")
FENCE = re.compile(r"^```(\w*)\n(.*?)^```", re.MULTILINE | re.DOTALL)

HERE_TOML = re.compile(r"cat > \S+\.toml <<'(?:END)'\n(.*?)^ *END$", re.MULTILINE | re.DOTALL)


def _name(path: Path) -> str:
    return str(path.relative_to(ROOT))


def _prose(text: str) -> str:
    """A document without its fenced blocks and code spans, in which brackets are no links."""
    return re.sub(r"`[^`\n]*`", "", FENCE.sub("", text))


def _anchors(text: str) -> set[str]:
    """What a heading can be linked by: lower case, punctuation dropped, blanks to hyphens (common practice)."""
    headings = re.findall(r"^#+ +(.*?) *$", FENCE.sub("", text), re.MULTILINE)
    return {re.sub(r"[^\w\- ]", "", heading.lower()).replace(" ", "-") for heading in headings}


@pytest.mark.parametrize("path", DOCUMENTS, ids=_name)
def test_every_relative_link_resolves(path: Path) -> None:
    for match in LINK.finditer(_prose(path.read_text())):
        target = match[1] or match[2]
        if re.match(r"[a-z][a-z0-9+.-]*:", target):
            continue
        file, _, anchor = target.partition("#")
        there = (path.parent / file).resolve() if file else path
        assert there.exists(), f"{_name(path)} links to {target}"
        assert there.is_relative_to(ROOT), f"{_name(path)} links out of the repository: {target}"
        if anchor and there.suffix == ".md":
            assert anchor in _anchors(there.read_text()), f"{_name(path)} links to {target}"


@pytest.mark.parametrize("path", DOCUMENTS, ids=_name)
def test_every_configuration_in_a_document_loads(path: Path) -> None:
    for language, text in FENCE.findall(path.read_text()):
        if language == "toml":
            parse(text if "[[feed]]" in text else text + '\n[[feed]]\nname = "a"\n', {}, _name(path))
    for text in HERE_TOML.findall(path.read_text()):
        parse(textwrap.dedent(text), {}, _name(path))


def _commands(of: argparse.ArgumentParser, names: str = "strandline") -> Iterator[tuple[str, argparse.ArgumentParser]]:
    """Every command by its full name, groups of commands too."""
    yield names, of
    for action in of._actions:
        if isinstance(action, argparse._SubParsersAction):
            for name, below in action.choices.items():
                yield from _commands(below, f"{names} {name}")


def _calls(text: str) -> list[str]:
    """What a document tells a reader to type: `strandline ...` in code spans and in code blocks."""
    spans = re.findall(r"`(strandline [^`\n]*)`", FENCE.sub("", text))
    blocks = re.findall(r"^ {4,}(?:\$ )?(strandline [^\n#]*)", text, re.MULTILINE)
    fenced = "\n".join(body for _, body in FENCE.findall(text))
    blocks += re.findall(r"^(?:\$ )?(strandline [^\n#]*)", fenced, re.MULTILINE)
    return [call.strip() for call in (*spans, *blocks)]


@pytest.mark.parametrize("path", DOCUMENTS, ids=_name)
def test_every_command_and_option_in_a_document_exists(path: Path) -> None:
    known = dict(_commands(parser()))
    for call in _calls(path.read_text()):
        words = re.split(r"[\s|>]+", call)
        name = next(" ".join(words[:n]) for n in range(len(words), 0, -1) if " ".join(words[:n]) in known)
        given = known[name]
        options = {option for action in given._actions for option in action.option_strings}
        assert set(re.findall(r"(?<=\s)--?[a-z][\w-]*", call)) <= options, f"{_name(path)}: {call}"
        rest = words[len(name.split()) :]
        groups = [action for action in given._actions if isinstance(action, argparse._SubParsersAction)]
        if groups and rest and not rest[0].startswith("-"):
            raise AssertionError(f"{_name(path)}: {name} has no command {rest[0]}: {call}")


def test_the_table_of_keys_is_the_declared_one() -> None:
    text = (ROOT / "deploy" / "configuration.md").read_text()
    assert text.count(BEGIN) == text.count(END) == 1
    assert text.partition(BEGIN)[2].partition(END)[0].strip() == config_table().strip()


def test_the_table_of_metrics_is_the_declared_one() -> None:
    """One row for each metric, with the sentences that the code has for it, and none for anything else."""
    rows = re.findall(r"^\| *`(strandline_\w+)` *\|(.*)", (ROOT / "deploy" / "metrics.md").read_text(), re.MULTILINE)
    assert sorted(name for name, _ in rows) == sorted(METRICS)
    for name, row in rows:
        assert METRICS[name].help in row, name
        assert METRICS[name].act in row, name


@pytest.mark.parametrize("number", range(1, 10))
def test_every_promise_has_a_test(number: int) -> None:
    rows = [line for line in README.read_text().splitlines() if re.match(rf"\| *P{number}\b", line)]
    assert len(rows) == 1, f"README's table has {len(rows)} rows for P{number}"
    tests = [target for target, _ in LINK.findall(rows[0]) if re.fullmatch(r"tests/\w+/test_\w+\.py", target)]
    assert tests, f"no test is linked in: {rows[0]}"
    for test in tests:
        assert "def test_" in (ROOT / test).read_text()
