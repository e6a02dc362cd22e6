"""Laws of the dashboard's history: merging keeps sums, least and greatest, whatever the samples; memory is bounded."""

from __future__ import annotations

from collections import Counter

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.core.columns import NO_SOURCE, TIME_MIN
from strandline.dashboard.history import (
    GREATEST,
    LANES,
    LAST,
    LEVELS,
    ROW,
    SECOND_NS,
    SUMS,
    History,
    Rows,
    empty_row,
    merged,
)

SMALL = ((1, 12), (4, 9), (12, 7))  # levels in which everything that can happen happens within some 100 samples
NAMES = [name for name in ROW.names or () if name not in ("t_ns", "lane_source", "lane_newest_ns")]


@st.composite
def samples(draw: st.DrawFn, at_most: int = 120) -> Rows:
    """Samples at ascending instants, most of them some second apart, some after a gap, some in the same second."""
    count = draw(st.integers(1, at_most))
    steps = draw(st.lists(st.sampled_from([0.3, 0.9, 1.0, 1.1, 5.0, 30.0]), min_size=count, max_size=count))
    chance = np.random.default_rng(draw(st.integers(0, 2**32)))
    rows = np.concatenate([empty_row() for _ in range(count)])
    rows["t_ns"] = 1_700_000_000 * SECOND_NS + (np.cumsum(steps) * SECOND_NS).astype(np.int64)
    for name in SUMS:
        rows[name] = chance.integers(0, 1000, rows[name].shape)
    for name in GREATEST:
        rows[name] = chance.integers(-5, 1000, rows[name].shape)
    rows["watermark_ns"] = np.cumsum(chance.integers(0, 5, count))
    rows["slack_ns"] = chance.integers(0, 10, count)
    rows["balanced"] = chance.random(count) < 0.9
    rows["hold_why"] = chance.integers(0, 3, count)
    rows["hold_source"] = chance.choice([0, 1, NO_SOURCE], count)
    for row in rows:
        lanes = chance.permutation(30)[: chance.integers(0, LANES + 1)]
        row["lane_source"][: len(lanes)] = lanes
        row["lane_newest_ns"][: len(lanes)] = chance.integers(0, 100, len(lanes))
    return rows


def newest_by_source(rows: Rows) -> dict[int, int]:
    """The greatest newest time of each source."""
    found: dict[int, int] = {}
    for row in rows:
        for source, newest in zip(row["lane_source"].tolist(), row["lane_newest_ns"].tolist(), strict=True):
            if source != NO_SOURCE:
                found[source] = max(found.get(source, TIME_MIN), newest)
    return found


def agrees(row: Rows, of: Rows) -> None:
    """Assert that one row is what its samples are together, judged field by field."""
    for name in SUMS:
        assert np.array_equal(row[name], of[name].sum(axis=0)), name
    for name in GREATEST:
        assert np.array_equal(row[name], of[name].max(axis=0)), name
    for name in LAST:
        assert row[name] == of[name][-1], name
    assert row["balanced"] == of["balanced"].all()
    holds = list(zip(of["hold_why"].tolist(), of["hold_source"].tolist(), strict=True))
    counts = Counter(holds)
    most = [hold for hold in holds if counts[hold] == max(counts.values())]
    assert (row["hold_why"], row["hold_source"]) == most[-1]
    shown, newest = newest_by_source(row[None]), newest_by_source(of)
    assert shown.items() <= newest.items() and len(shown) == min(LANES, len(newest))
    seen = Counter(of["lane_source"][of["lane_source"] != NO_SOURCE].tolist())
    left_out = [seen[source] for source in newest if source not in shown]
    assert not left_out or max(left_out) <= min(seen[source] for source in shown)


@given(samples(40), st.data())
def test_a_merged_row_is_what_its_rows_are_together(rows: Rows, data: st.DataObject) -> None:
    inner = sorted(data.draw(st.sets(st.integers(1, len(rows) - 1)))) if len(rows) > 1 else []
    starts = np.array([0, *inner], dtype=np.intp)
    result = merged(rows, starts)
    for row, start, stop in zip(result, starts, [*inner, len(rows)], strict=True):
        assert row["t_ns"] == rows["t_ns"][start]
        agrees(row, rows[start:stop])


def filled(rows: Rows) -> History:
    """A history of small levels, checked after each sample."""
    history = History(SMALL)
    for row in rows:
        history.add(row[None].copy())
        history.check()
    return history


