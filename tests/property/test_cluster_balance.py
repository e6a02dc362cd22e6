"""Sharing out partitions: from any state, under stale views, it comes to rest balanced, and moves no more than it must.

The model world knows one rule of the leases: a partition is taken only where nobody has it.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Collection, Mapping
from dataclasses import dataclass, field

from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.cluster.balance import Decision, Partition, decide, shares

NAMES = tuple("abcde")
VIEWS_KEPT = 6
View = tuple[frozenset[str], dict[Partition, str | None]]


@dataclass
class World:
    """Instances that look and act, one after the other; the dead keep what they own until it expires."""

    owners: dict[Partition, str | None]
    mine: dict[str, list[Partition]] = field(default_factory=dict)
    views: list[View] = field(default_factory=list)
    moves: Counter[str] = field(default_factory=Counter)

    def look(self, me: str, back: int = 0, unable: Collection[str] = ()) -> Decision:
        self.views = [*self.views[-VIEWS_KEPT:], (frozenset(self.mine), dict(self.owners))]
        live, owners = self.views[-1 - min(back, len(self.views) - 1)]
        decision = decide(me, live, owners, self.mine[me], unable)
        if (given := decision.give_back) is not None:
            self.mine[me].remove(given)
            self.owners[given] = None
            self.moves["given"] += 1
        free = [each for each in decision.take if self.owners[each] is None]  # the others are tried in vain
        for each in free[: 0 if me in unable else decision.take_at_most]:
            self.owners[each] = me
            self.mine[me].append(each)
            self.moves["taken"] += 1
        return decision

    def leave(self, me: str) -> None:
        for each in self.mine.pop(me):
            self.owners[each] = None

    def expire(self) -> None:
        self.owners = {each: owner if owner in self.mine else None for each, owner in self.owners.items()}

    def beyond(self) -> int:
        counts = {name: len(mine) for name, mine in self.mine.items()}
        fair = shares(len(self.owners), counts)
        return sum(max(0, counts[name] - fair[name]) for name in counts)

    def check(self) -> None:
        held = [(each, name) for name, mine in self.mine.items() for each in mine]
        assert len({each for each, _ in held}) == len(held)
        assert all(self.owners[each] == name for each, name in held)


names = st.sampled_from(NAMES)
acts = st.one_of(
    st.tuples(st.sampled_from(("join", "leave", "die")), names),
    st.tuples(st.just("look"), names, st.integers(0, VIEWS_KEPT)),
    st.tuples(st.just("expire")),
)
partition_sets = st.lists(st.integers(0, 9), min_size=1, max_size=3).map(
    lambda counts: [Partition(f"feed{feed}", number) for feed, count in enumerate(counts) for number in range(count)]
)


def balanced(live: Collection[str], owners: Mapping[Partition, str | None]) -> bool:
    """Whether every partition has a live owner, and each of those between floor and ceil of the even share."""
    held = list(owners.values())
    counts = [held.count(name) for name in live]
    return sum(counts) == len(held) and (not counts or max(counts) - min(counts) <= 1)


def play(partitions: list[Partition], history: list[tuple[object, ...]]) -> World:
    world = World(dict.fromkeys(partitions))
    for act in history:
        match act:
            case ("join", str(name)):
                if name not in {*world.mine, *world.owners.values()}:  # a predecessor's entries expire first
                    world.mine[name] = []
            case ("leave", str(name)) if name in world.mine:
                world.leave(name)
            case ("die", str(name)):
                world.mine.pop(name, None)
            case ("look", str(name), int(back)) if name in world.mine:
                world.look(name, back)
            case ("expire",):
                world.expire()
        world.check()
    return world


@settings(max_examples=400)
@given(partition_sets, st.lists(acts, max_size=60), names)
def test_after_quiet_it_is_balanced_soon_and_with_no_move_too_many(
    partitions: list[Partition], history: list[tuple[object, ...]], survivor: str
) -> None:
    world = play([*partitions], [*history, ("expire",), ("join", survivor)])
    beyond, free = world.beyond(), list(world.owners.values()).count(None)
    world.moves.clear()
    # One at least is given back in a round while any is owned beyond a share. Then one round brings everybody to the
    # lesser share, and one more the greater shares to those who are first by name.
    for _ in range(beyond + 2):
        for name in sorted(world.mine):
            world.look(name)
            world.check()
    assert balanced(world.mine, world.owners)
    # Least: whatever is owned beyond a share must move, whatever nobody owns must be taken, and nothing else.
    assert world.moves == +Counter(given=beyond, taken=free + beyond)
    world.moves.clear()
    decisions = [world.look(name) for name in world.mine]
    assert not +world.moves
    assert all(each == Decision(None, (), 0) for each in decisions)


@settings(max_examples=200)
@given(partition_sets, st.lists(acts, max_size=60), names, st.randoms(use_true_random=False))
def test_it_comes_to_rest_too_where_all_act_on_one_view(
    partitions: list[Partition], history: list[tuple[object, ...]], survivor: str, chance: object
) -> None:
    world = play([*partitions], [*history, ("expire",), ("join", survivor)])
    free, beyond = list(world.owners.values()).count(None), world.beyond()
    world.moves.clear()
    for _ in range(beyond + 2):
        order = list(world.mine)
        chance.shuffle(order)  # type: ignore[attr-defined]
        for back, name in enumerate(order):
            world.look(name, back)  # all see what the first of them saw
            world.check()
    assert balanced(world.mine, world.owners)
    assert world.moves == +Counter(given=beyond, taken=free + beyond)


@given(st.integers(0, 40), st.dictionaries(st.text("abc", min_size=1, max_size=3), st.integers(0, 20), min_size=1))
def test_shares_add_up_and_differ_by_one_at_most_and_favour_those_who_own_most(
    partitions: int, owned: dict[str, int]
) -> None:
    found = shares(partitions, owned)
    assert sum(found.values()) == partitions
    assert max(found.values()) - min(found.values()) <= 1
    assert all(found[one] >= found[two] for one in owned for two in owned if owned[one] > owned[two])


@settings(max_examples=200)
@given(partition_sets, st.sets(names, min_size=1), st.sets(names))
def test_the_able_take_all_between_them_and_no_two_try_the_same_first(
    partitions: list[Partition], live: set[str], unable: set[str]
) -> None:
    unable &= live
    able = sorted(live - unable) or sorted(live)
    decisions = {name: decide(name, live, dict.fromkeys(partitions), [], unable) for name in able}
    firsts = [each for found in decisions.values() for each in found.take[: found.take_at_most]]
    assert sorted(firsts) == sorted(partitions)
    assert all(sorted(found.take) == sorted(partitions) for found in decisions.values() if found.take_at_most)


@settings(max_examples=200)
@given(partition_sets, st.sets(names, min_size=2), names, st.data())
def test_who_is_unable_keeps_what_runs_up_to_a_fair_share_and_the_others_take_the_rest(
    partitions: list[Partition], live: set[str], sick: str, data: st.DataObject
) -> None:
    live.add(sick)
    world = World({each: data.draw(st.sampled_from(sorted(live))) for each in partitions})
    world.mine = {name: [each for each, owner in world.owners.items() if owner == name] for name in live}
    before = {name: len(mine) for name, mine in world.mine.items()}
    fair = shares(len(partitions), before)[sick]
    for _ in range(len(partitions) + 2):
        for name in sorted(live):
            world.look(name, unable={sick})
            world.check()
    assert len(world.mine[sick]) == min(before[sick], fair)
    rest = {each: owner for each, owner in world.owners.items() if owner != sick}
    assert balanced(live - {sick}, rest)
    world.moves.clear()
    for name in sorted(live):
        world.look(name, unable={sick})
    assert not +world.moves


def test_one_joins_two_and_only_one_partition_moves() -> None:
    four = [Partition("river", number) for number in range(4)]
    owners: dict[Partition, str | None] = dict(zip(four, "aabb", strict=True))
    assert decide("a", {"b", "c"}, owners, four[:2]) == Decision(None, (), 0)
    assert decide("b", {"a", "c"}, owners, four[2:]) == Decision(four[3], (), 0)  # the one it took last
    owners[four[3]] = None
    assert decide("c", {"a", "b"}, owners, []) == Decision(None, (four[3],), 1)


def test_each_instance_has_some_of_each_feed() -> None:
    partitions = [Partition(feed, number) for feed in ("north", "south") for number in range(4)]
    for name in "ab":
        found = decide(name, "ab", dict.fromkeys(partitions), [])
        feeds = Counter(each.feed for each in found.take[: found.take_at_most])
        assert feeds == {"north": 2, "south": 2}
