"""Where released batches go: one module a kind of sink, the keeper of the late lane and quarantine, and delivery.

`make_sink` knows the kinds and imports a kind's module only when one is made.
"""

from __future__ import annotations

import importlib
import inspect
from collections.abc import Callable
from typing import TYPE_CHECKING

from ..errors import StrandlineError

if TYPE_CHECKING:
    from ..ports import Clock, Sink

# kind -> module and class. Each constructor takes `feed`, `clock` if it names it, and the kind's own options.
SINK_KINDS: dict[str, tuple[str, str]] = {
    "sqlite": ("sqlite", "SqliteSink"),
    "ndjson": ("ndjson", "NdjsonSink"),
    "postgres": ("postgres", "PostgresSink"),
    "http": ("http", "HttpSink"),
    "remote_write": ("remote_write", "RemoteWriteSink"),
    "jetstream": ("jetstream", "JetstreamSink"),
    "parquet": ("parquet", "ParquetSink"),
}


EXTRAS = {"parquet": "arrow", "jetstream": "nats"}  # extras of the installation that are not named after their kind


def make_sink(kind: str, feed: str, clock: Clock, **options: object) -> Sink:
    """A sink of this kind for this feed; nothing is opened yet.

    Options are the constructor's, such as `path` for sqlite. Raises StrandlineError for a kind that is not known or not
    installed, and for options that the kind does not have or lacks.
    """
    maker = _maker(kind)
    given: dict[str, object] = {"feed": feed, **options}
    parameters = inspect.signature(maker).parameters
    if "clock" in parameters:
        given["clock"] = clock
    wrong = sorted(set(given) - set(parameters))
    lacking = [each.name for each in parameters.values() if each.default is each.empty and each.name not in given]
    if wrong or lacking:
        raise StrandlineError(f"a sink of kind {kind} " + _faults(wrong, lacking))
    sink: Sink = maker(**given)
    return sink


def make_shared_sink(kind: str, feed: str, clock: Clock, **options: object) -> Sink:
    """As `make_sink`, for a feed whose owners follow one another and deliver the same batches under the same numbers.

    A kind that would take another owner's work for a fault is told (`shared`); each other kind is as it always is.
    """
    if kind in SINK_KINDS and "shared" in inspect.signature(_maker(kind)).parameters:
        options = {**options, "shared": True}
    return make_sink(kind, feed, clock, **options)


def _maker(kind: str) -> Callable[..., Sink]:
    """The class of a kind of sink. Raises StrandlineError where it is not known or not installed."""
    if kind not in SINK_KINDS:
        raise StrandlineError(f"there is no kind of sink named {kind!r}: name one of {', '.join(SINK_KINDS)}")
    module, name = SINK_KINDS[kind]
    try:
        maker: Callable[..., Sink] = getattr(importlib.import_module(f".{module}", __name__), name)
    except ModuleNotFoundError as error:
        extra = EXTRAS.get(kind, kind.replace("_", "-"))
        advice = f"install strandline with its extra: pip install 'strandline[{extra}]'"
        raise StrandlineError(f"a sink of kind {kind} needs the package {error.name}: {advice}") from error
    return maker


def _faults(wrong: list[str], lacking: list[str]) -> str:
    parts = []
    if wrong:
        parts.append(f"has no option {', '.join(wrong)}")
    if lacking:
        parts.append(f"needs {', '.join(lacking)}")
    return " and ".join(parts)
