"""The keys that say who to be at a broker and whom to trust there: one declaration each, for whatever has them.

As kinds of fields, not as a struct to inherit: a struct may have one base with fields, and an intake has its own. What
is read from a file, and when, is `broker_access`; which of the keys exclude each other is `config_intake_checks`.
"""

from __future__ import annotations

from typing import Annotated

from .config_broker_kinds import user
from .config_kinds import secret
from .config_read import Key

_FILE = secret("path", 4096, hidden=False)

User = Annotated[str | None, Key(user(), "who to be at the broker")]
Password = Annotated[str | None, Key(secret("password", 4096), "its password; better in its variable than in the file")]
PasswordFile = Annotated[str | None, Key(_FILE, "a file that holds the password, read at each connection; mode 600")]
Token = Annotated[str | None, Key(secret("token", 4096), "a token in the place of user and password")]
TokenFile = Annotated[str | None, Key(_FILE, "a file that holds the token, read at each connection; mode 600")]
CredsFile = Annotated[str | None, Key(_FILE, "a file with a user's JWT and seed, as the broker's own tools write it")]
CaFile = Annotated[str | None, Key(_FILE, "certificates (PEM) to trust instead of the system's, where TLS is spoken")]
