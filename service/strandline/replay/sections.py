"""The file that a capture is: a header, sections one after the other, an index of them, a trailer.

Here live these envelopes: their bytes, their CRCs, compression, and finding the sections of a file, also of one that
was cut short. What stands in a section is `blocks` and `capture`; `capture.md` is the grammar for readers.
"""

from __future__ import annotations

import os
import struct
from collections.abc import Callable, Iterator
from enum import IntEnum
from typing import NamedTuple

import zstandard

from strandline.core.effects import Buffer
from strandline.errors import CaptureError
from strandline.journal.frame import extend_crc

MAGIC = b"\xb5drift\r\n"
END_MAGIC = b"\xb5ashore\n"
FORMAT_VERSION = 1
SECTION_BYTES_AT_MOST = 1 << 30  # a section holds one request at least, and a request at most 128 MiB of lines
LEVEL = 1  # lines of river gauges, MB/s in and ratio: level 1 370 / 5.6, 3 233 / 5.2, 9 30 / 6.0

_HEADER = struct.Struct("<8sII48x")  # magic, version, crc of magic and version
_SECTION = struct.Struct("<IIIIQQQQQQQqq")
_TRAILER = struct.Struct("<8sIIQQ")  # magic, crc of what follows, 0, offset of the index, bytes before the trailer
_ENTRY = struct.Struct("<Q")
HEADER_BYTES, SECTION_HEADER_BYTES, TRAILER_BYTES = _HEADER.size, _SECTION.size, _TRAILER.size


class Holds(IntEnum):
    """What a section holds. Numbers are part of the format."""

    META = 1
    STATE = 2
    LINES = 3
    RECORDS = 4
    INDEX = 5


class Summary(NamedTuple):
    """What a section's header tells of it. Positions and bytes of lines count over the whole capture."""

    records: int = 0
    requests: int = 0
    events: int = 0
    first_line: int = 0
    line_bytes: int = 0
    first_ns: int = 0
    last_ns: int = 0


class Section(NamedTuple):
    """One section of a file: where its header stands, and what that says."""

    offset: int
    holds: int
    crc: int
    packed_bytes: int
    plain_bytes: int
    summary: Summary

    @property
    def end(self) -> int:
        """Offset just behind it."""
        return self.offset + SECTION_HEADER_BYTES + self.packed_bytes


class SectionWriter:
    """Writes a capture from front to end; `write` takes the bytes in order and needs no seeking."""

    def __init__(self, write: Callable[[bytes], object]) -> None:
        self._write = write
        self._sections: list[Section] = []
        self._pack = zstandard.ZstdCompressor(level=LEVEL).compress
        head = MAGIC + FORMAT_VERSION.to_bytes(4, "little")
        self.bytes_written = 0
        self._put(_HEADER.pack(MAGIC, FORMAT_VERSION, extend_crc(0, head)))

    def _put(self, content: bytes) -> None:
        self._write(content)
        self.bytes_written += len(content)

    def add(self, holds: Holds, content: Buffer, summary: Summary | None = None) -> None:
        """One section more. Raises CaptureError where it is too large to be read back."""
        plain_bytes = memoryview(content).nbytes
        if plain_bytes > SECTION_BYTES_AT_MOST:
            raise CaptureError(f"a section of {plain_bytes:,} bytes is larger than {SECTION_BYTES_AT_MOST:,}")
        packed = self._pack(content)
        crc = extend_crc(0, packed)
        section = Section(self.bytes_written, holds, crc, len(packed), plain_bytes, summary or Summary())
        self._put(encode_section(section))
        self._put(packed)
        self._sections.append(section)

    def close(self) -> None:
        """Index and trailer: with them a reader knows that the capture is whole."""
        offset = self.bytes_written
        rows = [_ENTRY.pack(section.offset) + encode_section(section) for section in self._sections]
        self.add(Holds.INDEX, b"".join(rows))
        rest = struct.pack("<IQQ", 0, offset, self.bytes_written)
        self._put(_TRAILER.pack(END_MAGIC, extend_crc(0, rest), 0, offset, self.bytes_written))


def encode_section(section: Section) -> bytes:
    """A section's header."""
    values = (section.holds, section.crc, 0, section.packed_bytes, section.plain_bytes, *section.summary)
    rest = _SECTION.pack(0, *values)[4:]
    return extend_crc(0, rest).to_bytes(4, "little") + rest


def decode_section(header: bytes, offset: int) -> Section | None:
    """The section whose header this is; None where it is none."""
    if len(header) < SECTION_HEADER_BYTES:
        return None
    crc, holds, content_crc, zero, packed_bytes, plain_bytes, *rest = _SECTION.unpack(header)
    if zero or crc != extend_crc(0, header[4:]):
        return None
    return Section(offset, holds, content_crc, packed_bytes, plain_bytes, Summary(*rest))


