"""How far a receiver of remote writes is, kept in a small file of our own, since the receiver cannot be asked.

One row a feed and lane, and one for each event that the receiver refused until somebody else keeps it. What is on its
way is written down before it is sent: so after a crash exactly those samples, and no others, are in doubt.
"""

from __future__ import annotations

import os
import sqlite3
from dataclasses import dataclass, field

from ..core.columns import Lane
from .database import Database, Table
from .remote_write_samples import Place

NOWHERE: Place = (0, 0)

PROGRESS = Table(
    "progress",
    (
        ("feed", "TEXT NOT NULL"),
        ("lane", "TEXT NOT NULL"),
        ("reached", "INTEGER NOT NULL"),
        ("part_batch", "INTEGER NOT NULL"),
        ("part_rows", "INTEGER NOT NULL"),
        ("sending_batch", "INTEGER NOT NULL"),
        ("sending_rows", "INTEGER NOT NULL"),
    ),
    "PRIMARY KEY (feed, lane)",
    "WITHOUT ROWID",
)
REFUSED = Table(
    "refused",
    (
        ("feed", "TEXT NOT NULL"),
        ("lane", "TEXT NOT NULL"),
        ("batch", "INTEGER NOT NULL"),
        ("row", "INTEGER NOT NULL"),
        ("reason", "TEXT NOT NULL"),
    ),
    "PRIMARY KEY (feed, lane, batch, row)",
    "WITHOUT ROWID",
)
_PUT = "INSERT OR REPLACE INTO progress VALUES (?,?,?,?,?,?,?)"
_KEEP = "INSERT OR REPLACE INTO refused VALUES (?,?,?,?,?)"
_FORGET = "DELETE FROM refused WHERE feed = ? AND lane = ? AND batch < ?"


@dataclass(slots=True)
class Progress:
    """One lane. Batches up to `reached` are settled; of the batch of `part` so many rows are; up to `sending` rows are
    on their way, or were when the process ended. `refused`: reason by row by batch, of what is not kept elsewhere yet.
    """

    reached: int = 0
    part: Place = NOWHERE
    sending: Place = NOWHERE
    refused: dict[int, dict[int, str]] = field(default_factory=dict)

    def check(self) -> None:
        """Assert that the parts of a place belong together and lie behind each other."""
        assert self.part == NOWHERE or (self.part[0] > self.reached and self.part[1] > 0)
        assert self.sending == NOWHERE or self.sending > max(self.part, (self.reached + 1, 0))
        assert all(rows for rows in self.refused.values())


class ProgressFile:
    """The file, which several feeds may share."""

    def __init__(self, path: str | os.PathLike[str], feed: str) -> None:
        self._database = Database(path, (PROGRESS, REFUSED))
        self._feed = feed

    async def read(self) -> dict[Lane, Progress]:
        """What is known, by lane; a lane that is absent was never sent. Errors as for `Database.transaction`."""
        return await self._database.transaction(self._read)

    def _read(self, connection: sqlite3.Connection) -> dict[Lane, Progress]:
        found: dict[Lane, Progress] = {}
        rows = connection.execute("SELECT * FROM progress WHERE feed = ?", (self._feed,)).fetchall()
        for _, lane, reached, *places in rows:
            found[lane] = Progress(reached, (places[0], places[1]), (places[2], places[3]))
        refused = connection.execute("SELECT lane, batch, row, reason FROM refused WHERE feed = ?", (self._feed,))
        for lane, batch, row, reason in refused.fetchall():
            found.setdefault(lane, Progress()).refused.setdefault(batch, {})[row] = reason
        return found

    async def write(self, lane: Lane, now: Progress, new: dict[int, dict[int, str]], settled_below: int) -> None:
        """Put a lane's progress in place, with `new` refusals, without those of batches below `settled_below`.

        All of it is durable together, or none. Errors as for `Database.transaction`.
        """
        await self._database.transaction(lambda connection: self._write(connection, lane, now, new, settled_below))

    def _write(
        self,
        connection: sqlite3.Connection,
        lane: Lane,
        now: Progress,
        new: dict[int, dict[int, str]],
        settled_below: int,
    ) -> None:
        connection.execute(_PUT, (self._feed, lane, now.reached, *now.part, *now.sending))
        connection.execute(_FORGET, (self._feed, lane, settled_below))
        rows = ((self._feed, lane, batch, row, why) for batch, whys in new.items() for row, why in whys.items())
        connection.executemany(_KEEP, rows)

    async def close(self) -> None:
        """Release the file, after what still runs."""
        await self._database.close()
