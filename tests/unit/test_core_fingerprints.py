"""Fingerprints of one key: of one kind they are compared; of two kinds they say nothing of each other.

A message's fingerprint was SHA-256, cut to 16 bytes, before it was a checksum where the broker numbers messages: one
that is in a journal must go on being known when its message comes again.
"""

from __future__ import annotations

from helpers_feed import Shell, patient
from hypothesis import given
from hypothesis import strategies as st
from strandline.core.columns import RequestKey
from strandline.ingest.formats import NDJSON
from strandline.intake.broker import Message
from strandline.intake.reading import key_of


def test_a_key_of_before_is_known_whatever_kind_its_fingerprint_was() -> None:
    shell = Shell(patient(), {"store": ["ordered"]})
    first = shell.events([1, 2], 1, key=RequestKey("at:1", b"x" * 16))
    assert first is not None and first.accepted == 2
    assert shell.events([1, 2], 2, key=RequestKey("at:1", b"y" * 12)) == first
    assert shell.feed.state.ledger.received == 2
    assert shell.events([3], 3, key=RequestKey("at:1", b"z" * 16)) is None
    assert [refusal.reason for refusal in shell.refusals.values()] == ["key_reused"]


@given(st.binary(max_size=30), st.binary(max_size=30), st.sampled_from((NDJSON, "application/json")))
def test_a_checksum_tells_bodies_and_formats_apart(one: bytes, other: bytes, kind: str) -> None:
    keys = [
        key_of(Message(body, "", [], "at:1", is_numbered=True), media_type)
        for body, media_type in ((one, NDJSON), (other, kind))
    ]
    assert keys[0] is not None and keys[1] is not None and keys[0].text == keys[1].text
    assert (keys[0].fingerprint == keys[1].fingerprint) == ((one, NDJSON) == (other, kind))
    assert len(keys[0].fingerprint) == 12