class SectionReader:
    """The sections of a capture file. Any thread may read; at most one section is in memory for each that does."""

    def __init__(self, path: str | os.PathLike[str]) -> None:
        """Raises OSError; CaptureError where this is no capture, or one of a newer format."""
        self.path = os.fspath(path)
        self._descriptor = os.open(path, os.O_RDONLY | os.O_CLOEXEC)
        try:
            self.size = os.fstat(self._descriptor).st_size
            self._require_capture()
            self.cut_at: int | None = None  # the capture was cut short: what counts ends here
            self.sections = self._indexed() or list(self._scanned())
        except BaseException:
            self.close()
            raise

    def close(self) -> None:
        """Give the handle back. A second call does nothing."""
        descriptor, self._descriptor = self._descriptor, -1
        if descriptor >= 0:
            os.close(descriptor)

    def _require_capture(self) -> None:
        head = self._read(0, HEADER_BYTES)
        if len(head) < HEADER_BYTES or head[:8] != MAGIC:
            raise CaptureError(f"{self.path}: this is no capture (`strandline capture` makes one)")
        _, version, crc = _HEADER.unpack(head)
        if crc != extend_crc(0, head[:12]):
            raise CaptureError(f"{self.path}: the header at byte 0 is damaged; take the file from a copy")
        if version > FORMAT_VERSION:
            raise CaptureError(f"{self.path}: written in format {version}, this program reads up to {FORMAT_VERSION}")

    def _read(self, offset: int, size: int) -> bytes:
        found = os.pread(self._descriptor, size, offset)
        while len(found) < size and (more := os.pread(self._descriptor, size - len(found), offset + len(found))):
            found += more
        return found

    def _indexed(self) -> list[Section] | None:
        """The sections that the index names; None where the file has no whole trailer."""
        trailer = self._read(max(0, self.size - TRAILER_BYTES), TRAILER_BYTES)
        if len(trailer) < TRAILER_BYTES:
            return None
        magic, crc, _, offset, before = _TRAILER.unpack(trailer)
        if magic != END_MAGIC or crc != extend_crc(0, trailer[12:]) or before != self.size - TRAILER_BYTES:
            return None
        index = decode_section(self._read(offset, SECTION_HEADER_BYTES), offset)
        if index is None or index.holds != Holds.INDEX or index.end != before:
            raise self.damaged(offset, "the index is not intact")
        rows, step = self.content(index), _ENTRY.size + SECTION_HEADER_BYTES
        found = []
        for at in range(0, len(rows), step):
            place = int.from_bytes(rows[at : at + _ENTRY.size], "little")
            section = decode_section(bytes(rows[at + _ENTRY.size : at + step]), place)
            if section is None:
                raise self.damaged(offset, "the index is not intact")
            found.append(section)
        return found

    def _scanned(self) -> Iterator[Section]:
        """The sections from the front, as far as they are whole; records count only with their lines."""
        offset, waiting = HEADER_BYTES, []
        self.cut_at = offset
        while True:
            section = decode_section(self._read(offset, SECTION_HEADER_BYTES), offset)
            if section is None or section.end > self.size:
                return
            offset = section.end
            waiting.append(section)
            if section.holds in (Holds.META, Holds.RECORDS):
                yield from waiting
                waiting.clear()
                self.cut_at = offset

    def content(self, section: Section) -> memoryview:
        """A section's content, checked. Raises CaptureError where it is damaged."""
        packed = self._read(section.offset + SECTION_HEADER_BYTES, section.packed_bytes)
        if len(packed) < section.packed_bytes or extend_crc(0, packed) != section.crc:
            raise self.damaged(section.offset, "the section is not intact")
        if section.plain_bytes > SECTION_BYTES_AT_MOST:
            raise self.damaged(section.offset, f"the section claims {section.plain_bytes:,} bytes")
        try:
            plain = zstandard.ZstdDecompressor().decompress(packed, max_output_size=section.plain_bytes)
        except zstandard.ZstdError as error:
            raise self.damaged(section.offset, f"the section cannot be decompressed: {error}") from error
        if len(plain) != section.plain_bytes:
            raise self.damaged(section.offset, "the section is not as long as it says")
        return memoryview(plain)

    def damaged(self, offset: int, what: str) -> CaptureError:
        """The error for a place in this file."""
        return CaptureError(f"{self.path}: {what} at byte {offset:,}; take the file from a copy, or capture again")
