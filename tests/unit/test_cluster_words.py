"""What is said of a cluster, and what an instance remembers of those that are gone: pure, so told by cases and laws."""

from __future__ import annotations

from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st
from strandline.cluster.balance import Partition
from strandline.cluster.looks import Look, Seen
from strandline.cluster.noticed import OLD_SHARE, REMEMBERED_AT_MOST, REMEMBERED_S, Noticed
from strandline.cluster.status import Ownership, PartitionStatus, Status, encoded
from strandline.cluster.words import FAR_BEHIND_MESSAGES, eyes_first, said

FEED = "river-gauges"
LEASE_S = 15.0
PARTITIONS = [Partition(FEED, number) for number in range(4)]


def row(number: int, owner: str | None = "strandline-0", **more: Any) -> dict[str, Any]:
    """A partition that is well, or nobody's."""
    state = "nobody's" if owner is None else "owned"
    told = {"runtime": f"{FEED}-{number}", "owner": owner, "state": state, "here": owner == "strandline-0"}
    return {**told, "behind_messages": None if owner is None else 0, "nobodys_s": None, "words": "", **more}


def instance(name: str, seen_s: float = 0.0, owns: int = 2) -> dict[str, Any]:
    return {"instance": name, "seen_s": seen_s, "owns": owns, "listen": f"{name}:8600"}


def gone(name: str, seen_s: float, *, stopped: bool = False, owned: int = 3) -> dict[str, Any]:
    return {"instance": name, "seen_s": seen_s, "stopped": stopped, "owned": owned, "listen": None}


def document(*rows: dict[str, Any], **more: Any) -> dict[str, Any]:
    """A cluster of two with these partitions."""
    there = [instance("strandline-0"), instance("strandline-1")]
    told = {"instance": "strandline-0", "lease_s": 15.0, "connected": True, "causes": [], "away_s": None, "gone": []}
    told |= {"unseen_s": more.get("away_s") or 0.0}
    return {**told, "instances": there, "partitions": list(rows) or [row(0), row(1)], **more}


def causes(**words: str) -> dict[str, Any]:
    """What hinders, by what it is about."""
    return {"causes": [{"about": about, "words": each} for about, each in words.items()]}


