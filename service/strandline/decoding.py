"""From a feed's configuration to the decoder of its bodies, whether they come by request, message or once more."""

from __future__ import annotations

import msgspec

from .config import Feed as FeedConfig
from .ingest.decode import Decoder


def decoder_of(config: FeedConfig, **changed: int) -> Decoder:
    """The decoder of a feed's bodies; `changed` are limits that hold instead of the configured ones.

    Raises StrandlineError where the feed wants compiled decoding and this machine has none.
    """
    limits = msgspec.structs.replace(config.body_limits(), **changed)
    is_compiled = config.decoding == "compiled"
    return Decoder(config.name, config.time.at, config.time.unit, config.source, config.id, limits, is_compiled)
