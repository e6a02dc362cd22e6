"""From a message to an arrival: media type, coding, source and key; and what becomes of a body that is no arrival.

No broker and no settling here. What is accepted, late or refused is decided by the core.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from typing import Protocol

import google_crc32c
import numpy as np

from ..config import Feed as FeedConfig
from ..config_intakes import IntakeConfig, JetstreamIntake, MqttIntake
from ..core.columns import Arrival, Fault, RequestKey, empty_times
from ..errors import BodyError
from ..ingest.decode import Decoder
from ..ingest.encodings import decompress, media_type_of
from ..ingest.offload import Aside, decoded, numbered
from ..ingest.together import decoded_together
from ..ingest.values import SOURCE_BYTES_AT_MOST, is_source
from .broker import Message

KEY_CHARACTERS_AT_MOST = 1024
DETAIL_CHARACTERS_AT_MOST = 400
ALONE_AT_MOST = 63
Read = tuple[Arrival, RequestKey | None]


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
        self._alone = self._waits = 0  # portions that are read one by one, after some that could not be in one go
        self._level: int | None = None if source is None else getattr(source, source.__struct_fields__[0])

    async def arrival(self, message: Message) -> Read:
        """The message as an arrival, numbered for the feed's table as it is when this returns.

        Raises BodyError and TooManyFaults for what can never be taken.
        """
        media_type, body = self._body(message)
        source = self._source(message)
        decoder, table = self._runtime.decoder, self._runtime.source_numbers
        if source is None:
            arrival = await decoded(decoder, body, media_type, table, self._aside)
        else:
            # For a table of its own: a body that is decoded aside must not keep a number that the feed gives meanwhile.
            arrival = numbered(await decoded(decoder.of_source(source), body, media_type, {}, self._aside), table)
        return arrival, key_of(message, media_type)

    def _body(self, message: Message) -> tuple[str, bytes]:
        limits, size = self._runtime.config, len(message.body)
        media_type = media_type_of(message.content_type or self._config.content_type)
        if size > limits.body_bytes_at_most:
            detail = f"the message has {size:,} bytes, body_bytes_at_most is {limits.body_bytes_at_most:,}"
            raise BodyError(413, "Content Too Large", detail)
        return media_type, decompress(message.body, message.content_encoding, limits.decoded_bytes_at_most)

    def together(self, messages: Sequence[Message]) -> Sequence[Read | None]:
        """What `arrival` answers for each message, decoded in one go; None for those that want a look of their own."""
        nothing: list[Read | None] = [None] * len(messages)
        if self._level is not None or len(messages) < 2:
            return nothing
        if self._alone:
            self._alone -= 1
            return nothing
        try:
            types, bodies = zip(*map(self._body, messages), strict=True)
        except BodyError:
            return nothing
        target, media_type = self._runtime, types[0]
        if any(other != media_type for other in types):
            return nothing
        limits = target.config.body_limits()
        arrivals = decoded_together(target.decoder, bodies, media_type, target.source_numbers, limits)
        if arrivals is None:  # it was for nothing, as it may be the next time: try less often
            self._waits = self._alone = min(2 * self._waits + 1, ALONE_AT_MOST)
            return nothing
        self._waits = 0
        return [(arrival, key_of(message, media_type)) for arrival, message in zip(arrivals, messages, strict=True)]

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
    """What tells a repeat of the message, with a fingerprint of what it brought; None where nothing does.

    Senders may give two bodies one name, on purpose too: then the fingerprint tells them apart. The broker's own number
    needs nothing but a checksum, at 3 us instead of 45 for 80 kB.
    """
    if message.key is None:
        return None
    kind, body = media_type.encode() + b"\0", message.body
    if message.is_numbered:
        check = google_crc32c.extend(google_crc32c.value(kind), body) if body else google_crc32c.value(kind)
        return RequestKey(_text(message.key), check.to_bytes(4, "little") + len(body).to_bytes(8, "little"))
    digest = hashlib.sha256(kind)
    digest.update(body)
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
