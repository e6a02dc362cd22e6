"""TLS: reading a certificate and its key, taking connections in by them, and whom to trust when connecting elsewhere.

Which files is `config_access`; what is said over a connection is `connections` and aiohttp. Plain HTTP does not come
here. A handshake is unpaid work for a stranger, so those under way count among the connections, and have little time.
"""

from __future__ import annotations

import asyncio
import contextlib
import logging
import socket
import ssl
from collections.abc import Callable
from pathlib import Path

from .config_access import Tls
from .errors import ConfigError

log = logging.getLogger(__name__)
HANDSHAKE_WITHIN_S = 10.0
CLOSE_WITHIN_S = 2.0  # for the other side's last word, which some never say
ACCEPT_AGAIN_AFTER_S = 1.0  # when the process is out of files

ContextOf = Callable[[], ssl.SSLContext]


def read_context(tls: Tls) -> ssl.SSLContext | None:
    """A context with the certificate and the key; None where none are named. Raises ConfigError.

    TLS 1.2 at least (RFC 9325 forbids what is older), ciphers as OpenSSL's own defaults, HTTP/1.1 only.
    """
    if tls.certificate is None or tls.key is None:
        return None
    context = ssl.SSLContext(ssl.PROTOCOL_TLS_SERVER)
    context.minimum_version = ssl.TLSVersion.TLSv1_2
    context.options |= ssl.OP_NO_RENEGOTIATION | ssl.OP_NO_COMPRESSION | ssl.OP_CIPHER_SERVER_PREFERENCE
    context.set_alpn_protocols(["http/1.1"])
    faults = [fault for path in (tls.certificate, tls.key) if (fault := _unreadable(path))]
    if not faults:
        try:
            context.load_cert_chain(tls.certificate, tls.key, password=_no_password)
        except (OSError, ValueError) as error:  # ssl.SSLError is an OSError; ValueError: our refusal of a password
            faults = [f"tls: {tls.certificate} with key {tls.key}: {_why(error)}"]
    if faults:
        raise ConfigError(faults)
    return context


def trusting(ca_file: Path | None, key: str) -> ssl.SSLContext:
    """For whoever connects: the system's certificates, or those of a file (PEM), which `key` names; TLS 1.2 at least.

    Blocking. Raises ConfigError.
    """
    try:
        context = ssl.create_default_context(cafile=ca_file)
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise ConfigError([f"{key} {ca_file}: is no file of certificates (PEM): {reason}"]) from None
    context.minimum_version = ssl.TLSVersion.TLSv1_2
    return context


def _unreadable(path: Path) -> str:
    try:
        with path.open("rb"):
            return ""
    except (OSError, ValueError) as error:
        return f"tls: {path} cannot be read: {getattr(error, 'strerror', None) or error}"


def _no_password() -> str:
    """Instead of the question on the terminal that OpenSSL would ask, at which a service would wait for ever."""
    raise ValueError("the key is encrypted: name one that is not, readable by the service only")


def _why(error: Exception) -> str:
    reason = getattr(error, "reason", None) or ""
    advice = {
        "KEY_VALUES_MISMATCH": "the key belongs to another certificate",
        "NO_START_LINE": "one of them holds no PEM block of its kind",
        "PEM_LIB": "one of them holds no PEM block of its kind",
    }
    return advice.get(reason) or str(error)


def _listening(host: str, port: int, backlog: int) -> list[socket.socket]:
    """Sockets that listen on every address of the host. Raises OSError."""
    found: list[socket.socket] = []
    try:
        for family, kind, protocol, _, address in socket.getaddrinfo(
            host, port, type=socket.SOCK_STREAM, flags=socket.AI_PASSIVE
        ):
            taken = socket.socket(family, kind, protocol)
            found.append(taken)
            taken.setblocking(False)
            taken.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
            if family == socket.AF_INET6:
                taken.setsockopt(socket.IPPROTO_IPV6, socket.IPV6_V6ONLY, 1)
            # With port 0 the addresses after the first take the port that the first one got.
            same = int(found[0].getsockname()[1]) if len(found) > 1 else port
            taken.bind((address[0], same, *address[2:]))
            taken.listen(backlog)
    except BaseException:
        for each in found:
            each.close()
        raise
    return found


class TlsListener:
    """Takes connections in and hands each to `make` once it speaks TLS, by the context in force at that moment."""

    def __init__(
        self, make: Callable[[], asyncio.Protocol], context: ContextOf, established: Callable[[], int], at_most: int
    ) -> None:
        """`established` tells how many connections there are; with the handshakes they are at most `at_most`."""
        self._make, self._context, self._established, self._at_most = make, context, established, at_most
        self._sockets: list[socket.socket] = []
        self._accepting: list[asyncio.Task[None]] = []
        self._handshakes: set[asyncio.Task[None]] = set()

    async def start(self, host: str, port: int, backlog: int) -> int:
        """Listen; the port. Raises OSError."""
        self._sockets = await asyncio.to_thread(_listening, host, port, backlog)
        self._accepting = [asyncio.create_task(self._accept(each)) for each in self._sockets]
        return int(self._sockets[0].getsockname()[1])

    def close(self) -> None:
        """Take nobody in any more, and give up the handshakes under way. Connections that are made stay."""
        for task in (*self._accepting, *self._handshakes):
            task.cancel()

    async def wait_closed(self) -> None:
        """After `close`: until it listens no more."""
        await asyncio.gather(*self._accepting, *self._handshakes, return_exceptions=True)
        for each in self._sockets:
            each.close()

    async def _accept(self, listening: socket.socket) -> None:
        loop = asyncio.get_running_loop()
        while True:
            try:
                wire, _ = await loop.sock_accept(listening)
            except OSError as error:
                log.warning("no connection can be taken in for the moment: %s", error)
                await asyncio.sleep(ACCEPT_AGAIN_AFTER_S)
                continue
            # Full: closed without a word, for to be told anything it would first have to shake hands.
            if self._established() + len(self._handshakes) >= self._at_most:
                wire.close()
                continue
            task = asyncio.create_task(self._welcome(wire))
            self._handshakes.add(task)
            task.add_done_callback(self._handshakes.discard)

    async def _welcome(self, wire: socket.socket) -> None:
        loop = asyncio.get_running_loop()
        wire.setblocking(False)
        with contextlib.suppress(OSError):
            wire.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        try:
            await loop.connect_accepted_socket(
                self._make,
                wire,
                ssl=self._context(),
                ssl_handshake_timeout=HANDSHAKE_WITHIN_S,
                ssl_shutdown_timeout=CLOSE_WITHIN_S,
            )
        except (OSError, TimeoutError) as error:  # a stranger who speaks no TLS, or not ours
            log.debug("no TLS with a client: %s", error)
