"""What the service tells its supervisor (systemd's sd_notify protocol): ready, reloading, stopping, and still alive.

One datagram of `NAME=value` lines on the socket that $NOTIFY_SOCKET names; nothing at all without that variable.
Sources: the manual pages sd_notify(3) and systemd.service(5), `Type=notify` and `WatchdogSec=`. Only telling lives
here: what is told, and when, is the application's business.
"""

from __future__ import annotations

import logging
import os
import socket
import time
from collections.abc import Callable, Mapping

log = logging.getLogger("strandline")
BEATS_A_LIMIT = 4  # sd_watchdog_enabled(3) recommends every half of the limit; twice as often forgives one that is slow


def tell(*lines: str, environ: Mapping[str, str] = os.environ) -> bool:
    """Send these lines; whether they were sent. A supervisor that cannot be reached is logged and hinders nothing."""
    path = environ.get("NOTIFY_SOCKET", "")
    if not path:
        return False
    address = "\0" + path[1:] if path.startswith("@") else path  # "@" stands for Linux's abstract sockets
    try:
        with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM | socket.SOCK_CLOEXEC) as out:
            out.setblocking(False)  # a supervisor that does not read must not hold up the loop
            out.sendto("\n".join(lines).encode(), address)
    except OSError as error:
        log.warning("the supervisor cannot be told %s: %s", lines[0], error)
        return False
    return True


def reloading(reload: Callable[[], object]) -> None:
    """Reload between the two messages that say so; the time tells this reload from an earlier one."""
    tell("RELOADING=1", f"MONOTONIC_USEC={time.monotonic_ns() // 1_000}")
    try:
        reload()
    finally:
        tell("READY=1")


class Watchdog:
    """Tells the supervisor that all goes on, some times within its limit; nothing where it has set no limit."""

    def __init__(self, environ: Mapping[str, str] = os.environ, clock: Callable[[], float] = time.monotonic) -> None:
        """$WATCHDOG_USEC is the limit in microseconds; $WATCHDOG_PID, where it is set, the process that is meant."""
        self._environ, self._clock = environ, clock
        meant = environ.get("WATCHDOG_PID", str(os.getpid())) == str(os.getpid())
        text = environ.get("WATCHDOG_USEC", "") if meant else ""
        self.every_s = int(text) / 1e6 / BEATS_A_LIMIT if text.isascii() and text.isdigit() else 0.0
        self._due_s = 0.0

    def beat(self) -> None:
        """Say so if it is time to. To be called each time that every feed's tick has come back, and else never."""
        now_s = self._clock()
        if self.every_s and now_s >= self._due_s:
            self._due_s = now_s + self.every_s
            tell("WATCHDOG=1", environ=self._environ)
