"""The kinds of sinks as a configuration describes them, each one struct. What a sink does is `strandline.sinks`.

Rules that compare keys, of one sink or of several, are `config_sink_checks`.
"""

from __future__ import annotations

from dataclasses import fields
from pathlib import Path
from typing import Annotated, ClassVar, Literal

import msgspec
from msgspec import field

from .broker_access import BrokerAccess
from .config_broker_access import CaFile, CredsFile, Password, PasswordFile, Token, TokenFile, User
from .config_broker_kinds import broker_addresses, broker_name, subject_prefix
from .config_kinds import (
    choice,
    count,
    duration,
    headers,
    identifier,
    label_value,
    labels,
    metric_name,
    name,
    path,
    pointer,
    postgres_address,
    secret,
    size,
    url,
)
from .config_read import Key, Table, Tables
from .core.settings import SECOND_NS
from .sinks.postgres_columns import TYPES, VALUES, Column
from .sinks.remote_write_series import Pairs, SeriesRule

MIB = 2**20

SINK_NAME = name("a-z0-9_-", "1 to 63 of a-z, 0-9, - and _, the first a letter or digit", reserved="lanes")


class LateConfig(msgspec.Struct, frozen=True):
    """What becomes of late events at this sink; the lane store keeps them in any case."""

    deliver: Annotated[
        Literal["lane", "repair", "keep"],
        Key(
            choice("lane", "repair", "keep"),
            "`lane`: as they come; `repair`: now and then, in batches of one partition sorted by source and time; "
            "`keep`: not at all",
        ),
    ] = "lane"
    every_ns: Annotated[int, Key(duration("1s"), "how often repairs are sent")] = field(
        default=3600 * SECOND_NS, name="every"
    )
    partition_ns: Annotated[int, Key(duration("1s"), "the store's partition: no repair crosses its edge")] = field(
        default=86_400 * SECOND_NS, name="partition"
    )


class SinkConfig(msgspec.Struct, frozen=True):
    """What every kind of sink has. A further kind is one more struct and one line in SINK_KINDS."""

    kind: ClassVar[str] = ""
    # "{feed}" in the default of a path stands for the feed's name; relative paths start at `data_dir`.
    name: Annotated[str, Key(SINK_NAME, "unique within the feed; in metrics and on the dashboard")] = "{kind}"

    def options(self) -> dict[str, object]:
        """What `sinks.make_sink` takes for this kind; times become seconds there (`roll_every_s`)."""
        options = {key: getattr(self, key) for key in self.__struct_fields__ if key != "name"}
        options = {key: value for key, value in options.items() if not isinstance(value, LateConfig)}
        times = {key: value for key, value in options.items() if key.endswith("_ns")}
        return {key: value for key, value in options.items() if key not in times} | {
            f"{key.removesuffix('_ns')}_s": value / SECOND_NS for key, value in times.items()
        }


class SqliteConfig(SinkConfig, frozen=True):
    """One SQLite file: tables `events` and `late`, the position reached in the same transaction."""

    kind: ClassVar[str] = "sqlite"
    path: Annotated[Path, Key(path(), "the file, which feeds may share; relative to `data_dir`")] = Path("{feed}.db")


class NdjsonConfig(SinkConfig, frozen=True):
    """Files of newline-delimited JSON in one folder."""

    kind: ClassVar[str] = "ndjson"
    directory: Annotated[Path, Key(path(), "the folder, which feeds may share; relative to `data_dir`")] = Path(
        "{feed}-ndjson"
    )
    roll_bytes: Annotated[int, Key(size("1KiB"), "a new file is begun beyond this size")] = 64 * MIB
    roll_every_ns: Annotated[int, Key(duration("1s"), "a new file is begun after this time")] = field(
        default=10 * SECOND_NS, name="roll_every"
    )
    late: Annotated[LateConfig, Table(LateConfig)] = LateConfig()


class PostgresColumn(msgspec.Struct, frozen=True):
    """One column of `table`: a value that is known of every event (`value`), or one out of the event (`at`).

    With neither, the value that the column is named after. A value that does not fit its type is NULL where the table
    has a column of type text for `event`; otherwise the row goes, whole, to the table `strandline_aside`. A text column
    takes anything: strings as they are, everything else as JSON.
    """

    name: Annotated[str, Key(identifier(), "the column's name")]
    value: Annotated[str | None, Key(choice(*VALUES), "what is known of every event")] = None
    at: Annotated[str | None, Key(pointer(), "where in an event the value stands")] = None
    type: Annotated[
        str | None, Key(choice(*TYPES), "the column's type; by default that of `value`, and text with `at`")
    ] = None

    def column(self) -> Column:
        """As the sink takes it."""
        return Column(self.name, self.value or "", self.at or "", self.type or "")


