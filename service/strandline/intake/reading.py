"""From a message to an arrival: media type, coding, source and key; and what becomes of a body that is no arrival.

No broker and no settling here. What is accepted, late or refused is decided by the core.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from typing import Protocol

import numpy as np

from ..config import Feed as FeedConfig
from ..config_intakes import IntakeConfig, JetstreamIntake, MqttIntake
from ..core.columns import Arrival, Fault, RequestKey, empty_times
from ..errors import BodyError
from ..ingest.decode import Decoder
from ..ingest.encodings import decompress, media_type_of
from ..ingest.offload import Aside, decoded, numbered
from ..ingest.values import SOURCE_BYTES_AT_MOST, is_source
from .broker import Message

KEY_CHARACTERS_AT_MOST = 1024
DETAIL_CHARACTERS_AT_MOST = 400


class Target(Protocol):
    """For whom messages are read: a feed at work, or one whose journal is made again."""

    config: FeedConfig
    decoder: Decoder

    @property
    def source_numbers(self) -> Mapping[str, int]:
        """The numbers of the sources that are known so far."""


class Reader:
    """Reads the messages of one intake."""

    def __init__(self, config: IntakeConfig, runtime: Target, aside: Aside) -> None:
        self._config, self._runtime, self._aside = config, runtime, aside
        source = config.source if isinstance(config, JetstreamIntake | MqttIntake) else None
        self._level: int | None = None if source is None else getattr(source, source.__struct_fields__[0])

    async def arrival(self, message: Message) -> tuple[Arrival, RequestKey | None]:
        """The message as an arrival, numbered for the feed's table as it is when this returns.

        Raises BodyError and TooManyFaults for what can never be taken.
        """
        limits, size = self._runtime.config, len(message.body)
        media_type = media_type_of(message.content_type or self._config.content_type)
        if size > limits.body_bytes_at_most:
            detail = f"the message has {size:,} bytes, body_bytes_at_most is {limits.body_bytes_at_most:,}"
            raise BodyError(413, "Content Too Large", detail)
        body = decompress(message.body, message.content_encoding, limits.decoded_bytes_at_most)
        source = self._source(message)
        decoder, table = self._runtime.decoder, self._runtime.source_numbers
        if source is None:
            arrival = await decoded(decoder, body, media_type, table, self._aside)
        else:
            # For a table of its own: a body that is decoded aside must not keep a number that the feed gives meanwhile.
            arrival = numbered(await decoded(decoder.of_source(source), body, media_type, {}, self._aside), table)
        return arrival, key_of(message, media_type)

    def _source(self, message: Message) -> str | None:
        if self._level is None:
            return None
        levels = message.address
        name = levels[self._level - 1] if self._level <= len(levels) else ""
        if not is_source(name):
            shown = ", ".join(repr(level[:40]) for level in levels[:8])
            detail = (
                f"level {self._level} of the address ({shown}) is no source: it has 1 to {SOURCE_BYTES_AT_MOST} bytes "
                "and no U+0000"
            )
            raise BodyError(422, "Unprocessable Content", detail)
        return name

    def refused(self, message: Message, detail: str) -> Arrival:
        """The whole message as one line for the quarantine, so that nothing of it is lost silently."""
        kept = message.body[: self._runtime.config.event_bytes_at_most]
        told = f"{message.place}: {detail}"[:DETAIL_CHARACTERS_AT_MOST]
        if len(kept) < len(message.body):
            told += f"; the first {len(kept):,} of its {len(message.body):,} bytes are kept here (event_bytes_at_most)"
        none = np.empty(0, dtype=np.uint32)
        fault = Fault(1, "body_refused", told, kept)
        identities = np.empty(0, dtype=np.uint64) if self._runtime.config.id is not None else None
        return Arrival(empty_times(), none, none, b"", faults=[fault], identities=identities)


def key_of(message: Message, media_type: str) -> RequestKey | None:
    """What tells a repeat of the message, with a fingerprint of what it brought; None where nothing does."""
    if message.key is None:
        return None
    digest = hashlib.sha256(media_type.encode() + b"\0")
    digest.update(message.body)
    return RequestKey(_text(message.key), digest.digest()[:16])


def key_in_quarantine(message: Message) -> RequestKey | None:
    """The same for what goes to quarantine as a whole: another key, since another message may have brought this one."""
    if message.key is None:
        return None
    return RequestKey(_text(f"{message.key}:{message.place}:refused"), hashlib.sha256(message.body).digest()[:16])


def _text(key: str) -> str:
    if len(key) <= KEY_CHARACTERS_AT_MOST and key.isprintable() and key.isascii():
        return key
    return f"sha256:{hashlib.sha256(key.encode(errors='replace')).hexdigest()}"