FULL = "strandline-0 could not take over river-gauges-0: its disk is full"
PAUSED = "the feed takes nothing now: 10,000 events are held"
SETTINGS = "c reads messages by other settings than this instance: give all the same configuration"
NOBODYS = [row(number, None, nobodys_s=9.0) for number in range(3)]
CASES = [
    (document(), "fine", "All 2 partitions are owned, by 2 instances.", "Nothing to do."),
    (document(row(0)), "fine", "1 partition is owned, by 2 instances.", "Nothing to do."),
    (document(row(0), row(1, state="taking over")), "fine", "1 of 2 partitions is changing hands.", "Nothing to do."),
    (
        document(*NOBODYS, *(row(number) for number in range(3, 8)), gone=[gone("strandline-2", 14.2)]),
        "bad", "3 of 8 partitions are nobody's: strandline-2 was last seen 14 s ago.", "Look at the logs",
    ),
    (
        document(row(0, None, nobodys_s=3.0), gone=[gone("strandline-2", 75.0, stopped=True)]),
        "watch", "1 of 1 partition is nobody's: strandline-2 was stopped 1 min 15 s ago.", "another instance takes it.",
    ),
    (
        document(row(0, None, nobodys_s=70.0), row(1), **causes(takeover=FULL)),
        "bad", f"1 of 2 partitions is nobody's, for 1 min 10 s now: {FULL}.", "Mend what hinders it",
    ),
    (
        document(row(0, None, nobodys_s=70.0), row(1), **causes(settings=SETTINGS.replace("c ", "strandline-1 ", 1))),
        "bad", "1 of 2 partitions is nobody's: for 1 min 10 s now. strandline-1 reads messages by other settings",
        "Look at the logs",
    ),
    (
        document(instances=[instance("strandline-0"), instance("strandline-1", 9.4, 1)]),
        "watch", "strandline-1 was last seen 9 s ago, and the 1 partition that it owns stands.", "Look at strandline-1",
    ),
    (
        document(row(0), row(5, "strandline-1", behind_messages=12_400), row(6, behind_messages=1000)),
        "watch", "river-gauges-5 is 12,400 messages behind, at strandline-1, and 1 other far behind too.",
        "Look at its page at strandline-1",
    ),
    (
        document(gone=[gone("strandline-2", 7300.0)]),
        "watch", "strandline-2 is gone: it was last seen 2 h 1 min ago.", "Start strandline-2 again",
    ),
    (document(gone=[gone("strandline-2", 20.0, stopped=True)]), "fine", "All 2 partitions are owned", "Nothing to do."),
    (
        document(connected=False, away_s=23.4, **causes(away="no server answers as it should")),
        "bad", "strandline-0 has had no broker for 23 s: no server answers as it should. What others do cannot be seen",
        "look at the brokers",
    ),
    (
        document(connected=False, away_s=8.0, **causes(away="no answer", lease="what it owns it stops in 5 s")),
        "watch", "strandline-0 has had no broker for 8 s: no answer. What it owns it stops in 5 s; what others do",
        "look at the brokers",
    ),
    (
        document(row(0, None, nobodys_s=60.0), connected=False, away_s=0.2),  # what it saw last is old
        "watch", "strandline-0 has had no broker. What others do", "look at the brokers",
    ),
    (
        document(instances=[instance("strandline-0"), instance("strandline-1", 11.0)], connected=False, unseen_s=4.0),
        "watch", "strandline-0 has had no broker for 4 s. What others do", "look at the brokers",
    ),
    (
        document(connected=False, away_s=3.0, **causes(barred="the bucket has 1 replicas")),
        "watch", "strandline-0 could not join the cluster for 3 s: the bucket has 1 replicas.", "Mend what it says",
    ),
    (
        document(away_s=2.0, **causes(name="the last process called strandline-0 is forgotten within 15 s")),
        "watch", "strandline-0 has not been in the cluster for 2 s: the last process called", "Wait some seconds.",
    ),
    (
        document(away_s=31.0, **causes(name="another process is called strandline-0 too")),
        "bad", "strandline-0 has not been in the cluster for 31 s: another process is called strandline-0 too.",
        "Find the other process called strandline-0, and start one of the two under another name.",
    ),
    (document(row(3, words=PAUSED), row(4)), "watch", f"river-gauges-3 is hindered: {PAUSED}.", "log of strandline-0"),
    (
        document(*(row(number, f"s-{number % 2}", words="there is no stream NOPE: make it") for number in range(64))),
        "watch", "64 of 64 partitions are hindered: there is no stream NOPE: make it.", "logs of 2 instances.",
    ),
    (
        document(*(row(number, words=f"part.{number} is paused", behind_messages=9000) for number in range(2)), row(2)),
        "watch", "2 of 3 partitions are hindered, river-gauges-0 so: part.0 is paused.", "log of strandline-0.",
    ),
    (
        document(row(0, None, nobodys_s=9.0), row(1, words=PAUSED)),  # what is nobody's is worse
        "bad", f"1 of 2 partitions is nobody's: for 9 s now. river-gauges-1 is hindered: {PAUSED}.", "Look at the logs",
    ),
    (
        document(instances=[instance("strandline-0"), instance("c")], **causes(settings=SETTINGS)),
        "watch", f"{SETTINGS}.", "Compare the configurations",
    ),
]  # fmt: skip


@pytest.mark.parametrize(("given_document", "level", "says", "next"), CASES, ids=[case[2][:40] for case in CASES])
def test_what_is_said(given_document: dict[str, Any], level: str, says: str, next: str) -> None:
    found = said(given_document)
    assert (found.level, found.says[: len(says)]) == (level, says)
    assert next in found.next and found.next.endswith(".") and found.says.endswith(".")
    assert ".." not in found.says + found.next
    told = [cause["words"] for cause in given_document["causes"]]
    assert not any(words in found.next or found.says.count(words) > 1 for words in told), "a cause stands once"


