"""Rules on sinks that compare keys with each other: columns of a table, secrets named twice, two sinks at one place.

Paths are compared in `config_checks`.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from .config_intake_checks import check_secrets
from .config_kinds import quoted
from .config_read import Place, Reading
from .config_sinks import HttpConfig, JetstreamConfig, ParquetConfig, PostgresConfig, RemoteWriteConfig, SinkConfig
from .sinks.parquet_columns import OWN, fault_of
from .sinks.postgres_columns import OWN_TABLES, settled

SERIES_AT_MOST = 100  # series names that one event feeds


def check_sinks(sinks: Iterable[tuple[int, Place, SinkConfig]], reading: Reading) -> None:
    """Judge sinks that could be read, each with the index of its feed and its place; what is wrong becomes a fault."""
    seen: dict[tuple[object, ...], Place] = {}
    for index, place, sink in sinks:
        if isinstance(sink, PostgresConfig | ParquetConfig):
            _check_columns(sink, place, reading)
        if isinstance(sink, ParquetConfig):
            _check_parquet(sink, place, reading)
        if isinstance(sink, PostgresConfig):
            _check_tables(sink, place, reading)
        if isinstance(sink, HttpConfig | RemoteWriteConfig):
            _check_secrets(sink, place, reading)
        if isinstance(sink, JetstreamConfig):
            check_secrets(sink, place, reading)
        if isinstance(sink, RemoteWriteConfig):
            _check_series(sink, place, reading)
        for key, target in _targets(sink):
            if reading.is_faulty((*place, key)):
                continue
            first = seen.setdefault((index, *target), (*place, key))
            if first[: len(place)] != place:
                sentence = f"is where {reading.spelled(first)} writes already: give each sink a place of its own"
                reading.fault((*place, key), sentence)


def _targets(sink: SinkConfig) -> Iterator[tuple[str, tuple[str, ...]]]:
    """The places that a sink writes to, with the key that names each. A second sink of its feed there would be taken
    for the first one come again."""
    if isinstance(sink, PostgresConfig):
        yield "table", (sink.dsn, sink.schema, sink.table)
        yield "late_table", (sink.dsn, sink.schema, sink.late_table)
    if isinstance(sink, JetstreamConfig):
        yield from (("subject", (url, sink.subject)) for url in sink.urls)
    if isinstance(sink, HttpConfig):
        yield "url", (sink.url,)
        if sink.late_url:
            yield "late_url", (sink.late_url,)


def _check_columns(sink: PostgresConfig | ParquetConfig, place: Place, reading: Reading) -> None:
    names: dict[str, int] = {}
    for number, column in enumerate(sink.columns):
        here = (*place, "columns", number)
        if any(reading.is_faulty((*here, key)) for key in ("name", "value", "at", "type")):
            continue
        try:
            settled(column.column())
        except ValueError as error:
            reading.fault(here, str(error), quoted(column.name))
        if names.setdefault(column.name, number) != number:
            reading.fault(
                (*here, "name"), f"is the name of columns[{names[column.name] + 1}] already", quoted(column.name)
            )


def _check_parquet(sink: ParquetConfig, place: Place, reading: Reading) -> None:
    for number, column in enumerate(sink.columns):
        if column.name in OWN:
            sentence = "is a column that the sink keeps for itself: name another"
            reading.fault((*place, "columns", number, "name"), sentence, quoted(column.name))
    why = fault_of([column.column() for column in sink.columns])
    if why and not any(reading.is_faulty((*place, "columns", number)) for number in range(len(sink.columns))):
        reading.fault((*place, "columns"), why)


def _check_tables(sink: PostgresConfig, place: Place, reading: Reading) -> None:
    if sink.table == sink.late_table and not reading.is_faulty((*place, "table")):
        reading.fault((*place, "late_table"), "is `table` already: late events need a table of their own")
    for key in ("table", "late_table"):
        if getattr(sink, key) in OWN_TABLES:
            sentence = "is a table that the sink keeps for itself: name another"
            reading.fault((*place, key), sentence, quoted(getattr(sink, key)))


def _check_series(sink: RemoteWriteConfig, place: Place, reading: Reading) -> None:
    series = (*place, "series")
    if not sink.series and not reading.is_faulty(series):
        reading.fault(series, 'is missing: write series = [ { name = "...", value = "/..." } ]')
    if len(sink.series) > SERIES_AT_MOST:
        reading.fault(series, f"has more than {SERIES_AT_MOST} entries")
    fixed = {name for name, _ in sink.external_labels}
    for number, each in enumerate(sink.series):
        for name in sorted(fixed & {name for name, _ in each.labels}):
            reading.fault((*series, number, "labels"), f"holds {name}, which is one of external_labels already")


def _check_secrets(sink: HttpConfig | RemoteWriteConfig, place: Place, reading: Reading) -> None:
    named = ["token"] if sink.token else []
    named += ["token_file"] if sink.token_file else []
    headers = sink.headers if isinstance(sink, HttpConfig) else ()
    named += ["headers"] if any(key.lower() == "authorization" for key, _ in headers) else []
    if len(named) > 1:
        reading.fault((*place, named[-1]), f"and `{named[0]}` both say what `Authorization` is: name one of them")
