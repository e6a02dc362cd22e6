"""The room that is reserved before settings are noted is enough for the records that they become."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as st
from strandline.config_model import Feed
from strandline.core.records import SettingsRecord, SourcesRecord, encode_small
from strandline.runtime import settings_bytes

NAMES = st.lists(st.text(max_size=300), max_size=200, unique=True)


@given(NAMES)
def test_the_room_for_settings_is_enough_however_many_sources_are_expected(names: list[str]) -> None:
    config = Feed("river-gauges", expect_sources=tuple(names))
    bodies = [
        encode_small(SourcesRecord(0, names))[1],
        encode_small(SettingsRecord(0, config.settings(), {"store": ["ordered", "late", "quarantine"]}, False))[1],
    ]
    for body, reserved in zip(bodies, settings_bytes(config), strict=True):
        assert len(body) <= reserved