class PostgresConfig(SinkConfig, frozen=True):
    """Tables of a PostgreSQL database, the position reached in the same transaction. Needs the extra `postgres`."""

    kind: ClassVar[str] = "postgres"
    dsn: Annotated[
        str,
        Key(
            postgres_address(),
            "the database, `postgres://user@host/database`; what it leaves out is taken from the variables `PGHOST`, "
            "`PGUSER`, `PGPASSWORD` and so on, or from a password file",
        ),
    ] = "postgres://"
    schema: Annotated[str, Key(identifier(), "the schema of all tables; it must be there")] = "public"
    table: Annotated[str, Key(identifier(), "the table for ordered events, made if absent; feeds may share it")] = (
        "events"
    )
    late_table: Annotated[str, Key(identifier(), "the table for late events, made if absent; feeds may share it")] = (
        "late"
    )
    columns: Annotated[tuple[PostgresColumn, ...], Tables({"": PostgresColumn})] = ()
    timeout_ns: Annotated[int, Key(duration("100ms", "1h"), "the longest wait for one answer of the server")] = field(
        default=60 * SECOND_NS, name="timeout"
    )

    def options(self) -> dict[str, object]:
        """As for every sink."""
        return super().options() | {"columns": tuple(column.column() for column in self.columns)}


class ParquetColumn(PostgresColumn, frozen=True):
    """One column of the files, by the rules of the columns of a table of PostgreSQL.

    A value that does not fit its type is null. Where no column of type text holds `event`, files have one column more,
    `event_aside`, with the whole event of such rows and null in all others: nothing is lost.
    """


class ParquetConfig(SinkConfig, frozen=True):
    """Parquet files in one folder. Needs the extra `arrow`."""

    kind: ClassVar[str] = "parquet"
    directory: Annotated[Path, Key(path(), "the folder, which feeds may share; relative to `data_dir`")] = Path(
        "{feed}-parquet"
    )
    roll_bytes: Annotated[
        int, Key(size("1KiB"), "a new file is begun beyond this size, rows not packed yet counted as they are")
    ] = 64 * MIB
    roll_every_ns: Annotated[int, Key(duration("1s"), "a new file is begun after this time")] = field(
        default=60 * SECOND_NS, name="roll_every"
    )
    rows_per_group: Annotated[int, Key(count(1, 10_000_000), "rows in a row group; at 16 MiB it is written anyway")] = (
        100_000
    )
    compression: Annotated[
        Literal["zstd", "snappy", "none"], Key(choice("zstd", "snappy", "none"), "of the columns in the files")
    ] = "zstd"
    columns: Annotated[tuple[ParquetColumn, ...], Tables({"": ParquetColumn})] = ()
    late: Annotated[LateConfig, Table(LateConfig)] = LateConfig()

    def options(self) -> dict[str, object]:
        """As for every sink."""
        return super().options() | {"columns": tuple(column.column() for column in self.columns)}


class HttpConfig(SinkConfig, frozen=True, kw_only=True):
    """One POST of NDJSON for each batch, with its number as Idempotency-Key."""

    kind: ClassVar[str] = "http"
    url: Annotated[str, Key(url(), "where ordered events are sent")]
    late_url: Annotated[str | None, Key(url(), "where late events are sent; by default the same")] = None
    late: Annotated[LateConfig, Table(LateConfig)] = LateConfig()
    headers: Annotated[tuple[tuple[str, str], ...], Key(headers(), "sent with every request")] = ()
    token: Annotated[
        str | None,
        Key(secret("token", 4096), "sent as `Authorization: Bearer`; better in its variable than in the file"),
    ] = None
    token_file: Annotated[
        str | None, Key(secret("path", 4096, hidden=False), "a file that holds the token, read for each request")
    ] = None
    compression: Annotated[Literal["none", "gzip"], Key(choice("none", "gzip"), "of the bodies that are sent")] = "none"
    timeout_ns: Annotated[int, Key(duration("100ms", "1h"), "the longest wait for an answer, sending included")] = (
        field(default=30 * SECOND_NS, name="timeout")
    )
    answer_bytes_at_most: Annotated[int, Key(size("1KiB", "16MiB"), "of an answer's body that are read")] = 64 * 1024


