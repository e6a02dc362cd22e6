"""The configuration's keys as Markdown tables, made from their declarations: `python -m strandline.config_table`.

deploy/configuration.md holds the result between its two marker lines; a test compares.
"""

from __future__ import annotations

import re
import sys
from collections.abc import Iterator
from typing import Any

import msgspec

from .config_intakes import INTAKE_KINDS, IntakeConfig
from .config_model import Config
from .config_read import Declared, Key, Tables, declared, tables_of
from .config_sinks import SINK_KINDS, SinkConfig

BEGIN, END = "<!-- keys: begin -->", "<!-- keys: end -->"


def config_table() -> str:
    """One table of keys per table of the file, as Markdown, without the marker lines."""
    return "\n".join(line for title, struct in tables_of(Config) for line in _section(title, struct))


def _section(title: str, struct: type[msgspec.Struct]) -> Iterator[str]:
    about = " ".join((struct.__doc__ or "").split())
    yield f"### {_heading(title, struct)}\n"
    yield f"{about}\n"
    yield "| key | default | value | what it is for |"
    yield "|---|---|---|---|"
    if issubclass(struct, SinkConfig | IntakeConfig):
        noun = "sink" if issubclass(struct, SinkConfig) else "intake"
        yield f'| `kind` | (required) | `"{struct.kind}"` | the kind of {noun} |'
    for item in declared(struct).values():
        if isinstance(item.mark, Key):
            about = item.mark.about.replace("|", "\\|")
            yield f"| `{item.key}` | {_default(item, item.mark)} | {item.mark.kind.about} | {about} |"
    yield ""


def _heading(title: str, struct: type[msgspec.Struct]) -> str:
    if not title:
        return "At the top of the file"
    name, _, below = title.partition(" ")
    if below and not issubclass(struct, SinkConfig | IntakeConfig):
        kind, _, key = below.partition(".")
        is_sink = name.endswith("sink")
        several = isinstance(declared((SINK_KINDS if is_sink else INTAKE_KINDS)[kind])[key].mark, Tables)
        owner = "a sink" if is_sink else "an intake"
        return f'`{key} = {"[ { ... } ]" if several else "{ ... }"}` of {owner} with `kind = "{kind}"`'
    if issubclass(struct, SinkConfig | IntakeConfig):
        return f'`[[{name}]]` with `kind = "{struct.kind}"`'
    *above, last = name.split(".")
    owner = f" of {'a feed' if above == ['feed'] else f'`{above[-1]}`'}" if above else ""
    return f"`[[{name}]]`" if name == "feed" else f"`{last} = {{ ... }}`{owner}"


def _default(item: Declared, key: Key) -> str:
    if item.required:
        return "(required)"
    if item.default is None:
        return "(unset)"
    return "`" + key.kind.show(_spelled(item.default)) + "`"


def _spelled(default: Any) -> Any:
    """A default with its placeholders as a reader would say them."""
    return re.sub(r"\{(feed|kind|host)\}", r"<\1>", str(default)) if "{" in str(default) else default


if __name__ == "__main__":
    sys.stdout.write(config_table() + "\n")
