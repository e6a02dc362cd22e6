"""The capture file as capture.md describes it, and what a reader says of files that are none, newer or damaged."""

from __future__ import annotations

import struct
from pathlib import Path

import google_crc32c
import msgspec
import numpy as np
import pytest
import zstandard
from helpers_captures import captured, folded, kept, told, written
from helpers_feed import Shell, patient
from strandline.core.columns import Fault
from strandline.errors import CaptureError
from strandline.replay import capture as capture_module
from strandline.replay import sections
from strandline.replay.capture import Capture, Meta
from strandline.replay.sections import Holds, SectionWriter, decode_section, encode_section

SECTION = struct.Struct("<IIIIQQQQQQQqq")
BAD = [Fault(2, "malformed", "no object", b"x"), Fault(3, "malformed", "no object", b"")]


def lively(requests: int = 30) -> Shell:
    """A feed that took in some requests of two sources."""
    shell = Shell(patient(slack_ns=3))
    for number in range(requests):
        shell.events([number, number - 2], number, ["gw-0", "gw-1"], BAD if number == 4 else ())
    return shell


def test_a_capture_is_read_with_nothing_but_the_documents_words() -> None:
    """Straight from capture.md, without the package's own reader."""
    shell = lively()
    content = captured(shell)
    magic, version, crc = struct.unpack_from("<8sII", content)
    assert magic == bytes.fromhex("b564726966740d0a") and version == 1 and crc == google_crc32c.value(content[:12])
    end_magic, end_crc, zero, index_at, before = struct.unpack("<8sIIQQ", content[-32:])
    assert end_magic == bytes.fromhex("b56173686f72650a") and zero == 0
    assert end_crc == google_crc32c.value(content[-20:]) and before == len(content) - 32
    found, offset = {}, 64
    while offset < index_at:
        crc, holds, content_crc, zero, packed, plain, *summary = SECTION.unpack_from(content, offset)
        assert crc == google_crc32c.value(content[offset + 4 : offset + 88]) and zero == 0
        body = content[offset + 88 : offset + 88 + packed]
        assert content_crc == google_crc32c.value(body)
        found[holds] = (zstandard.ZstdDecompressor().decompress(body), summary)
        assert len(found[holds][0]) == plain
        offset += 88 + packed
    assert offset == index_at and sorted(found) == [1, 3, 4]
    meta = msgspec.msgpack.decode(found[1][0])
    assert (meta["feed"], meta["origin"], meta["lines"], meta["decided"]) == ("river-gauges", "journal", True, True)
    block, (records, requests, events, first_line, line_bytes, first_ns, last_ns) = found[4]
    assert (records, requests, events) == (len(shell.records), 30, 60)
    assert (first_line, line_bytes, first_ns, last_ns) == (0, len(found[3][0]), 0, 29)
    assert struct.unpack_from("<III", block) == (records, requests, events)
    kinds = np.frombuffer(block, "<u1", records, 32)
    assert kinds.tolist() == [record.kind for record in shell.records]
    turned = np.frombuffer(block, np.uint8, 8 * records, 32 + records).reshape(8, records)
    positions = np.cumsum(np.ascontiguousarray(turned.T).view("<i8").ravel())
    assert positions.tolist() == [record.lsn for record in shell.records]
    assert found[3][0].startswith(b"1.0\n1.1\n2.0\n2.1\n") and b"\nx" in found[3][0]


