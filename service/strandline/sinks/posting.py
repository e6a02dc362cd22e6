"""One POST to a store over HTTP and its answer, for every sink that speaks HTTP: connection, token, bounded reading.

What an answer means is the business of each sink. Connections are kept open between requests; redirects are not
followed; nothing is tried again here.
"""

from __future__ import annotations

import io
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import aiohttp
from yarl import URL

from ..errors import SinkRetry, StrandlineError
from .worker import OwnThread

ANSWER_BYTES_AT_MOST = 64 * 1024
SHOWN_CHARACTERS = 300  # of an answer, in an error
CONNECT_WITHIN_S = 10.0


@dataclass(frozen=True, slots=True)
class Answered:
    """What came back. `content` is the beginning of the body."""

    status: int
    reason: str
    headers: Mapping[str, str]
    content: bytes

    @property
    def told(self) -> str:
        """Status, reason and the start of the body as one harmless line."""
        text = " ".join(self.content[: 4 * SHOWN_CHARACTERS].decode(errors="replace").split())
        line = "".join(character if character.isprintable() else "?" for character in text)
        line = line if len(line) <= SHOWN_CHARACTERS else line[: SHOWN_CHARACTERS - 3] + "..."
        return f"{self.status} {self.reason}".rstrip() + (f": {line}" if line else "")


class Poster:
    """Sends requests of one sink. `token`, or the content of `token_file`, is sent as a bearer token."""

    def __init__(
        self,
        thread: OwnThread,
        *,
        timeout_s: float,
        token: str = "",
        token_file: Path | None = None,
        answer_bytes_at_most: int = ANSWER_BYTES_AT_MOST,
    ) -> None:
        """`thread` is the sink's own: the token's file is read there."""
        self._thread, self._token, self._token_file = thread, token, token_file
        self._answer_bytes_at_most = answer_bytes_at_most
        self._timeout = aiohttp.ClientTimeout(total=timeout_s, sock_connect=min(timeout_s, CONNECT_WITHIN_S))
        self._session: aiohttp.ClientSession | None = None

    async def post(self, url: str, body: bytes, headers: Mapping[str, str]) -> Answered:
        """One request. Raises SinkRetry where no answer came, and errors of `authorization`."""
        if self._session is None:
            self._session = aiohttp.ClientSession(
                connector=aiohttp.TCPConnector(limit=1),
                timeout=self._timeout,
                cookie_jar=aiohttp.DummyCookieJar(),
                auto_decompress=False,  # an answer's body is only shown to people, and only its beginning
            )
        sent = {**headers, **await self.authorization(), "Accept-Encoding": "identity"}
        try:
            # A stream, not the bytes: aiohttp would hand them to the system in one piece, however many they are.
            async with self._session.post(url, data=io.BytesIO(body), headers=sent, allow_redirects=False) as answer:
                content = await self._beginning(answer)
                return Answered(answer.status, answer.reason or "", answer.headers, content)
        except TimeoutError as error:
            raise SinkRetry(f"{shown_url(url)} did not answer in {self._timeout.total:g} s") from error
        except (aiohttp.ClientError, OSError) as error:
            # The text of a ClientResponseError holds the whole address, secrets too; its message does not.
            told = error.message if isinstance(error, aiohttp.ClientResponseError) else str(error)
            sentence = " ".join(told.split()) or type(error).__name__
            raise SinkRetry(f"{shown_url(url)} cannot be reached: {sentence}") from error

    async def authorization(self) -> dict[str, str]:
        """The token's header. Its file is read each time: whoever keeps it there may renew it.

        Raises SinkRetry where the file cannot be read, StrandlineError where it holds no token.
        """
        token = self._token
        if self._token_file is not None:
            file = self._token_file
            try:
                token = (await self._thread.run(file.read_text)).strip()
            except (OSError, UnicodeDecodeError) as error:
                told = getattr(error, "strerror", None) or error
                raise SinkRetry(f"the token in {file} cannot be read: {told}") from error
            if not (token.isascii() and token.isprintable()):
                raise StrandlineError(f"{file} holds no token: one line of ASCII is expected")
        return {"Authorization": f"Bearer {token}"} if token else {}

    async def close(self) -> None:
        """Close the connections; a later request opens new ones."""
        session, self._session = self._session, None
        if session is not None:
            await session.close()

    async def _beginning(self, answer: aiohttp.ClientResponse) -> bytes:
        """The beginning of the body; where it is longer, late or broken off, the connection is not used again.

        The status stands before the body, so nothing in the body can turn what was taken into what was not.
        """
        content = b""
        try:
            while len(content) < self._answer_bytes_at_most:
                piece = await answer.content.read(self._answer_bytes_at_most - len(content))
                if not piece:
                    return content
                content += piece
        except (aiohttp.ClientError, TimeoutError, OSError):
            pass
        answer.close()
        return content


def shown_url(url: str) -> str:
    """The address for a person: without what may be a secret in it."""
    return str(URL(url).with_user(None).with_query(None).with_fragment(None))
