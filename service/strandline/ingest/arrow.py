"""Bodies of Arrow IPC streams: the door to the modules that need pyarrow, which is an extra of the installation.

Nothing is read here. The modules behind the door are imported with the first body of this format (some 0.2 s, in the
thread that such bodies are decoded in), and a service that never gets one does not hold pyarrow in memory.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, cast

from ..errors import BodyError

if TYPE_CHECKING:
    from types import ModuleType

ARROW = "application/vnd.apache.arrow.stream"


def arrow_rows() -> ModuleType:
    """The module `arrow_rows`. Raises BodyError 415 where pyarrow is not installed."""
    try:
        return importlib.import_module(".arrow_rows", __package__)
    except ModuleNotFoundError as error:
        detail = (
            f"{ARROW} needs the package {cast(str, error.name)} where this service runs: "
            "pip install 'strandline[arrow]'; or send application/x-ndjson"
        )
        raise BodyError(415, "Unsupported Media Type", detail) from error
