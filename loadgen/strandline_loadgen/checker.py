"""The one judge: compares what was sent with what a store really holds, event by event.

Six faults are told apart. lost: a sent event is in no lane. unexpected: a row that was never sent, or whose time,
source or bytes differ from what was sent. duplicated: more copies in one lane than were sent. misplaced: one event in
two lanes (released and also late). disordered: in the ordered output event time goes back, or events with equal times
stand against their order of arrival. miscounted: the service's own numbers differ from what the store holds.

The judge reads columns and knows nothing of the service: no file, no socket, no code shared with what it judges. Lanes
may come in pieces of any size. Readers of stores: `stores`.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping

import numpy as np
from numpy.typing import NDArray

from .evidence import EXAMPLES_AT_MOST, FAULTS, UNKNOWN_SOURCE, Flags, Lane, Rows, Sent, Verdict
from .trace import Int64s

__all__ = ["FAULTS", "UNKNOWN_SOURCE", "Lane", "Rows", "Sent", "Verdict", "judge"]

PIECE_ROWS = 1_000_000


def judge(
    sent: Sent,
    ordered: Lane,
    late: Lane = (),
    *,
    quarantined: Int64s | int = 0,
    duplicates: Int64s | int | None = None,
    told: Mapping[str, int] | None = None,
    by_source: bool = False,
) -> Verdict:
    """Compare what was sent with what the lanes hold, in the order in which the store holds it.

    `quarantined`: ids, or only how many the service says (then as many absent events are excused). `duplicates`: ids of
    the copies that were left out as repeats, or how many the service says, or None: any absent copy of an event that is
    there is taken for a recognised repeat. `told`: the service's own sums {"accepted", "late"}, compared with the rows
    found. `by_source`: order was promised within each source only. Raises AssertionError when `sent` contradicts
    itself.
    """
    sent.check()
    case = _Case(sent)
    counts = {"ordered": 0, "late": 0}
    order = _OrderBySource(case) if by_source else _Order(case)
    for name, lane in (("ordered", ordered), ("late", late)):
        for piece in _pieces(lane):
            slots = case.admit(name, piece)
            counts[name] += len(piece)
            if name == "ordered":
                order.follow(piece, slots)
    order.settle()
    case.settle(quarantined, duplicates)
    for key, number in (told or {}).items():
        held = {"accepted": counts["ordered"], "late": counts["late"]}[key]
        case.faults.add_count(
            "miscounted", abs(number - held), f"{number:,} were answered as {key}, {held:,} are there"
        )
    return Verdict(
        sent=len(sent.rows),
        ordered=counts["ordered"],
        late=counts["late"],
        quarantined=case.quarantined,
        duplicates=case.duplicates,
        unpromised=int(np.count_nonzero(~sent.promised)),
        examples=case.faults.examples,
        **case.faults.counts,
    )


def _pieces(lane: Lane) -> Iterable[Rows]:
    if not isinstance(lane, Rows):
        return lane
    return (lane.part(at, at + PIECE_ROWS) for at in range(0, len(lane), PIECE_ROWS))


class _Faults:
    """Counts of faults with the first examples of each."""

    def __init__(self) -> None:
        self.counts: dict[str, int] = dict.fromkeys(FAULTS, 0)
        self.examples: dict[str, list[str]] = {fault: [] for fault in FAULTS}

    def add(self, fault: str, rows: Rows, where: Flags | Int64s, remark: str = "") -> None:
        """Count the rows that `where` picks."""
        picked = np.flatnonzero(where) if where.dtype == np.bool_ else where
        self.counts[fault] += len(picked)
        room = EXAMPLES_AT_MOST - len(self.examples[fault])
        for row in picked[: max(0, room)].tolist():
            self.examples[fault].append(
                f"event {rows.ids[row]} of source {rows.sources[row]}, time {rows.times[row]} ns{remark}"
            )

    def add_count(self, fault: str, count: int, sentence: str) -> None:
        """Count faults that have no row of their own."""
        if count > 0:
            self.counts[fault] += count
            self.examples[fault].append(sentence)


class _Case:
    """The books on every event sent: how often it was sent, and how often each lane holds it.

    An event's slot is its place among the distinct ids in ascending order.
    """

    def __init__(self, sent: Sent) -> None:
        self.sent, self.faults = sent, _Faults()
        self.ids, self.row, self.slots = np.unique(sent.rows.ids, return_index=True, return_inverse=True)
        n = len(self.ids)
        self.copies = np.bincount(self.slots, minlength=n).astype(np.int32)
        self.lanes = {name: np.zeros(n, dtype=np.int32) for name in ("ordered", "late", "quarantine")}
        self.quarantined = self.duplicates = 0
        self._dense = n > 0 and int(self.ids[-1]) - int(self.ids[0]) == n - 1

    def find(self, ids: Int64s) -> Int64s:
        """Slots of ids; -1 where nothing with that id was sent."""
        if not len(self.ids):
            return np.full(len(ids), -1, dtype=np.int64)
        if self._dense:  # 5 ns an id instead of 300 for the search, at 10^7
            inside = (ids >= self.ids[0]) & (ids <= self.ids[-1])
            return np.where(inside, ids - self.ids[0], -1)
        at = np.minimum(np.searchsorted(self.ids, ids), len(self.ids) - 1)
        return np.where(self.ids[at] == ids, at, -1)

    def admit(self, lane: str, rows: Rows) -> Int64s:
        """Enter rows of a lane; returns their slots, -1 for those that are not what was sent."""
        slots = self.find(rows.ids)
        known = slots >= 0
        self.faults.add("unexpected", rows, ~known, f", in the {lane} lane: never sent")
        first = self.row[np.where(known, slots, 0)] if len(self.row) else np.zeros(len(rows), dtype=np.int64)
        wrong = np.zeros(len(rows), dtype=bool)
        told = self.sent.rows
        if len(told):
            wrong |= (told.times[first] != rows.times) | (told.sources[first] != rows.sources)
            if told.digests is not None and rows.digests is not None:
                wrong |= told.digests[first] != rows.digests
        self.faults.add(
            "unexpected", rows, known & wrong, f", in the {lane} lane: sent with another time, source or bytes"
        )
        slots = np.where(wrong, -1, slots)
        np.add.at(self.lanes[lane], slots[slots >= 0], 1)
        return slots

    def settle(self, quarantined: Int64s | int, duplicates: Int64s | int | None) -> None:
        """Balance the books once every lane has been entered."""
        quarantine_ids = np.empty(0, dtype=np.int64) if isinstance(quarantined, int) else np.asarray(quarantined)
        slots = self.find(quarantine_ids)
        self.faults.add_count("unexpected", int(np.count_nonzero(slots < 0)), "in quarantine, yet never sent")
        np.add.at(self.lanes["quarantine"], slots[slots >= 0], 1)
        repeats = np.zeros(len(self.ids), dtype=np.int32)
        if isinstance(duplicates, np.ndarray):
            slots = self.find(duplicates)
            self.faults.add_count("unexpected", int(np.count_nonzero(slots < 0)), "named a repeat, yet never sent")
            np.add.at(repeats, slots[slots >= 0], 1)
        self._excess(self.copies - repeats)
        self._missing(self.copies - repeats, quarantined, duplicates)
        if isinstance(duplicates, np.ndarray):
            self.duplicates = len(duplicates)
        if not isinstance(quarantined, int):
            self.quarantined = len(quarantine_ids)

    def _excess(self, allowed: NDArray[np.int32]) -> None:
        """More copies than were sent: within one lane duplicated, over several lanes misplaced."""
        allowed = np.maximum(allowed, 0)
        stored = sum(self.lanes.values())
        twice = sum(np.maximum(held - allowed, 0) for held in self.lanes.values())
        elsewhere = np.maximum(stored - allowed, 0) - twice
        for fault, excess in (("duplicated", twice), ("misplaced", elsewhere)):
            hit = np.flatnonzero(excess)
            self.faults.add(fault, self.sent.rows, np.repeat(self.row[hit], excess[hit]))

    def _missing(self, allowed: NDArray[np.int32], quarantined: Int64s | int, duplicates: Int64s | int | None) -> None:
        """Fewer copies than were promised: lost, unless they are excused as repeats or as quarantined.

        A count excuses so many, no matter which: `surely` is how many are missing although promised, `at_most` counts
        those without a promise too, and a service that claims more than that has miscounted.
        """
        promised = np.bincount(self.slots[self.sent.promised], minlength=len(self.ids)) - (self.copies - allowed)
        stored = sum(self.lanes.values())
        missing = np.maximum(promised - stored, 0)
        absent = np.maximum(allowed - stored, 0)
        repeated = (self.copies > 1) & (stored > 0)
        if not isinstance(duplicates, np.ndarray):
            surely, at_most = int(missing[repeated].sum()), int(absent[repeated].sum())
            claimed = surely if duplicates is None else duplicates
            self.duplicates = min(claimed, at_most)
            self.faults.add_count("miscounted", claimed - at_most, f"{claimed:,} named repeats, {at_most:,} are absent")
            missing = _excused(missing, repeated, min(claimed, surely))
        if isinstance(quarantined, int):
            surely, at_most = int(missing.sum()), int(absent.sum()) - self.duplicates
            self.quarantined = min(quarantined, at_most)
            sentence = f"{quarantined:,} quarantined, {at_most:,} are absent"
            self.faults.add_count("miscounted", quarantined - at_most, sentence)
            missing = _excused(missing, np.ones(len(missing), dtype=bool), min(quarantined, surely))
        hit = np.flatnonzero(missing)
        self.faults.add("lost", self.sent.rows, np.repeat(self.row[hit], missing[hit]))


def _excused(missing: Int64s, where: Flags, count: int) -> Int64s:
    """`missing`, less `count` in all, taken from the first places that `where` picks."""
    before = np.cumsum(np.where(where, missing, 0))
    return missing - np.where(where, np.clip(count - (before - missing), 0, missing), 0)


class _Order:
    """Follows the ordered output piece by piece: does time go back, do equal times keep their order of arrival?

    Between pieces it keeps the rows that share the newest time.
    """

    def __init__(self, case: _Case) -> None:
        self._case = case
        self._spans: tuple[Int64s, Int64s, Int64s, Int64s] | None = None
        none = np.empty(0, dtype=np.int64)
        self._last, self._slots = Rows(none, none, none.astype(np.uint32)), none

    def follow(self, rows: Rows, slots: Int64s) -> None:
        """The next rows of the ordered output, with their slots (-1: not what was sent)."""
        kept = len(self._last)
        rows = Rows(*(np.concatenate([getattr(self._last, c), getattr(rows, c)]) for c in ("ids", "times", "sources")))
        slots = np.concatenate([self._slots, slots])
        if not len(rows):
            return
        times = rows.times
        back = np.append(False, times[1:] < times[:-1])
        self._case.faults.add("disordered", rows, back, ", behind a later time")
        group = np.append(0, np.cumsum(times[1:] != times[:-1]))
        same = np.append(False, group[1:] == group[:-1])
        tied = np.flatnonzero((same | np.append(same[1:], False)) & (slots >= 0))
        if len(tied):
            wrong = tied[self._against_arrival(group[tied], slots[tied])]
            self._case.faults.add("disordered", rows, wrong[wrong >= kept], ", against the order of arrival")
        begin = int(np.flatnonzero(group == group[-1])[0])
        self._last, self._slots = rows.part(begin, len(rows)), slots[begin:]

    def _against_arrival(self, group: Int64s, slots: Int64s) -> Flags:
        """Rows that stand behind one of their group that certainly arrived after them."""
        if self._spans is None:
            self._spans = self._arrival_spans()
        begins, ends, requests, lines = (column[slots] for column in self._spans)
        wrong = _below_running_max(group, begins, ends)
        single = np.flatnonzero(self._case.copies[slots] == 1)
        order = single[np.lexsort((requests[single], group[single]))]  # stable: in a request the output's order remains
        pair = np.cumsum(np.append(0, np.diff(group[order]) | np.diff(requests[order])) != 0)
        wrong[order] |= _below_running_max(pair, lines[order], lines[order])
        return wrong

    def _arrival_spans(self) -> tuple[Int64s, Int64s, Int64s, Int64s]:
        """Per slot: begun and answered (over all copies), and request and line of the first copy."""
        sent, case = self._case.sent, self._case
        lines = np.arange(len(sent.rows), dtype=np.int64)
        requests = lines if sent.requests is None else sent.requests
        begins, ends = np.full(len(case.ids), 2**63 - 1), np.full(len(case.ids), -(2**63))
        np.minimum.at(begins, case.slots, requests if sent.begins is None else sent.begins[requests])
        np.maximum.at(ends, case.slots, requests if sent.ends is None else sent.ends[requests])
        return begins, ends, requests[case.row], case.row

    def settle(self) -> None:
        """All rows were told: everything was judged on the way."""


class _OrderBySource:
    """The same within each source: pieces are gathered, and judged source by source at the end."""

    def __init__(self, case: _Case) -> None:
        self._case = case
        self._pieces: list[Rows] = []
        self._slots: list[Int64s] = []

    def follow(self, rows: Rows, slots: Int64s) -> None:
        """The next rows of the ordered output, with their slots (-1: not what was sent)."""
        self._pieces.append(rows)
        self._slots.append(slots)

    def settle(self) -> None:
        """All rows were told: each source's rows as an output of their own, one source after the other."""
        if not self._pieces:
            return
        columns = (np.concatenate([getattr(piece, c) for piece in self._pieces]) for c in ("ids", "times", "sources"))
        rows, slots = Rows(*columns), np.concatenate(self._slots)
        order = np.argsort(rows.sources, kind="stable")
        ends = np.flatnonzero(np.diff(rows.sources[order])) + 1
        for part in np.split(order, ends):
            own = Rows(rows.ids[part], rows.times[part], rows.sources[part])
            _Order(self._case).follow(own, slots[part])


def _below_running_max(group: Int64s, values: Int64s, limits: Int64s) -> Flags:
    """Per row: is its limit below the greatest value before it in its group? Group numbers must ascend."""
    _, ranks = np.unique(np.concatenate([values, limits]), return_inverse=True)
    room = len(ranks) + 1
    ranked, limited = ranks[: len(values)] + 1 + group * room, ranks[len(values) :] + 1 + group * room
    before = np.append(0, np.maximum.accumulate(ranked)[:-1])
    before = np.maximum(before, group * room)  # in a new group nothing came before
    below: Flags = limited < before
    return below
