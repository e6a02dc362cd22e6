"""Whether the address in `listen` can be had, and what to do where it cannot. Looked at before anything is made.

Only a look: the port may be taken between this and the listening itself, which then says the same.
"""

from __future__ import annotations

import errno
import socket

from .config import Address
from .errors import StrandlineError

ADVICE = {
    errno.EADDRINUSE: "another program listens there, or this service runs already: stop it, or name another port",
    errno.EACCES: "ports below 1024 need a right of their own: name one from 1024 up",
    errno.EADDRNOTAVAIL: "this machine has no such address: name one of its own, or 127.0.0.1",
}


def check_free(listen: Address) -> None:
    """Raises StrandlineError where another program has the port, or it may not be had. Blocking, for a moment."""
    try:
        found = socket.getaddrinfo(listen.host, listen.port, type=socket.SOCK_STREAM, flags=socket.AI_PASSIVE)
    except OSError as error:
        raise not_free(listen, error) from error
    for family, kind, protocol, _, address in found if listen.port else ():
        try:
            with socket.socket(family, kind, protocol) as probe:
                probe.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)  # as the listener: a closed one is no fault
                if family == socket.AF_INET6:
                    probe.setsockopt(socket.IPPROTO_IPV6, socket.IPV6_V6ONLY, 1)
                probe.bind(address)
        except OSError as error:
            if error.errno in (errno.EADDRINUSE, errno.EACCES):  # one of several addresses may be absent
                raise not_free(listen, error) from error


def not_free(listen: Address, error: OSError) -> StrandlineError:
    """The same as a sentence that names the key and says what to do."""
    advice = ADVICE.get(error.errno or 0, "name another address")
    reason = error.strerror or str(error)
    reason = reason[:1].lower() + reason[1:]
    return StrandlineError(f'listen = "{listen}" cannot be had ({reason}): {advice} in `listen` (or STRANDLINE_LISTEN)')
