"""A segment: one file of the journal, its header, its notes, and the mapping that its lines are read from.

Here live the layout of a segment file and what is done to a single one. Which segment a frame goes to, what is full
and what is failed is decided in `journal`; reading a whole directory back is `recovery`. A segment is 64 header bytes,
then frames one after the other, then zeros up to the size that was reserved when it was made:

    magic 8 | format version u32 | crc32c u32 | first position u64 | digest of the feed's name 16     written once
    two notes: durable position u64 | crc32c u32                                                      written in turn

A *note* says: the journal was durable up to here. It is written after the sync that it tells of and becomes durable
with the next one. Damage before a noted position is a disk that lost what it had synced; damage behind every note is
what an unfinished write leaves. The two notes take turns, so that a torn write of one leaves the other.
"""

from __future__ import annotations

import hashlib
import re
import struct
from collections.abc import Callable
from dataclasses import dataclass
from threading import Lock

from strandline.errors import JournalError
from strandline.ports import Disk, File

from .frame import extend_crc

SEGMENT_HEADER_BYTES = 64
FORMAT_VERSION = 1
MAGIC = b"\xb5strand\n"
DIGEST_BYTES = 16
MAPS_AT_MOST = 32  # a mapping costs a file handle for as long as it lives; 32 of 64 MiB span 2 GiB of one feed

_FIXED = struct.Struct("<8sIIQ16s")
_NOTE = struct.Struct("<QI")
_NAME = re.compile(r"journal-([0-9]{20})\.seg")


def segment_name(first_lsn: int) -> str:
    """The file name of the segment whose first frame starts at `first_lsn`."""
    return f"journal-{first_lsn:020d}.seg"


def first_lsn_of(name: str) -> int | None:
    """The position in a segment's file name, or None for any other name."""
    found = _NAME.fullmatch(name)
    return int(found[1]) if found else None


def digest_of(feed: str) -> bytes:
    """16 bytes that tell one feed's files from another's."""
    return hashlib.blake2b(feed.encode(), digest_size=DIGEST_BYTES).digest()


def encode_header(first_lsn: int, digest: bytes) -> bytes:
    """A segment's header without its notes, 40 bytes."""
    blank = _FIXED.pack(MAGIC, FORMAT_VERSION, 0, first_lsn, digest)
    return _FIXED.pack(MAGIC, FORMAT_VERSION, _header_crc(blank), first_lsn, digest)


def encode_note(header: bytes, durable_lsn: int) -> bytes:
    """A note for the segment with this header, 12 bytes. No other segment takes it for its own."""
    return _NOTE.pack(durable_lsn, extend_crc(0, header[12:16] + durable_lsn.to_bytes(8, "little")))


def note_offset(turn: int) -> int:
    """Where the note stands that is written `turn`-th."""
    return _FIXED.size + _NOTE.size * (turn & 1)


def decode_header(view: memoryview, path: str) -> tuple[int, bytes]:
    """First position and digest of a segment. Raises JournalError where the header is not one this code can read."""
    if len(view) < SEGMENT_HEADER_BYTES:
        raise JournalError(f"{path}: {len(view)} bytes are too few for a segment; restore the file from a copy")
    magic, version, crc, first_lsn, digest = _FIXED.unpack_from(view)
    if magic == MAGIC and version > FORMAT_VERSION:
        raise JournalError(
            f"{path}: written in format {version}, this program reads up to {FORMAT_VERSION}; start the newer program"
        )
    if magic != MAGIC or crc != _header_crc(bytes(view[: _FIXED.size])):
        raise JournalError(
            f"{path}: the header at byte 0 is damaged, although it was synced before the file got its name; "
            "every frame in it is out of reach: check the disk and restore the file from a copy"
        )
    return first_lsn, digest


def noted_lsn(view: memoryview) -> int:
    """The highest durable position that the notes of a segment prove; 0 where they prove none."""
    header = bytes(view[: _FIXED.size])
    highest = 0
    for turn in (0, 1):
        stands = bytes(view[note_offset(turn) : note_offset(turn) + _NOTE.size])
        lsn = int.from_bytes(stands[:8], "little")
        if stands == encode_note(header, lsn):
            highest = max(highest, lsn)
    return highest


def _header_crc(fixed: bytes) -> int:
    return extend_crc(0, fixed[:12] + fixed[16 : _FIXED.size])


@dataclass(slots=True, eq=False)
class Segment:
    """One segment in use. `file` is the handle for writing, None once the segment is full or was opened for reading.

    `named` is False while its file still has the name of a spare one: none of its frames was written yet. `unread` is
    True while its frames were neither checked nor written by this process, because a snapshot stands for them.
    """

    path: str
    size: int
    first_lsn: int
    digest: bytes
    file: File | None = None
    named: bool = True
    turn: int = 0
    unread: bool = False

    @property
    def room(self) -> int:
        """Bytes for frames."""
        return self.size - SEGMENT_HEADER_BYTES

    def offset(self, lsn: int) -> int:
        """Where in the file a position stands."""
        return lsn - self.first_lsn + SEGMENT_HEADER_BYTES

    def header(self) -> bytes:
        """Its header without notes."""
        return encode_header(self.first_lsn, self.digest)

    def writable(self) -> File:
        """The handle for writing."""
        assert self.file is not None, f"{self.path} is not open for writing"
        return self.file

    def note(self, durable_lsn: int) -> None:
        """Write, without a sync, that the journal is durable up to `durable_lsn`. Raises OSError."""
        self.writable().write(note_offset(self.turn), [encode_note(self.header(), durable_lsn)])
        self.turn += 1

    def forget_notes(self) -> None:
        """Blank the notes, durably: what they prove has been given up. Raises OSError."""
        file = self.writable()
        file.write(note_offset(0), [bytes(SEGMENT_HEADER_BYTES - _FIXED.size)])
        file.sync()
        self.seal()

    def seal(self) -> None:
        """Give the handle for writing back; mappings stay."""
        file, self.file = self.file, None
        if file is not None:
            file.close()


class Maps:
    """The mappings of segments that are read, at most `MAPS_AT_MOST` at a time; any thread may ask.

    A mapping that was given out stays valid while it is held, also when it is forgotten here or its file is removed.
    The oldest mapping goes first: lines are read back roughly in the order in which they came.
    """

    def __init__(self, open_file: Callable[[str], File], at_most: int = MAPS_AT_MOST) -> None:
        self._open = open_file
        self._at_most = at_most
        self._lock = Lock()
        self._views: dict[str, memoryview] = {}

    @classmethod
    def on(cls, disk: Disk) -> Maps:
        """Mappings of the files of a disk."""
        return cls(disk.open)

    def view(self, path: str) -> memoryview:
        """The file's bytes. Raises OSError."""
        with self._lock:
            view = self._views.get(path)
            if view is None:
                view = self._map(path)
                while len(self._views) >= self._at_most:
                    del self._views[next(iter(self._views))]
                self._views[path] = view
            return view

    def forget(self, path: str) -> None:
        """Hold the mapping no longer."""
        with self._lock:
            self._views.pop(path, None)

    def forget_all(self) -> None:
        """Hold no mapping any longer."""
        with self._lock:
            self._views.clear()

    def __len__(self) -> int:
        return len(self._views)

    def _map(self, path: str) -> memoryview:
        file = self._open(path)
        try:
            return file.view()
        finally:
            file.close()