def test_blocks_end_where_they_should_and_hold_whole_requests(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(capture_module, "BLOCK_EVENTS", 7)
    shell = lively()
    path = kept(tmp_path / "a.capture", captured(shell))
    with Capture(path) as capture:
        blocks = list(capture.blocks())
        assert [len(block.times) for block in blocks] == [8] * 7 + [4]
        assert (capture.events, capture.requests, capture.records) == (60, 30, len(shell.records))
        assert [block.first_line[0] for block in blocks] == [first for first, _ in capture.line_sections()]
        assert np.array_equal(np.concatenate([block.event_arrivals() for block in blocks]), np.repeat(np.arange(30), 2))
    assert [lines for _, lines in folded(path)] == [lines for _, lines in told(shell)]


def test_without_lines_they_are_told_to_be_absent(tmp_path: Path) -> None:
    shell = lively()
    path = kept(tmp_path / "a.capture", captured(shell, lines=False))
    with Capture(path) as capture:
        assert not capture.meta.lines and capture.line_sections() == []
    with pytest.raises(CaptureError, match="--without-events"):
        folded(path)


@pytest.mark.parametrize(
    ("damage", "sentence"),
    [
        (lambda content: b"", "this is no capture"),
        (lambda content: b"{}\n" * 100, "this is no capture"),
        (lambda content: content[:64], "nothing in it is whole"),
        (lambda content: content[:12] + b"\0" + content[13:], "the header at byte 0 is damaged"),
        (
            lambda content: content[:8] + b"\2\0\0\0"
            + google_crc32c.value(content[:8] + b"\2\0\0\0").to_bytes(4, "little") + content[16:],
            "written in format 2, this program reads up to 1",
        ),
    ],
    ids=["empty", "other", "header", "damaged", "newer"],
)  # fmt: skip
def test_a_file_that_cannot_be_read_is_named_with_the_reason(tmp_path: Path, damage, sentence: str) -> None:
    path = kept(tmp_path / "a.capture", damage(captured(lively())))
    with pytest.raises(CaptureError, match=rf"{path}: .*{sentence}"):
        Capture(path)


def sectioned(tmp_path: Path, *sections: tuple[Holds, bytes]) -> Path:
    """A file with sound envelopes around any content."""
    out: list[bytes] = []
    writer = SectionWriter(out.append)
    for holds, content in sections:
        writer.add(holds, content)
    writer.close()
    return kept(tmp_path / "a.capture", b"".join(out))


def test_content_that_is_not_what_it_should_be_is_told(tmp_path: Path) -> None:
    meta = msgspec.msgpack.encode(Meta("river-gauges", "journal", 7))
    with pytest.raises(CaptureError, match="what it says of itself cannot be read"):
        Capture(sectioned(tmp_path, (Holds.META, b"\xc1")))
    with pytest.raises(CaptureError, match="records are of version 9"):
        Capture(sectioned(tmp_path, (Holds.META, meta[:-1] + b"\x09")))
    with (
        pytest.raises(CaptureError, match="shorter than it says"),
        Capture(sectioned(tmp_path, (Holds.META, meta), (Holds.RECORDS, b"\xff" * 40))) as capture,
    ):
        list(capture.blocks())
    with (
        pytest.raises(CaptureError, match=r"state .* cannot be used .* another version"),
        Capture(sectioned(tmp_path, (Holds.META, meta), (Holds.STATE, bytes(100)))) as capture,
    ):
        capture.state()


def test_a_section_that_claims_too_much_is_not_decompressed(tmp_path: Path) -> None:
    """A decompression bomb ends at the size that its header states, and that is bounded."""
    content = captured(lively())
    section = decode_section(content[64:152], 64)
    assert section is not None and section.holds == Holds.META
    for plain_bytes, sentence in ((2 << 30, "claims 2,147,483,648 bytes"), (3, "cannot be decompressed|as long as")):
        changed = encode_section(section._replace(plain_bytes=plain_bytes))
        path = kept(tmp_path / "a.capture", content[:64] + changed + content[152:-32])
        with pytest.raises(CaptureError, match=sentence):
            Capture(path)


def test_a_writer_refuses_what_it_cannot_write(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sections, "SECTION_BYTES_AT_MOST", 100)
    with pytest.raises(CaptureError, match="larger than 100"):
        SectionWriter(lambda piece: None).add(Holds.LINES, bytes(101))
    with pytest.raises(CaptureError, match="version 9"):
        written([], Meta("river-gauges", "journal", 7, record_version=9))