@given(samples())
@settings(max_examples=60, deadline=None)
def test_every_level_tells_the_same_sums(rows: Rows) -> None:
    """What a level still has agrees with the samples of its steps; what it lost is the oldest."""
    history = filled(rows)
    for level, (step, capacity) in enumerate(SMALL):
        found = history.rows(level)
        assert len(found) <= capacity + 1
        steps = rows["t_ns"] // (step * SECOND_NS)
        expected = np.unique(steps)
        assert np.array_equal(found["t_ns"] // (step * SECOND_NS), expected[-len(found) :])
        assert len(found) >= min(capacity, len(expected))
        for row in found:
            of = rows[steps == row["t_ns"] // (step * SECOND_NS)]
            for name in SUMS:
                assert np.array_equal(row[name], of[name].sum(axis=0)), (level, name)
            for name in GREATEST:
                assert np.array_equal(row[name], of[name].max(axis=0)), (level, name)
            for name in LAST:
                assert row[name] == of[name][-1], (level, name)
            assert row["balanced"] == of["balanced"].all()


@given(samples(), st.integers(2, 30), st.data())
@settings(max_examples=60, deadline=None)
def test_a_window_has_at_most_so_many_points_and_loses_nothing_in_it(
    rows: Rows, points: int, data: st.DataObject
) -> None:
    history = filled(rows)
    instants = st.integers(int(rows["t_ns"][0]) - 9 * SECOND_NS, int(rows["t_ns"][-1]) + 9 * SECOND_NS)
    from_ns, to_ns = sorted((data.draw(instants), data.draw(instants)))
    step_s, found = history.window(from_ns, to_ns, points)
    assert len(found) <= points
    assert not np.any(found["t_ns"] % (step_s * SECOND_NS)) and np.all(np.diff(found["t_ns"]) > 0)
    level = next(
        (
            number
            for number, (_, capacity) in enumerate(SMALL)
            if len(history.rows(number)) < capacity or history.rows(number)["t_ns"][0] <= from_ns
        ),
        len(SMALL) - 1,
    )
    step_ns = SMALL[level][0] * SECOND_NS
    of = history.rows(level)
    of = of[(of["t_ns"] >= from_ns // step_ns * step_ns) & (of["t_ns"] <= to_ns)]
    for name in SUMS:
        assert np.array_equal(found[name].sum(axis=0), of[name].sum(axis=0)), name


def test_the_memory_of_a_day_is_bounded() -> None:
    """26 hours at a sample a second (every tenth one, to be quick): no level grows, and the newest day is there."""
    history = History()
    stated = history.bytes_at_most
    assert stated <= 2_100_000
    for second in range(0, 26 * 3600, 10):
        row = empty_row()
        row["t_ns"], row["received"] = (1_700_000_000 + second) * SECOND_NS, 1
        history.add(row)
    history.check()
    assert history.bytes_at_most == stated
    assert [len(history.rows(level)) <= capacity + 1 for level, (_, capacity) in enumerate(LEVELS)] == [True] * 3
    end_ns = (1_700_000_000 + 26 * 3600) * SECOND_NS
    step_s, rows = history.window(end_ns - 24 * 3600 * SECOND_NS, end_ns, 2000)
    assert step_s == 60 and len(rows) >= 1439
    assert set(rows["received"][1:-1].tolist()) == {6}


@given(samples(60), st.lists(st.sampled_from([0.3, 0.9, 1.0, 1.0, 1.1, 5.0, 30.0]), max_size=80), samples(20))
@settings(max_examples=150, deadline=None)
def test_a_row_told_by_repetition_is_the_row_at_each_instant(before: Rows, steps: list[float], behind: Rows) -> None:
    """Whatever came before and comes behind: `add_again` leaves every level as `add` one by one does."""
    plain, quick = History(SMALL), History(SMALL)
    for row in np.split(before, len(before)):
        plain.add(row.copy())
        quick.add(row.copy())
    still = before[-1:].copy()
    instants = (int(still["t_ns"][0]) + (np.cumsum(steps) * SECOND_NS).astype(np.int64)).tolist()
    for instant in instants:
        row = still.copy()
        row["t_ns"] = instant
        plain.add(row)
    quick.add_again(still, instants)
    behind["t_ns"] += (instants[-1] if instants else int(still["t_ns"][0])) - behind["t_ns"][0] + SECOND_NS
    for row in np.split(behind, len(behind)):
        for level in range(len(SMALL)):
            assert plain.rows(level).tobytes() == quick.rows(level).tobytes()
        plain.add(row.copy())
        quick.add(row.copy())
    quick.check()
