"""Connections to NATS servers, for the intake and the sink alike: made here, with secrets, and errors in plain words.

The client never reconnects by itself: whoever holds a connection makes a new one, with secrets read anew.
"""

from __future__ import annotations

import asyncio
import contextlib
import errno
import re
from collections.abc import Sequence

from nats.aio.client import Client
from nats.errors import Error
from nats.js.errors import APIError, ServerError, ServiceUnavailableError
from nats.js.errors import Error as JetStreamError

from .broker_access import BrokerAccess
from .errors import StrandlineError

CONNECT_WITHIN_S = 5
PING_EVERY_S = 10  # a peer that is gone without a word is noticed after two of these
_REFUSED = re.compile(rf"\[Errno {errno.ECONNREFUSED}\] Connect call failed \('([^']*)', (\d+)[^)]*\)")
_ERRNO = re.compile(r"\[Errno -?\d+\] ")
_PLAIN: dict[type[BaseException], str] = {
    TimeoutError: "no answer in time",
    APIError: "the server refuses it without a word",
    ServerError: "an error of the server, which it does not name",
    ServiceUnavailableError: "JetStream is not available there now",
}
NOT_THERE = (Error, OSError, TimeoutError, asyncio.TimeoutError)


async def connect(urls: Sequence[str], access: BrokerAccess, name: str) -> Client:
    """A connection to one of the servers. Raises StrandlineError with what a person can do."""
    secrets = await asyncio.to_thread(access.secrets)
    with_tls = access.ca_file is not None or any(url.startswith("tls://") for url in urls)
    context = await asyncio.to_thread(access.context) if with_tls else None
    where = ", ".join(urls)
    told: list[str] = []

    async def on_error(error: Exception) -> None:
        told.append(words_of(error))

    client = Client()
    try:
        async with asyncio.timeout(2 * CONNECT_WITHIN_S):
            await client.connect(
                servers=list(urls),
                name=name,
                error_cb=on_error,
                allow_reconnect=False,
                max_reconnect_attempts=1,
                reconnect_time_wait=0,
                connect_timeout=CONNECT_WITHIN_S,
                ping_interval=PING_EVERY_S,
                user=secrets.user,
                password=secrets.password,
                token=secrets.token,
                user_credentials=access.creds_file,
                tls=context,
            )
    except asyncio.CancelledError:
        await disconnect(client)
        raise
    except (*NOT_THERE, ValueError, ModuleNotFoundError) as error:
        await disconnect(client)
        why = told[-1] if told else words_of(error)
        raise StrandlineError(f"no server answers as it should at {where}: {why}") from error
    return client


async def disconnect(client: Client) -> None:
    """Let a connection go. The transport is gone with the loop's next turn; until then it would count as open."""
    with contextlib.suppress(*NOT_THERE):
        await client.close()
    await asyncio.sleep(0)


def words_of(error: BaseException) -> str:
    """An error of the client as part of a sentence: what the server says of it, else what the client does."""
    kind = type(error)
    if isinstance(error, JetStreamError):
        said = " ".join((getattr(error, "description", None) or "").split())
        if said or isinstance(error, APIError):
            return said or _PLAIN.get(kind) or _plain(kind.__name__)
    text = " ".join(str(error).split()).removeprefix("nats: ").removeprefix("Multiple exceptions: ")
    text = _ERRNO.sub("", _REFUSED.sub(r"nobody listens at \1, port \2", text))
    if "authorization violation" in text.lower():
        return "it refuses this user, password or token (Authorization Violation)"
    return text or _PLAIN.get(kind) or _plain(kind.__name__)


def _plain(name: str) -> str:
    """A class's name as words: `SlowConsumerError` is a slow consumer."""
    words = re.sub(r"(?<=[a-z])(?=[A-Z])", " ", name.removesuffix("Error")).lower()
    return words or name


__all__ = ["NOT_THERE", "Client", "connect", "disconnect", "words_of"]
