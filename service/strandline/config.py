"""The configuration: one TOML file and `STRANDLINE_...` variables in, frozen structs out, or every fault at once.

This is the door: other rooms import from here only. Behind it `config_model`, `config_sinks` and `config_cluster`
declare the keys, `config_kinds` and `config_units` read single values, `config_read` walks the tables,
`config_overrides` knows the variables, `config_checks` and its like compare keys, `config_table` documents them.
Nothing is opened, created or connected here, except that `load` reads the file.
"""

from __future__ import annotations

import tomllib
from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from typing import Any, TypeVar

import msgspec

from .config_checks import check
from .config_cluster import ClusterConfig, Partitions, settled_cluster
from .config_intakes import IntakeConfig
from .config_kinds import Address
from .config_model import Config, EventTime, Feed, Journal, Limits
from .config_overrides import override
from .config_read import Reading, declared, tables_of
from .config_sinks import HttpConfig, NdjsonConfig, PostgresConfig, SinkConfig, SqliteConfig
from .errors import ConfigError

__all__ = [
    "Address",
    "ClusterConfig",
    "Config",
    "EventTime",
    "Feed",
    "HttpConfig",
    "Journal",
    "Limits",
    "NdjsonConfig",
    "Partitions",
    "PostgresConfig",
    "SinkConfig",
    "SqliteConfig",
    "load",
    "parse",
]

FILE_BYTES_AT_MOST = 2**20
Rules = Callable[[Config, Reading], None]
Described = TypeVar("Described", SinkConfig, IntakeConfig)


def load(path: Path, environ: Mapping[str, str], also: Rules | None = None) -> Config:
    """The configuration of a file and the environment. Raises ConfigError with every fault.

    `also` are further rules, judged with the others.
    """
    try:
        with path.open("rb") as file:
            data = file.read(FILE_BYTES_AT_MOST + 1)
    except (OSError, ValueError) as error:  # ValueError: a NUL in the path
        reason = getattr(error, "strerror", None) or str(error)
        raise ConfigError([f"{path}: the configuration cannot be read: {reason}"]) from None
    try:
        return parse(data.decode(), environ, str(path), also)
    except UnicodeDecodeError as error:
        raise ConfigError([f"{path}: is not UTF-8 at byte {error.start}"]) from None


def parse(
    text: str, environ: Mapping[str, str], place: str = "configuration", also: Rules | None = None
) -> Config:
    """The configuration that a file with this text gives. `place` names the file in faults. Raises ConfigError."""
    raw = _toml(text, place)
    for feed in _dicts(raw.get("feed")):
        if feed.get("sink", []) == []:
            feed["sink"] = [{"kind": "sqlite"}]
    reading = Reading(place, _feed_names(raw), _homes())
    override(raw, environ, reading)
    config = _settled(reading.table(Config, raw))
    check(config, reading)
    if also is not None:
        also(config, reading)
    if reading.faults:
        raise ConfigError(reading.faults)
    return config


def _toml(text: str, place: str) -> dict[str, Any]:
    if len(text) > FILE_BYTES_AT_MOST:
        raise ConfigError([f"{place}: is larger than {FILE_BYTES_AT_MOST:,} characters"])
    try:
        return tomllib.loads(text)
    except ValueError as error:  # TOMLDecodeError, and integers of thousands of digits
        raise ConfigError([f"{place}: is no TOML: {error}"]) from None
    except RecursionError:
        raise ConfigError([f"{place}: is nested too deeply"]) from None


def _dicts(tables: object) -> Iterator[dict[str, Any]]:
    return (table for table in (tables if isinstance(tables, list) else ()) if isinstance(table, dict))


def _feed_names(raw: Mapping[str, Any]) -> dict[int, str]:
    tables = raw.get("feed")
    feeds = enumerate(tables if isinstance(tables, list) else ())
    names = {index: feed.get("name") for index, feed in feeds if isinstance(feed, dict)}
    return {index: name for index, name in names.items() if isinstance(name, str)}


def _homes() -> dict[str, list[str]]:
    """The tables that have a key, as a person would write them: for keys that stand in the wrong one."""
    homes: dict[str, list[str]] = {}
    for title, struct in tables_of(Config):
        for key in declared(struct):
            homes.setdefault(key, []).append(f"`{title}`" if title else "the top of the file, before any [table]")
    return homes


def _settled(config: Config) -> Config:
    """The configuration with what a sink's defaults take from its feed, and with its paths as they will be opened."""
    feeds = []
    for feed in config.feeds:
        sinks = tuple(_settled_sink(sink, feed.name, config.data_dir) for sink in feed.sinks)
        intakes = tuple(_settled_sink(intake, feed.name, config.data_dir) for intake in feed.intakes)
        feeds.append(msgspec.structs.replace(feed, sinks=sinks, intakes=intakes))
    return msgspec.structs.replace(config, feeds=tuple(feeds), cluster=settled_cluster(config.cluster))


def _settled_sink(sink: Described, feed_name: str, data_dir: Path) -> Described:
    changes: dict[str, Any] = {}
    for item in declared(type(sink)).values():
        value = getattr(sink, item.attribute)
        if value is item.default and isinstance(value, str | Path):
            value = type(value)(str(value).format(feed=feed_name, kind=sink.kind))
        changes[item.attribute] = data_dir / value if isinstance(value, Path) else value
    return msgspec.structs.replace(sink, **changes)
