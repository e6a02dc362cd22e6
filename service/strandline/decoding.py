"""From a feed's configuration to the decoder of its bodies, whether they come by request, message or once more.

Also to what copies its lines out again: who has compiled code for the one has it for the other.
"""

from __future__ import annotations

import msgspec
import numpy as np

from .config import Feed as FeedConfig
from .ingest.compiled import compiling
from .ingest.decode import Decoder
from .journal.gather import Copier, Source


def decoder_of(config: FeedConfig, **changed: int) -> Decoder:
    """The decoder of a feed's bodies; `changed` are limits that hold instead of the configured ones.

    Raises StrandlineError where the feed wants compiled decoding and this machine has none.
    """
    limits = msgspec.structs.replace(config.body_limits(), **changed)
    is_compiled = config.decoding == "compiled"
    return Decoder(config.name, config.time.at, config.time.unit, config.source, config.id, limits, is_compiled)


def copier_of(config: FeedConfig) -> Copier | None:
    """What copies a feed's lines out of its journal where compiled code does so. Raises StrandlineError as above."""
    if config.decoding != "compiled":
        return None
    with compiling():
        from .journal.compiled_copies import copied  # noqa: PLC0415 - only where numba is asked for

        # Compiled now: the first batch would wait for it, and its sink learn what is missing.
        copied([Source(memoryview(b"x\n"), 0, 2)], None, np.zeros(1, np.int64), np.ones(1, np.int64))
    return copied
