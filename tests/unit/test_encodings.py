"""Content codings and media types of bodies."""

from __future__ import annotations

import gzip
import random
import tracemalloc
import zlib

import pytest
import zstandard
from hypothesis import given
from hypothesis import strategies as st
from strandline.errors import BodyError
from strandline.ingest.encodings import STEP_BYTES, decompress, media_type_of

MEBIBYTE = 1024 * 1024
LIMIT = 8 * MEBIBYTE


def zstd(data, **options):
    return zstandard.ZstdCompressor(**options).compress(data)


def streamed(data):
    """A zstd frame whose header does not tell its size, with many blocks, as a streaming sender makes it."""
    compressor = zstandard.ZstdCompressor(write_checksum=True).compressobj()
    parts = [
        compressor.compress(data[at : at + 1000]) + compressor.flush(zstandard.COMPRESSOBJ_FLUSH_BLOCK)
        for at in range(0, len(data), 1000)
    ]
    return b"".join(parts) + compressor.flush()


def skippable(data=b"abcd"):
    return b"\x5a\x2a\x4d\x18" + len(data).to_bytes(4, "little") + data  # RFC 8878 section 3.1.2


WAYS = {"gzip": gzip.compress, "x-gzip": gzip.compress, "zstd": zstd}
MAKERS = [("gzip", gzip.compress), ("zstd", zstd), ("zstd", streamed)]


def refused(body, coding, limit=LIMIT):
    with pytest.raises(BodyError) as caught:
        decompress(body, coding, limit)
    return caught.value


contents = st.binary(max_size=3000) | st.builds(
    lambda piece, n: piece * n, st.binary(max_size=20), st.integers(0, 2000)
)


@given(
    st.lists(st.tuples(contents, st.integers(0, 1)), min_size=1, max_size=5),
    st.sampled_from(["gzip", "X-GZip", "zstd"]),
)
def test_members_and_frames_one_after_the_other(parts, coding):
    makers = [zstd, streamed] if coding == "zstd" else [gzip.compress, lambda data: gzip.compress(data, 1)]
    body = b"".join(makers[way](data) for data, way in parts)
    assert decompress(body, coding, LIMIT) == b"".join(data for data, _ in parts)


@given(contents, st.lists(st.sampled_from(list(WAYS)), max_size=2), st.data())
def test_lists_are_undone_from_the_right(data, codings, draws):
    body = data
    for coding in codings:
        body = WAYS[coding](body)
    written = [draws.draw(st.sampled_from([coding, coding.upper(), f" {coding}\t"])) for coding in codings]
    for _ in range(draws.draw(st.integers(0, 2))):
        written.insert(
            draws.draw(st.integers(0, len(written))), draws.draw(st.sampled_from(["identity", "Identity", "", " "]))
        )
    assert decompress(body, ",".join(written), LIMIT) == data


def test_no_coding():
    assert decompress(b"abc", None, LIMIT) == b"abc"
    assert decompress(b"abc", "", LIMIT) == b"abc"
    assert decompress(b"abc", "identity", LIMIT) == b"abc"
    assert refused(b"abc", None, 2).status == 413


@pytest.mark.parametrize("coding", ["br", "deflate", "compress", "gzip;q=1", "gzip zstd", "*", "gzi\u0440"])
def test_unknown_codings_name_the_known_ones(coding):
    error = refused(gzip.compress(b"abc"), f"gzip, {coding}")
    assert (error.status, error.accept_encoding) == (415, "gzip, zstd")
    assert error.detail.isascii()


def test_at_most_two_codings():
    assert decompress(gzip.compress(zstd(b"abc")), "zstd, identity, gzip", LIMIT) == b"abc"
    error = refused(gzip.compress(gzip.compress(gzip.compress(b"abc"))), "gzip, gzip, gzip")
    assert (error.status, error.accept_encoding) == (415, "gzip, zstd")


@pytest.mark.parametrize(("coding", "make"), MAKERS)
def test_cut_anywhere(coding, make):
    body = make(random.Random(5).randbytes(2500) + b"abc" * 500)
    for end in range(len(body)):
        assert refused(body[:end], coding).status == 422, end
    whole = make(b"first")
    assert refused(whole + body[:-1], coding).status == 422
    assert refused(body + b"\0", coding).status == 422
    assert refused(body + b"rubbish and more rubbish", coding).status == 422


@pytest.mark.parametrize(("coding", "make"), [("gzip", gzip.compress), ("zstd", streamed)])
def test_damage_under_a_checksum_never_passes(coding, make):
    data = b"".join(b'{"ts":%d}\n' % n for n in range(800))
    body = make(data)
    for at in range(0, len(body), 7):
        flipped = body[:at] + bytes([body[at] ^ 0x10]) + body[at + 1 :]
        try:
            assert decompress(flipped, coding, LIMIT) == data  # a bit that means nothing, such as gzip's time
        except BodyError as error:
            assert error.status in (413, 422)


