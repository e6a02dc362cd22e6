"""Snapshot files: a body that stands for all of the journal before a position, so that a start need not fold it all.

Here lives the file, not what is in the body. A snapshot is written to a temporary name, synced, renamed, and its
directory synced: a file with a snapshot's name is whole, or the disk has damaged it since. The two newest are kept,
and where segments are retained for replay those that a replay of them can begin from.

    magic 8 | format version u32 | crc32c u32 | position u64 | body bytes u64 | digest of the feed's name 16 | zeros 16
    body

The CRC runs over the rest of the header (64 bytes without the CRC itself) and the body.
"""

from __future__ import annotations

import re
import struct
from collections.abc import Iterator, Sequence

from strandline.core.effects import Buffer
from strandline.ports import Disk

from .frame import bytes_of, extend_crc, flatten

MAGIC = b"\xb5still\r\n"
FORMAT_VERSION = 1
HEADER_BYTES = 64
KEPT = 2
MAX_LSN = 2**64

SNAPSHOT_NAME = re.compile(r"snapshot-([0-9]{20})\.snap")
_HEADER = struct.Struct("<8sIIQQ16s16x")


def snapshot_name(lsn: int) -> str:
    """The file name of the snapshot of everything before `lsn`."""
    return f"snapshot-{lsn:020d}.snap"


def write_snapshot(
    disk: Disk, directory: str, lsn: int, digest: bytes, parts: Sequence[Buffer], kept_from_lsn: int = MAX_LSN
) -> None:
    """Make a snapshot durable, then remove all but the two newest and those at or behind `kept_from_lsn`.

    Raises OSError; two snapshots stay in any case.
    """
    bodies = flatten(parts)
    body_bytes = sum(map(bytes_of, bodies))
    blank = _HEADER.pack(MAGIC, FORMAT_VERSION, 0, lsn, body_bytes, digest)
    crc = _crc(blank, bodies)
    header = _HEADER.pack(MAGIC, FORMAT_VERSION, crc, lsn, body_bytes, digest)
    temporary = f"{directory}/snapshot-{lsn:020d}.tmp"
    remove_unfinished(disk, directory)
    file = disk.create(temporary, HEADER_BYTES + body_bytes)
    try:
        file.write(0, [header, *bodies])
        file.sync()
    finally:
        file.close()
    disk.rename(temporary, f"{directory}/{snapshot_name(lsn)}")
    disk.sync_directory(directory)
    for old in (old for old in snapshot_lsns(disk, directory)[KEPT:] if old < kept_from_lsn):
        disk.remove(f"{directory}/{snapshot_name(old)}")


def read_snapshots(disk: Disk, directory: str, digest: bytes) -> list[tuple[int, memoryview]]:
    """Position and body of each intact snapshot, the newest first; a damaged one is left out. Raises OSError."""
    return list(intact_snapshots(disk, directory, digest))


def intact_snapshots(disk: Disk, directory: str, digest: bytes) -> Iterator[tuple[int, memoryview]]:
    """The same one by one: each is read through only when it is asked for."""
    for lsn in snapshot_lsns(disk, directory):
        body = _body(disk, f"{directory}/{snapshot_name(lsn)}", lsn, digest)
        if body is not None:
            yield lsn, body


def snapshot_lsns(disk: Disk, directory: str) -> list[int]:
    """Positions in the names of the snapshots that are there, the newest first."""
    names = map(SNAPSHOT_NAME.fullmatch, disk.names(directory))
    return sorted((int(match[1]) for match in names if match), reverse=True)


def remove_unfinished(disk: Disk, directory: str) -> None:
    """Remove what a crash left of a snapshot that was never finished. Raises OSError."""
    for name in disk.names(directory):
        if name.startswith("snapshot-") and name.endswith(".tmp"):
            disk.remove(f"{directory}/{name}")


def _body(disk: Disk, path: str, lsn: int, digest: bytes) -> memoryview | None:
    file = disk.open(path)
    try:
        view = file.view()
    finally:
        file.close()
    if len(view) < HEADER_BYTES:
        return None
    magic, version, crc, stands, body_bytes, whose = _HEADER.unpack_from(view)
    body = view[HEADER_BYTES : HEADER_BYTES + body_bytes]
    if (magic, version, stands, whose) != (MAGIC, FORMAT_VERSION, lsn, digest) or len(body) != body_bytes:
        return None
    return body if _crc(bytes(view[:HEADER_BYTES]), [body] if body_bytes else []) == crc else None


def _crc(header: bytes, bodies: Sequence[Buffer]) -> int:
    crc = extend_crc(0, header[:12] + header[16:])
    for body in bodies:
        crc = extend_crc(crc, body)
    return crc
