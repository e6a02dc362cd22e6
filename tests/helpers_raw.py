"""HTTP by hand: bytes over a socket, in whatever pieces, and the answers that came back, without a client between."""

from __future__ import annotations

import asyncio
import re
from collections.abc import Iterable, Mapping, Sequence
from contextlib import suppress
from dataclasses import dataclass

from helpers_service import DEADLINE_S, FEED, NDJSON

_STATUS = re.compile(rb"HTTP/[0-9]\.[0-9] ([0-9]{3}) [^\r\n]*")


@dataclass(frozen=True, slots=True)
class Reply:
    """One answer, taken apart."""

    status: int
    headers: Mapping[str, str]
    content: bytes


def post(body: bytes, path: str = f"/v1/feeds/{FEED}/events", **headers: str) -> bytes:
    """A request with a body of stated length; `headers` with _ for -, an empty one left out."""
    fields = {"host": "localhost", "content-type": NDJSON, "content-length": str(len(body))}
    fields |= {name.replace("_", "-"): value for name, value in headers.items()}
    lines = [f"{name}: {value}\r\n" for name, value in fields.items() if value]
    return f"POST {path} HTTP/1.1\r\n{''.join(lines)}\r\n".encode("latin-1") + body


def chunked(pieces: Iterable[bytes]) -> bytes:
    """A body in chunks (RFC 9112 section 7.1)."""
    return b"".join(b"%x\r\n%b\r\n" % (len(piece), piece) for piece in pieces if piece) + b"0\r\n\r\n"


# Who answers this closes the connection.
LAST = b"GET /health/live HTTP/1.1\r\nhost: localhost\r\nconnection: close\r\n\r\n"


async def exchange(host: str, port: int, pieces: Sequence[bytes]) -> bytes:
    """Send the pieces, each as a segment of its own as far as the system allows, and read until the server closes."""
    reader, writer = await asyncio.open_connection(host, port)
    try:
        for piece in pieces:
            writer.write(piece)
            await writer.drain()
            for _ in range(3):  # a server on this loop reads it before the next one comes
                await asyncio.sleep(0)
        async with asyncio.timeout(DEADLINE_S):
            return await reader.read()
    except ConnectionError:
        return b""
    finally:
        writer.close()
        with suppress(ConnectionError):
            await writer.wait_closed()


def replies(data: bytes) -> list[Reply]:
    """The answers in what came back; each must be whole and well formed (RFC 9112), and say how long it is."""
    found = []
    while data:
        status = _STATUS.match(data)
        assert status, data[:200]
        head, _, data = data[status.end() :].partition(b"\r\n\r\n")
        fields = [line.split(": ", 1) for line in head.decode("latin-1").split("\r\n") if line]
        headers = {name.lower(): value for name, value in fields}
        if int(status[1]) in (204, 304) or 100 <= int(status[1]) < 200:
            found.append(Reply(int(status[1]), headers, b""))
            continue
        length = int(headers["content-length"])
        assert len(data) >= length
        found.append(Reply(int(status[1]), headers, data[:length]))
        data = data[length:]
    return found
