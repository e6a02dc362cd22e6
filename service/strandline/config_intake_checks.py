"""Rules on intakes that compare keys: secrets named twice, one consumer named twice, two sources for one event."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING

from .config_intakes import IntakeConfig, JetstreamIntake, MqttIntake
from .config_kinds import quoted
from .config_read import Place, Reading
from .config_units import duration_text

if TYPE_CHECKING:
    from .config_model import Feed


def check_intakes(feeds: Sequence[Feed], reading: Reading) -> None:
    """Judge the intakes that could be read; what is wrong becomes a fault of `reading`."""
    names: dict[tuple[int, str], Place] = {}
    sessions: dict[tuple[str, ...], Place] = {}
    for index, place, feed, intake in _intakes(feeds, reading):
        if not reading.is_faulty((*place, "name")):
            first = names.setdefault((index, intake.name.replace("-", "_")), place)
            if first != place:
                sentence = f"is the name of {reading.spelled(first)} already: give each intake of a feed its own"
                reading.fault((*place, "name"), sentence, quoted(intake.name))
        check_secrets(intake, place, reading)
        _check_source(feed, intake, place, reading)
        _check_session(intake, place, sessions, reading)
        _check_room(feed, intake, place, reading)


def _intakes(feeds: Sequence[Feed], reading: Reading) -> Iterator[tuple[int, Place, Feed, IntakeConfig]]:
    for index, feed in enumerate(feeds):
        for number, intake in enumerate(feed.intakes):
            place: Place = ("feed", index, "intake", number)
            if not reading.is_faulty(place):
                yield index, place, feed, intake


def check_secrets(access: object, place: Place, reading: Reading) -> None:
    """At most one way to say who to be, and a user where there is a password."""
    given = {key for key in ("password", "password_file", "token", "token_file", "creds_file", "user")
             if getattr(access, key, None) is not None}  # fmt: skip
    for first, second in (("password", "password_file"), ("token", "token_file")):
        if {first, second} <= given:
            reading.fault((*place, second), f"and `{first}` both say the same: name one of them")
    kinds = (("user", {"user"}), ("token", {"token", "token_file"}), ("creds_file", {"creds_file"}))
    ways = [way for way, keys in kinds if keys & given]
    if len(ways) > 1:
        reading.fault((*place, ways[-1]), f"and `{ways[0]}` both say who to be: name one of them")
    if given & {"password", "password_file"} and "user" not in given and not reading.is_faulty((*place, "user")):
        reading.fault((*place, "user"), "is missing: a password needs it")


def _check_source(feed: Feed, intake: IntakeConfig, place: Place, reading: Reading) -> None:
    if getattr(intake, "source", None) is not None and feed.source is not None:
        key, way = ("topic_level", "topic") if isinstance(intake, MqttIntake) else ("subject_token", "subject")
        sentence = f"contradicts the feed's source = {quoted(feed.source)}: take it from events, or from the {way}"
        reading.fault((*place, "source", key), sentence)


def _check_session(
    intake: IntakeConfig, place: Place, sessions: dict[tuple[str, ...], Place], reading: Reading
) -> None:
    """Two intakes on one consumer would each get a part; of two with one session each would end the other's."""
    keys: list[tuple[str, ...]]
    if isinstance(intake, JetstreamIntake):
        key, keys = "durable", [(url, intake.stream, intake.durable) for url in intake.urls]
    elif isinstance(intake, MqttIntake):
        key, keys = "client_id", [(intake.url.rstrip("/"), intake.client_id)]
    else:
        return
    if any(reading.is_faulty((*place, each)) for each in (key, "url", "urls", "stream")):
        return
    first = next((sessions[each] for each in keys if each in sessions), None)
    for each in keys:
        sessions.setdefault(each, place)
    if first is not None:
        sentence = f"is the one of {reading.spelled(first)} already: give each intake its own"
        reading.fault((*place, key), sentence, quoted(getattr(intake, key)))


def _check_room(feed: Feed, intake: IntakeConfig, place: Place, reading: Reading) -> None:
    """After a kill, what was in flight comes again; it is told by keys, so as many must be kept, and for so long."""
    if not isinstance(intake, JetstreamIntake):
        return
    rules = (
        ("in_flight_at_most", "keys_at_most", intake.in_flight_at_most, feed.keys_at_most, str),
        ("ack_wait", "keys_kept_for", intake.ack_wait_ns, feed.keys_kept_for_ns, duration_text),
    )
    for key, other, value, bound, show in rules:
        if value > bound and not reading.is_faulty((*place, key)) and not reading.is_faulty((*place[:2], other)):
            sentence = f"is more than {other} = {show(bound)}: repeats after a crash would not be recognised"
            reading.fault((*place, key), sentence, show(value))
