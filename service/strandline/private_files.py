"""Reads small files that hold secrets or decide who is let in: only such as nobody else can read or change.

Nothing is known here of what stands in them.
"""

from __future__ import annotations

import os
import stat
from pathlib import Path

from .errors import ConfigError

FILE_BYTES_AT_MOST = 2**20


def read_private(path: Path, *, by_group: bool) -> str:
    """The file's text. `by_group`: its group may read it too. Raises ConfigError with every fault of the file itself.

    Looked at and read through one descriptor: between the two nobody can put another file in its place.
    """
    try:
        with open(path, "rb", opener=_open_at_once) as file:
            status = os.fstat(file.fileno())
            if not stat.S_ISREG(status.st_mode):
                raise ConfigError([f"{path}: is no file"])
            if faults := _faults(status, by_group):
                raise ConfigError([f"{path}: {fault}" for fault in faults])
            data = file.read(FILE_BYTES_AT_MOST + 1)
    except (OSError, ValueError) as error:  # ValueError: a NUL in the path
        reason = getattr(error, "strerror", None) or str(error)
        raise ConfigError([f"{path}: cannot be read: {reason}"]) from None
    if len(data) > FILE_BYTES_AT_MOST:
        raise ConfigError([f"{path}: is larger than {FILE_BYTES_AT_MOST:,} bytes"])
    try:
        return data.decode()
    except UnicodeDecodeError as error:
        raise ConfigError([f"{path}: is not UTF-8 at byte {error.start}"]) from None


def _open_at_once(path: str, flags: int) -> int:
    """Without waiting: a named pipe would hold up the start for ever."""
    return os.open(path, flags | os.O_NONBLOCK)


def _faults(status: os.stat_result, by_group: bool) -> list[str]:
    faults = []
    too_open = stat.S_IRWXO | (stat.S_IWGRP if by_group else stat.S_IRWXG)
    if status.st_mode & too_open:
        wanted = "640" if by_group else "600"
        mode = stat.S_IMODE(status.st_mode)
        faults.append(f"has mode {mode:o}, so others can read or change it: chmod {wanted} it (never more)")
    if status.st_uid not in (0, os.geteuid()):
        faults.append(f"belongs to user {status.st_uid}, who could change it: it must be your own or root's")
    return faults
