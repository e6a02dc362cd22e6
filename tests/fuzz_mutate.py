"""Damage for the fuzz lane: bytes changed in the ways that break readers. Seeded, pure, some 5 µs a change."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from random import Random

INPUT_BYTES_AT_MOST = 4096  # an input stays small, so that many fit into the budget
TOKENS = (
    b"\0", b"\n", b"\r\n", b"\x1e", b'"', b"\\", b"{", b"}", b"[", b"]", b",", b":", b"\xff", b"\xc0\x80", b"=", b";",
    b"\xed\xa0\x80", b"\xef\xbb\xbf", b"\\ud800", b"\\u0000", b"null", b"true", b"1e999", b"-0", b"NaN", b" ", b'""',
    b"9223372036854775808", b"[[[[[[[[", b'{"a":', b"\x81\xa1a", b"\xdd\xff\xff\xff\xff", b"\xc7\x01\x05a", b"\x7f",
    b"2026-02-30T00:00:00Z", b"1998-12-31T23:59:60Z", b"%", b"~", b"/", b"-1", b"'", b"#", b"\xe2\x80\xa8",
)  # fmt: skip


def mutated(draw: Random, seed: bytes, others: Sequence[bytes] = (), tokens: Sequence[bytes] = TOKENS) -> bytes:
    """`seed` after none to six changes; `others` are what pieces may be taken from."""
    data = bytearray(seed)
    for _ in range(draw.choice((0, 0, 1, 1, 1, 2, 3, 6))):
        draw.choice(_CHANGES)(draw, data, others or (seed,), tokens)
        del data[INPUT_BYTES_AT_MOST:]
    return bytes(data)


def _at(draw: Random, data: bytearray) -> int:
    return draw.randrange(len(data) + 1)


def _flip(draw: Random, data: bytearray, others: Sequence[bytes], tokens: Sequence[bytes]) -> None:
    if data:
        data[draw.randrange(len(data))] ^= 1 << draw.randrange(8)


def _set(draw: Random, data: bytearray, others: Sequence[bytes], tokens: Sequence[bytes]) -> None:
    if data:
        data[draw.randrange(len(data))] = draw.randrange(256)


def _put(draw: Random, data: bytearray, others: Sequence[bytes], tokens: Sequence[bytes]) -> None:
    at = _at(draw, data)
    data[at:at] = draw.choice(tokens)


def _over(draw: Random, data: bytearray, others: Sequence[bytes], tokens: Sequence[bytes]) -> None:
    at, token = _at(draw, data), draw.choice(tokens)
    data[at : at + len(token)] = token


def _take(draw: Random, data: bytearray, others: Sequence[bytes], tokens: Sequence[bytes]) -> None:
    at = _at(draw, data)
    del data[at : at + draw.choice((1, 1, 2, 4, 8, 64))]


def _cut(draw: Random, data: bytearray, others: Sequence[bytes], tokens: Sequence[bytes]) -> None:
    del data[_at(draw, data) :]


def _repeat(draw: Random, data: bytearray, others: Sequence[bytes], tokens: Sequence[bytes]) -> None:
    at = _at(draw, data)
    piece = data[at : at + draw.choice((1, 2, 8, 64))]
    data[at:at] = piece * draw.choice((1, 2, 10, 200))


def _splice(draw: Random, data: bytearray, others: Sequence[bytes], tokens: Sequence[bytes]) -> None:
    other = draw.choice(others)
    start = draw.randrange(len(other) + 1)
    at = _at(draw, data)
    data[at : at + draw.choice((0, 0, 8, 64))] = other[start : start + draw.choice((1, 4, 16, 64, 256))]


def _number(draw: Random, data: bytearray, others: Sequence[bytes], tokens: Sequence[bytes]) -> None:
    """A length or a count that is wrong, in either byte order."""
    width, order = draw.choice((1, 2, 4, 8)), draw.choice(("little", "big"))
    at = _at(draw, data)
    value = draw.choice((0, 1, 2**7, 2**15, 2**31, 2**63, 2**64 - 1, draw.getrandbits(64))) % 2 ** (8 * width)
    data[at : at + width] = value.to_bytes(width, order)


Change = Callable[[Random, bytearray, Sequence[bytes], Sequence[bytes]], None]
_CHANGES: tuple[Change, ...] = (_flip, _set, _put, _put, _over, _take, _take, _cut, _repeat, _splice, _splice, _number)