def test_while_nothing_is_seen_nothing_is_claimed_of_others() -> None:
    instances = [instance("strandline-0"), instance("strandline-1", 60.0)]
    there = {"instances": instances, "gone": [gone("strandline-2", 9.0)]}
    rows = [row(0), row(1, None, nobodys_s=9.0), row(2, "strandline-1", words=PAUSED)]
    for away_s in (None, 0.5, 8.0, 3000.0):
        found = said(document(*rows, connected=False, away_s=away_s, **there, **causes(away="no answer in time")))
        assert "strandline-1" not in " ".join(found) and "strandline-2" not in " ".join(found)
        assert "others take" not in " ".join(found)


STATES = st.sampled_from(["owned", "taking over", "giving back", "nobody's"])
BEHIND = st.none() | st.integers(0, 3 * FAR_BEHIND_MESSAGES)


@given(st.lists(st.tuples(STATES, BEHIND), max_size=12))
def test_what_needs_eyes_is_first_and_nothing_is_lost(states: list[tuple[str, int | None]]) -> None:
    rows = [row(number, state=state, behind_messages=behind) for number, (state, behind) in enumerate(states)]
    found = eyes_first(rows)
    assert sorted(each["runtime"] for each in found) == sorted(each["runtime"] for each in rows)
    kinds = ["nobody's" if each["state"] == "nobody's" else each["state"] == "owned" for each in found]
    order = {"nobody's": 0, False: 1, True: 2}
    assert [order[kind] for kind in kinds] == sorted(order[kind] for kind in kinds)
    behind = [(each["behind_messages"] or 0) for each in found if each["state"] == "owned"]
    far = [messages for messages in behind if messages >= FAR_BEHIND_MESSAGES]
    assert behind[: len(far)] == sorted(far, reverse=True)


# ---- what is remembered ---------------------------------------------------------------------------------------------


def seen(value: Status | Ownership, age_s: float = 0.0) -> Seen:
    return Seen(encoded(value), 1, age_s)


def status(*numbers: int, leaving: bool = False) -> Status:
    owned = tuple(PartitionStatus(FEED, number, "owned", 0, 1) for number in numbers)
    return Status("run", 0, "b:8600", {FEED: 4}, leaving=leaving, partitions=owned)


class Sight:
    """Looks of instance `a`, one after the other."""

    def __init__(self) -> None:
        self.noticed = Noticed(PARTITIONS, LEASE_S, 0.0)

    def look(
        self,
        at_s: float,
        others: dict[str, Status],
        *,
        mine: list[int],
        starting: tuple[int, ...] | list[int] = (),
        ages: dict[str, float] | None = None,
    ) -> None:
        """What `mine` are is owned here; what the others say they own they own."""
        heartbeats = {name: seen(each, (ages or {}).get(name, 0.0)) for name, each in others.items()}
        owners = {
            Partition(FEED, part.partition): seen(Ownership(name, 0))
            for name, each in others.items() for part in each.partitions
        }  # fmt: skip
        self.noticed.look(
            Look(at_s, {"a": seen(status(*mine)), **heartbeats}, owners),
            others,
            [PARTITIONS[number] for number in mine],
            "a",
            [PARTITIONS[number] for number in starting],
        )
        self.noticed.check()


def test_who_is_gone_is_remembered_from_its_last_word_on() -> None:
    sight = Sight()
    sight.look(100.0, {"b": status(2, 3)}, mine=[0, 1])
    assert (sight.noticed.gone(100.0), sight.noticed.nobodys(100.0)) == ([], [])
    sight.look(110.0, {"b": status(2, 3)}, mine=[0, 1], ages={"b": 10.0})
    sight.look(115.0, {}, mine=[0, 1])
    assert sight.noticed.nobodys(115.0) == PARTITIONS[2:]
    (told,) = sight.noticed.gone(117.0)
    assert told == {"instance": "b", "seen_s": 17.0, "stopped": False, "owned": 2, "listen": "b:8600"}
    sight.look(118.0, {"b": status()}, mine=[0, 1, 2, 3])
    assert (sight.noticed.gone(118.0), sight.noticed.nobodys(118.0)) == ([], [])


def test_who_was_stopped_is_told_so_and_forgotten_after_a_while() -> None:
    sight = Sight()
    sight.look(10.0, {"b": status(leaving=True)}, mine=[0])
    sight.look(11.0, {}, mine=[0])
    assert [(one["instance"], one["stopped"]) for one in sight.noticed.gone(11.0)] == [("b", True)]
    sight.look(10.0 + REMEMBERED_S, {}, mine=[0])
    assert sight.noticed.gone(10.0 + REMEMBERED_S) == []


