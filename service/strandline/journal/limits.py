"""How much a journal may hold, and the sentences in which it refuses more.

The numbers are compared here, before anything is written; what they are, and whom they do not bind, is `journal`.
"""

from __future__ import annotations

from dataclasses import dataclass

from strandline.errors import JournalFull


@dataclass(frozen=True, slots=True)
class Limits:
    """Bytes at most: of the segments on the disk, and of the frames that wait for it."""

    directory: str
    bytes_at_most: int
    queued_bytes_at_most: int

    def check(self, need: int, used: int, queued: int) -> None:
        """Raise JournalFull where `need` bytes of frames would pass a limit.

        `used` are the segments' bytes with what would have to be reserved, `queued` the bytes of frames that wait. One
        record alone may be larger than the second limit: else it could never be taken.
        """
        if used > self.bytes_at_most:
            raise JournalFull(
                "journal_full",
                f"{self.directory}: {need:,} bytes more would take the segments to {used:,} bytes, and "
                f"the limit (`journal.at_most`) is {self.bytes_at_most:,}: segments go when every sink has taken their "
                "events; see which sink lags, or raise the limit",
            )
        if queued and queued + need > self.queued_bytes_at_most:
            raise JournalFull(
                "journal_full",
                f"{self.directory}: {queued:,} bytes wait for the disk and {need:,} more would pass "
                f"{self.queued_bytes_at_most:,}: the disk is slower than the feed; try again, and watch the sync times",
            )
