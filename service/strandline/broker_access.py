"""Who to be at a broker and whom to trust there: passwords, tokens and certificates, for intakes and sinks alike.

Files are read anew for each connection, so that whoever keeps a secret there may renew it. Nothing is connected here.
"""

from __future__ import annotations

import ssl
from dataclasses import dataclass, field, fields
from pathlib import Path
from typing import Self

from .errors import ConfigError, StrandlineError
from .private_files import read_private
from .tls import trusting


@dataclass(frozen=True, slots=True)
class Secrets:
    """What is shown to a broker; None where nothing is."""

    user: str | None = None
    password: str | None = field(default=None, repr=False)
    token: str | None = field(default=None, repr=False)


@dataclass(frozen=True, slots=True)
class BrokerAccess:
    """What a configuration says about it. Secrets are never shown."""

    user: str | None = None
    password: str | None = field(default=None, repr=False)
    password_file: str | None = None
    token: str | None = field(default=None, repr=False)
    token_file: str | None = None
    creds_file: str | None = None
    ca_file: str | None = None

    @classmethod
    def of(cls, table: object) -> Self:
        """Of a table of the configuration: what it has of these keys."""
        return cls(**{each.name: getattr(table, each.name, None) for each in fields(cls)})

    def secrets(self) -> Secrets:
        """Read what lies in files. Blocking. Raises StrandlineError, which names the file and never its content."""
        password = self.password if self.password_file is None else _one_line(self.password_file)
        token = self.token if self.token_file is None else _one_line(self.token_file)
        if self.creds_file is not None:
            _private(self.creds_file)  # the client reads it by itself, whoever else may
        return Secrets(self.user, password, token)

    def context(self) -> ssl.SSLContext:
        """For TLS: the system's certificates, or those of `ca_file`; 1.2 at least. Blocking. Raises StrandlineError."""
        return trusting(None if self.ca_file is None else Path(self.ca_file), "ca_file")


def _private(file: str) -> str:
    try:
        return read_private(Path(file), by_group=True)
    except ConfigError as error:
        raise StrandlineError(str(error)) from None


def _one_line(file: str) -> str:
    text = _private(file).strip("\r\n")
    if not text or not text.isprintable():
        raise StrandlineError(f"{file}: holds no secret: one line is expected")
    return text