@pytest.mark.parametrize("extra", [skippable(), skippable(b""), zstd(b"")])
def test_frames_without_content(extra):
    assert decompress(extra + zstd(b"abc") + extra + extra + streamed(b"def") + extra, "zstd", LIMIT) == b"abcdef"
    assert decompress(extra, "zstd", LIMIT) == b""
    assert refused(extra[:-1], "zstd").status == 422


def test_a_frame_that_wants_a_larger_window_than_rfc_9659_allows():
    parameters = zstandard.ZstdCompressionParameters(window_log=24)
    body = zstd(random.Random(1).randbytes(20 * MEBIBYTE), compression_params=parameters)
    assert refused(body, "zstd", 64 * MEBIBYTE).status == 422


def bomb(coding, mebibytes=256):
    if coding == "zstd":
        return zstd(bytes(mebibytes * MEBIBYTE))
    compressor = zlib.compressobj(9, wbits=31)
    return b"".join([compressor.compress(bytes(MEBIBYTE)) for _ in range(mebibytes)]) + compressor.flush()


@pytest.mark.parametrize("coding", ["gzip", "zstd", "gzip of gzip", "zstd of gzip", "many members"])
def test_a_bomb_takes_no_more_room_than_the_limit_and_a_step(coding):
    if coding == "many members":
        body, header = gzip.compress(bytes(MEBIBYTE)) * 256, "gzip"
    elif coding == "gzip of gzip":
        body, header = gzip.compress(bomb("gzip")), "gzip,gzip"
    elif coding == "zstd of gzip":
        body, header = zstd(bomb("gzip")), "gzip,zstd"
    else:
        body, header = bomb(coding), coding
    tracemalloc.start()
    try:
        assert refused(body, header).status == 413
        _, peak = tracemalloc.get_traced_memory()
    finally:
        tracemalloc.stop()
    # An eighth more for the buffer that grows; up to three steps: the last one, the next one, and zlib's parts of it.
    assert peak < LIMIT * 9 / 8 + 3 * STEP_BYTES + MEBIBYTE // 2


@pytest.mark.parametrize("coding", ["gzip", "zstd"])
def test_exactly_the_limit_fits(coding):
    data = bytes(100_000)
    assert decompress(WAYS[coding](data), coding, 100_000) == data
    assert refused(WAYS[coding](data), coding, 99_999).status == 413


@pytest.mark.parametrize("coding", ["gzip", "zstd"])
def test_very_many_empty_parts_are_refused(coding):
    assert decompress(WAYS[coding](b"") * 2000, coding, LIMIT) == b""
    error = refused(WAYS[coding](b"") * 200_001, coding)
    assert error.status == 422
    assert "200,000 parts" in error.detail


def test_very_many_blocks_are_refused():
    empty = zstd(b"", write_content_size=False)
    assert empty[-3:] == b"\1\0\0"  # RFC 8878 section 3.1.1.2: an empty raw block, the last one
    assert decompress(empty[:-3] + b"\0\0\0" * 100 + b"\1\0\0", "zstd", LIMIT) == b""
    assert refused(empty[:-3] + b"\0\0\0" * 200_001 + b"\1\0\0", "zstd").status == 422


@pytest.mark.parametrize(
    ("header", "expected"),
    [
        ("application/x-ndjson", "application/x-ndjson"),
        ("Application/X-NDJSON", "application/x-ndjson"),
        ("application/jsonl", "application/jsonl"),
        ("application/json", "application/json"),
        (" application/json ; charset=utf-8", "application/json"),
        ('application/json;charset="UTF-8"', "application/json"),
        ("application/json; charset=utf8", "application/json"),
        ('application/x-ndjson; profile="a;charset=latin1\\""; v=1', "application/x-ndjson"),
        ("application/json;", "application/json"),
        ("application/json; charset=utf-8;", "application/json"),
    ],
)
def test_media_types(header, expected):
    assert media_type_of(header) == expected


@pytest.mark.parametrize(
    "header",
    [None, "", "json", "text/plain", "application/xml", "application/json2", "application/json, application/json",
     "application/json; charset=latin1", "application/json; charset=utf-16", 'application/json; charset="us-ascii"',
     "application/json; charset=utf-8; charset=latin1", "application/json charset=utf-8", "application/json; charset=",
     'application/json; a="b', "/json", "application/", "application/x-jsonlines", "application/jsonи"],
)  # fmt: skip
def test_other_media_types_are_refused_without_accept_encoding(header):
    with pytest.raises(BodyError) as caught:
        media_type_of(header)
    assert (caught.value.status, caught.value.accept_encoding) == (415, None)
    assert "application/x-ndjson" in caught.value.detail
