"""Partitions that could not be started here, or whose owner ended by itself: when to try again, and what to say.

Bookkeeping only. Time is an argument, in monotonic seconds.
"""

from __future__ import annotations

import random
from collections.abc import Callable
from dataclasses import dataclass

from ..backoff import backoff_s
from ..config_cluster import partition_name
from .balance import Partition

BASE_S, AT_MOST_S = 1.0, 300.0  # backoff
PASSING_AT_MOST_S = 5.0  # where the brokers did not answer: that says nothing of this instance or the partition
STEADY_S = 60.0  # an owner that ran so long is no repeat of an earlier failure
NAMED_AT_MOST = 3  # partitions in one sentence


@dataclass(frozen=True, slots=True)
class _Trouble:
    attempts: int
    until_s: float  # not tried again before
    words: str


class Troubles:
    """Of one instance. While it waits before the next try of any partition, it is `unable`."""

    def __init__(self, chance: random.Random) -> None:
        self._chance = chance
        self._troubles: dict[Partition, _Trouble] = {}
        self._failures = 0  # in a row, of whatever partition: where a disk is full, each of them fails

    def note(
        self, partition: Partition, words: str, owned_s: float | None, now_s: float, *, is_passing: bool = False
    ) -> float:
        """It failed, after it was owned since `owned_s`: how many seconds it is not tried again.

        `is_passing`: for want of an answer of the brokers.
        """
        before = self._troubles.get(partition)
        attempts = max(before.attempts if before else 0, self._failures) + 1
        if owned_s is not None and now_s > owned_s + STEADY_S:
            attempts = 1
        if not is_passing:
            self._failures = attempts
        at_most_s = PASSING_AT_MOST_S if is_passing else AT_MOST_S
        wait_s = backoff_s(self._chance, attempts, base_s=BASE_S, at_most_s=at_most_s)
        self._troubles[partition] = _Trouble(attempts, now_s + wait_s, words)
        return wait_s

    def steady(self, partition: Partition, owned_s: float | None, now_s: float) -> None:
        """It is owned here since then; forget its trouble once that is long enough."""
        if owned_s is not None and now_s > owned_s + STEADY_S:
            self._troubles.pop(partition, None)
            if not self._troubles:
                self._failures = 0

    def elsewhere(self, is_elsewhere: Callable[[Partition], bool], now_s: float) -> None:
        """Forget what others have taken over, once it might be tried here again."""
        for partition in list(self._troubles):
            if not self.rests(partition, now_s) and is_elsewhere(partition):
                del self._troubles[partition]

    def rests(self, partition: Partition, now_s: float) -> bool:
        """Whether it is not to be tried yet."""
        trouble = self._troubles.get(partition)
        return trouble is not None and now_s < trouble.until_s

    def unable(self, now_s: float) -> bool:
        """Whether anything failed a short while ago."""
        return any(now_s < trouble.until_s for trouble in self._troubles.values())

    def words(self, concerns: Callable[[Partition], bool]) -> str:
        """What went wrong with those that this concerns; empty where there are none."""
        found = [
            f"{partition_name(*partition)}: {trouble.words}"
            for partition, trouble in self._troubles.items()
            if concerns(partition)
        ]
        more = len(found) - NAMED_AT_MOST
        return ", ".join(found[:NAMED_AT_MOST]) + (f" and {more} more" if more > 0 else "")

    def check(self) -> None:
        """Assert what must always hold."""
        assert all(trouble.attempts > 0 and trouble.words for trouble in self._troubles.values())
        assert self._failures >= 0