def test_an_entry_that_vanishes_young_was_given_back() -> None:
    """By an instance that stopped between two looks: nobody saw that it was leaving."""
    sight = Sight()
    sight.look(100.0, {"b": status(1), "c": status(2)}, mine=[0], ages={"b": 1.0, "c": LEASE_S - 1.5})
    sight.look(101.0, {}, mine=[0])
    assert {one["instance"]: one["stopped"] for one in sight.noticed.gone(101.0)} == {"b": True, "c": False}


def test_only_so_many_are_remembered_the_last_ones() -> None:
    sight = Sight()
    for number in range(REMEMBERED_AT_MOST + 5):
        sight.look(float(number), {f"b{number}": status()}, mine=[])
    sight.look(100.0, {}, mine=[])
    names = [one["instance"] for one in sight.noticed.gone(100.0)]
    assert names == [f"b{number}" for number in reversed(range(5, REMEMBERED_AT_MOST + 5))]


def test_away_before_the_first_look_and_once_the_last_one_is_old() -> None:
    noticed, first, later = Noticed(PARTITIONS, LEASE_S, 5.0), Look(10.0, {}, {}), Look(12.0, {"a": seen(status())}, {})
    assert (noticed.away_s(9.0), noticed.ever_joined) == (4.0, False)
    assert (noticed.instances(9.0), noticed.nobodys(9.0)) == (None, None)
    noticed.look(first, {}, [], None)  # its name is somebody else's still
    assert (noticed.away_s(11.0), noticed.ever_joined, noticed.instances(11.0)) == (6.0, False, 0)
    noticed.look(later, {}, [], "a")
    old_s = 12.0 + OLD_SHARE * LEASE_S
    assert (noticed.away_s(old_s), noticed.ever_joined, noticed.instances(old_s)) == (None, True, 1)
    assert noticed.nobodys(old_s) == PARTITIONS
    noticed.check()
    old_s += 0.1
    assert noticed.away_s(old_s) == pytest.approx(OLD_SHARE * LEASE_S + 0.1)
    assert (noticed.instances(old_s), noticed.nobodys(old_s)) == (None, None)


def test_how_long_a_partition_has_been_nobodys() -> None:
    sight = Sight()
    rows = {"partitions": [row(number, "a" if number else None) for number in range(4)]}
    sight.look(20.0, {}, mine=[1, 2, 3])
    sight.look(26.0, {}, mine=[1, 2, 3])
    told = sight.noticed.added(rows, 27.5)
    assert [each["nobodys_s"] for each in told["partitions"]] == [7.5, None, None, None]
    assert (told["away_s"], told["unseen_s"], told["gone"]) == (None, 1.5, [])


def test_a_partition_that_cannot_be_started_is_nobodys_from_try_to_try() -> None:
    sight = Sight()
    rows = {"partitions": [row(number, "a" if number else None) for number in range(4)]}
    sight.look(20.0, {}, mine=[1, 2, 3])
    sight.look(26.0, {}, mine=[0, 1, 2, 3], starting=[0])
    assert sight.noticed.nobodys(26.0) == [], "somebody has its lease"
    sight.look(27.0, {}, mine=[1, 2, 3])
    assert sight.noticed.added(rows, 30.0)["partitions"][0]["nobodys_s"] == 10.0
    trying = Status("run", 0, "b:8600", {FEED: 4}, partitions=(PartitionStatus(FEED, 0, "giving back", 0, 1),))
    sight.look(31.0, {"b": trying}, mine=[1, 2, 3])
    sight.look(32.0, {}, mine=[1, 2, 3])
    assert sight.noticed.added(rows, 32.0)["partitions"][0]["nobodys_s"] == 12.0
    sight.look(33.0, {"b": status(0)}, mine=[1, 2, 3])
    sight.look(60.0, {}, mine=[1, 2, 3])
    assert sight.noticed.added(rows, 61.0)["partitions"][0]["nobodys_s"] == 1.0, "it was owned since"