class SeriesConfig(msgspec.Struct, frozen=True):
    """One series name, and where in an event its value and its labels stand.

    Each event that holds a number there gives one sample, at the event's time in ms (rounded down), of the series that
    the labels make. Strings, integers and booleans become labels; what is absent, null or empty is left out.
    """

    name: Annotated[str, Key(metric_name(), "the series' name")]
    value: Annotated[str, Key(pointer(), "where in an event the number stands")]
    labels: Annotated[Pairs, Key(labels(pointer()), "where in an event the value of each label stands")] = ()

    def rule(self) -> SeriesRule:
        """As the sink takes it."""
        return SeriesRule(self.name, self.value, self.labels)


class RemoteLateConfig(LateConfig, frozen=True):
    """What becomes of late events. A receiver takes them only with an out-of-order window of its own."""

    deliver: Annotated[
        Literal["keep", "lane", "repair"],
        Key(
            choice("keep", "lane", "repair"),
            "`keep`: they stay in the lane store; `lane`: sent as they come, in requests of their own; `repair`: sent "
            "now and then, in batches of one partition",
        ),
    ] = "keep"


class RemoteWriteConfig(SinkConfig, frozen=True, kw_only=True):
    """Samples of series to a receiver of remote writes 1.0, in order. Needs the extra `remote-write`."""

    kind: ClassVar[str] = "remote_write"
    url: Annotated[str, Key(url(), "the receiver's address for writes, such as `http://127.0.0.1:9090/api/v1/write`")]
    series: Annotated[tuple[SeriesConfig, ...], Tables({"": SeriesConfig})] = ()
    external_labels: Annotated[Pairs, Key(labels(label_value()), "labels that every series gets")] = ()
    late: Annotated[RemoteLateConfig, Table(RemoteLateConfig)] = RemoteLateConfig()
    samples_at_most: Annotated[int, Key(count(1, 100_000), "samples in one request")] = 2_000
    ahead_at_most_ns: Annotated[
        int, Key(duration("0s", "30d"), "a sample further beyond the receiver's clock is not sent")
    ] = field(default=300 * SECOND_NS, name="ahead_at_most")
    token: Annotated[
        str | None,
        Key(secret("token", 4096), "sent as `Authorization: Bearer`; better in its variable than in the file"),
    ] = None
    token_file: Annotated[
        str | None, Key(secret("path", 4096, hidden=False), "a file that holds the token, read for each request")
    ] = None
    timeout_ns: Annotated[int, Key(duration("100ms", "1h"), "the longest wait for an answer, sending included")] = (
        field(default=30 * SECOND_NS, name="timeout")
    )
    path: Annotated[Path, Key(path(), "the file that tells how far the receiver is; relative to `data_dir`")] = Path(
        "{feed}-remote-write.db"
    )

    def options(self) -> dict[str, object]:
        """As for every sink."""
        return super().options() | {"series": tuple(series.rule() for series in self.series)}


class JetstreamConfig(SinkConfig, frozen=True, kw_only=True):
    """Messages of NDJSON in a JetStream stream, in order, whose numbers tell a repeat. Needs the extra `nats`."""

    kind: ClassVar[str] = "jetstream"
    urls: Annotated[tuple[str, ...], Key(broker_addresses("nats", "tls"), "the servers; one that answers is used")]
    stream: Annotated[str, Key(broker_name("stream"), "the stream; it must be there and take the subjects")]
    subject: Annotated[
        str, Key(subject_prefix(), "what the subjects begin with: `SUBJECT.FEED.ordered` and `SUBJECT.FEED.late`")
    ] = "strandline"
    late: Annotated[LateConfig, Table(LateConfig)] = LateConfig()
    message_bytes_at_most: Annotated[
        int, Key(size("1KiB", "64MiB"), "bytes of one message, if the server and the stream let it be so large")
    ] = MIB
    timeout_ns: Annotated[int, Key(duration("100ms", "1h"), "the longest wait for the stream's answer")] = field(
        default=10 * SECOND_NS, name="timeout"
    )
    user: User = None
    password: Password = None
    password_file: PasswordFile = None
    token: Token = None
    token_file: TokenFile = None
    creds_file: CredsFile = None
    ca_file: CaFile = None

    def options(self) -> dict[str, object]:
        """As for every sink; who to be there is one option."""
        access = BrokerAccess.of(self)
        keys = {each.name for each in fields(access)}
        options = {key: value for key, value in super().options().items() if key not in keys}
        return options | {"access": access}


SINK_KINDS: dict[str, type[SinkConfig]] = {
    "sqlite": SqliteConfig,
    "ndjson": NdjsonConfig,
    "postgres": PostgresConfig,
    "http": HttpConfig,
    "remote_write": RemoteWriteConfig,
    "jetstream": JetstreamConfig,
    "parquet": ParquetConfig,
}
SINK_KINDS_LATER: tuple[str, ...] = ()  # kinds that are promised; named in the fault, so that nobody hunts a typo
