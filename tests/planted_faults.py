"""Faults that somebody could make, each as a change of the real code, with the harness that finds it and what it says.

The table of `fault/test_planted_faults`. One row a fault; a feature that comes later brings its own rows.
"""

from __future__ import annotations

import random
from collections.abc import Callable
from dataclasses import dataclass

import sim_cases
from feed_machine import FeedMachine
from helpers_feed import Shell, saved_bytes
from hypothesis import HealthCheck, Phase, seed, settings
from hypothesis.stateful import run_state_machine_as_test
from planting import Change
from sim_ordeal import the_power_fails_before_each, the_process_dies_at_each
from simulate import play
from strandline.core import saved
from strandline.core import state as state_module
from strandline.core.feed import Feed
from strandline.core.fresh import Fresh
from strandline.core.held import Held
from strandline.core.merge import Merger
from strandline.core.near import Near
from strandline.core.runs import OpenRuns
from strandline.core.settings import Settings
from strandline.core.sources import Sources
from strandline.core.state import State
from strandline.housekeeping import Housekeeper
from strandline.journal import journal as journal_module
from strandline.journal import reading, recovery
from strandline.journal.journal import Journal
from strandline.journal.spares import Spares
from strandline.runtime import FeedRuntime
from strandline.sinks.rolling import RollingSink
from strandline.sinks.sqlite import SqliteSink

SEEDS_AT_MOST = 80  # from the first one that is named; each fault was found within 20 when this was written


# ---- harnesses: each raises what it found ---------------------------------------------------------------------------


@dataclass(frozen=True)
class Worlds:
    """The simulation, from a seed on, of one pattern or of any."""

    first: int
    pattern: str | None = None

    def __call__(self) -> None:
        for number in range(self.first, self.first + SEEDS_AT_MOST):
            self.look(number)

    def look(self, number: int) -> None:
        play(number, self.pattern)


def machine() -> None:
    """The state machine, from several seeds."""
    chosen = settings(
        max_examples=150,
        stateful_step_count=40,
        database=None,
        deadline=None,
        phases=[Phase.generate],
        suppress_health_check=list(HealthCheck),
    )
    for number in range(11, 19):  # one seed alone may miss a fault: what is drawn depends on what ran before
        run_state_machine_as_test(seed(number)(FeedMachine), settings=chosen)


def a_saved_state_goes_on_counting() -> None:
    """All that was released is taken, so that nothing but the saved numbers tells where they went on."""
    shell = Shell(Settings("river-gauges"), sinks={"store": ["ordered"]})
    shell.events([3, 1, 2], 10)
    shell.act("drain", now_ns=11)
    shell.taken("store", "ordered", 1, 12)
    saved = saved_bytes(shell.feed)
    assert saved_bytes(shell.folded(saved, shell.feed.next_lsn)) == saved, "the saved state is another one"


def power() -> None:
    """The same story, with power failures before each operation."""
    the_power_fails_before_each(random.Random(20_260_301))


def deaths_in_stores() -> None:
    """The same story, in which the process dies at each step of a store's work."""
    the_process_dies_at_each("store")


# ---- the table ------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Fault:
    """One fault: what is changed, who finds it, and what is said (a pattern)."""

    name: str
    changes: tuple[Change, ...]
    harness: Callable[[], None]
    says: str


FAULTS = [
    Fault(
        "acknowledge before sync",
        (
            Change(
                Feed, "arrive", "self._waiting.append((self.next_lsn, Answer(token, outcome)))",
                "effects.append(Answer(token, outcome))",
            ),
        ),
        Worlds(0),
        "lost +[1-9]",
    ),
    Fault(
        "acknowledge before sync, in the core alone",
        (
            Change(
                Feed, "arrive", "self._waiting.append((self.next_lsn, Answer(token, outcome)))",
                "effects.append(Answer(token, outcome))",
            ),
        ),
        machine,
        "answered before it was durable",
    ),
    Fault(
        "release before its mark is durable",
        (
            Change(
                Feed, "_set", "self._waiting.append((self.next_lsn, Deliver(batch)))", "effects.append(Deliver(batch))"
            ),
        ),
        Worlds(0),
        "left before the record that justifies it was durable",
    ),
    Fault(
        "retry a failed sync",
        (
            Change(
                journal_module, "write_group", "    file.sync()\n",
                "    try:\n        file.sync()\n    except OSError:\n        file.sync()\n",
            ),
        ),
        Worlds(0, "full_disk"),
        "although the journal was durable|durable up to .* recovered up to|is not intact",
    ),
    Fault(
        "ignore a checksum",
        (
            Change(recovery, "intact_end", " or value(flat[offset + 4 : end]) != crc", ""),
            Change(reading, "intact_end", " or value(flat[offset + 4 : end]) != crc", ""),
            Change(reading, "decode_frame", "google_crc32c.value(flat[offset + 4 : end]) != crc", "False"),
        ),
        Worlds(0),
        "the record at .* changed|ValidationError|DecodeError|does not hold what it says",
    ),
    Fault(
        "ignore a checksum, one story",
        (
            Change(recovery, "intact_end", " or value(flat[offset + 4 : end]) != crc", ""),
            Change(reading, "intact_end", " or value(flat[offset + 4 : end]) != crc", ""),
            Change(reading, "decode_frame", "google_crc32c.value(flat[offset + 4 : end]) != crc", "False"),
        ),
        power,
        "the record at .* changed|ValidationError|DecodeError|does not hold what it says",
    ),
    Fault(
        "< for <=: an event at the watermark is judged late",
        (
            Change(
                state_module, "late_rows",
                "return times < state.watermark_ns if least_of(times) < state.watermark_ns else None",
                "return times <= state.watermark_ns if least_of(times) <= state.watermark_ns else None",
            ),
        ),
        machine,
        "must be held|the records say",
    ),
    Fault(
        "< for <=: an event at the watermark is not released with it",
        (Change(OpenRuns, "cut", "self._heads[:count] <= watermark", "self._heads[:count] < watermark"),),
        machine,
        "must be held",
    ),
    Fault(
        "< for <=: a run takes no event that equals its tail",
        (Change(OpenRuns, "_taker", "turned.searchsorted(~time)", 'turned.searchsorted(~time, side="right")'),),
        Worlds(0, "ties"),
        r"tails must strictly descend|self\.runs\[index\]\.append\(piece\)[\s\S]*IndexError",
    ),
    Fault(
        "duplicate window lost at restart",
        (Change(saved, "_restored", "state.seen.restore(columns.get(np.uint64), columns.get(np.uint64))",
                "columns.get(np.uint64), columns.get(np.uint64)"),),
        Worlds(0, "storm"),
        "recovered to another state than the records determine|a repeat was not recognised",
    ),
    Fault(
        "late counted twice",
        (Change(State, "fold_arrival", "ledger.late += late", "ledger.late += 2 * late"),),
        machine,
        "books do not balance",
    ),
    Fault(
        "late told twice",
        (
            Change(
                State, "fold_arrival", "Outcome(received, len(times), late,", "Outcome(received, len(times), 2 * late,"
            ),
        ),
        Worlds(0),
        "AssertionError: Outcome",
    ),
    Fault(
        "segment deleted too early",
        (Change(Journal, "drop_before", "self._segments[1].first_lsn <= lsn", "self._segments[0].first_lsn <= lsn"),),
        Worlds(0),
        "no usable snapshot|is no longer kept|were asked for, but only",
    ),
    Fault(
        "ties reversed",
        (Change(Merger, "_interleave", "strand = joined(heads)", "strand = joined(heads[::-1])"),),
        Worlds(0, "ties"),
        "against the order of arrival",
    ),
    Fault(
        "fresh rows overtake older ones once they are sorted",
        (Change(Fresh, "take", "parts.append(self._small.strand)", "parts.insert(0, self._small.strand)"),),
        Worlds(0, "ties"),
        "against the order of arrival",
    ),
    Fault(
        "strands near their release joined in the wrong order of age",
        (Change(Near, "_join_youngest", "merge(self.strands[first:])", "merge(self.strands[first:][::-1])"),),
        Worlds(1, "ties"),
        "against the order of arrival",
    ),
    Fault(
        "rows beyond the bound stay there when it moves on",
        (Change(Held, "_fetch", "if self.far.rows:", "if False:"),),
        Worlds(0, "ties"),
        "AssertionError",
    ),
    Fault(
        "mark journaled before the arrival that it follows",
        (
            Change(
                Feed, "arrive", "    return self._done(effects, sync=True)",
                "    __import__('planting').marks_first(effects)\n    return self._done(effects, sync=True)",
            ),
        ),
        Worlds(0),
        "is not what the journal's records determine|recovered to another state",
    ),
    Fault(
        "idle source not woken",
        (
            Change(Sources, "_word", "self.active[source] = True", "pass"),
            Change(Sources, "hear", "self.active[numbers] = True", "pass"),
        ),
        machine,
        r"the watermark stands elsewhere|assert np\.array_equal\(self._by_heard",
    ),
    Fault(
        "a segment's name is not made durable",
        (Change(journal_module, "write_group", "        disk.sync_directory(directory)\n", ""),),
        Worlds(0),
        "durable up to .* recovered up to|is missing|not intact",
    ),
    Fault(
        "sinks' positions are told before the start",
        (Change(FeedRuntime, "_tell_positions", "while self._started and self._untold", "while self._untold"),),
        Worlds(0),
        "lost +[1-9]",
    ),
    Fault(
        "room counts as short only where no spare segment lies ready",
        (Change(Journal, "short_of_room", "return full or self._short", "return self.lacks_spare"),),
        Worlds(0),
        "not quiet .*journal_full",
    ),
    Fault(
        "forget the watermark at restart",
        (
            Change(
                State, "_fold_settings", "self.sources.keep_alive(record.now_ns)",
                "self.sources.keep_alive(record.now_ns)\n        self.watermark_ns = TIME_MIN",
            ),
        ),
        machine,
        "another watermark than the records say|the watermark goes back",
    ),
    Fault(
        "forget the watermark at restart, as stores see it",
        (
            Change(
                State, "_fold_settings", "self.sources.keep_alive(record.now_ns)",
                "self.sources.keep_alive(record.now_ns)\n        self.watermark_ns = TIME_MIN",
            ),
        ),
        Worlds(50),
        "from before a watermark that stood earlier|disordered +[1-9]|mark.watermark_ns >= before",
    ),
    Fault(
        "position written outside the store's transaction",
        (
            Change(
                SqliteSink, "_write", 'connection.execute("INSERT OR REPLACE',
                'connection.execute("COMMIT")\n        connection.execute("BEGIN IMMEDIATE")\n'
                '        connection.execute("INSERT OR REPLACE',
            ),
        ),
        deaths_in_stores,
        "duplicated +[1-9]|holds rows already|hold other late events",
    ),
    Fault(
        "a key's answer is given while its record is not durable",
        (Change(Feed, "_known", "kept.end_lsn > self.durable_lsn", "False"),),
        Worlds(150, "storm"),
        "lost +[1-9]|two answers",
    ),
    Fault(
        "snapshot taken before its records are durable",
        (
            Change(Housekeeper, "save", "await self._settle()", "pass"),
            Change(Journal, "write_snapshot", "lsn > self._durable_lsn", "False"),
        ),
        Worlds(45),
        "it was taken at position",
    ),
    Fault(
        "batch numbers not continued after restart",
        (Change(saved, "_restore_outbox", 'outbox.next_number.update(header["next_number"])', "pass"),),
        a_saved_state_goes_on_counting,
        "the saved state is another one",
    ),
    Fault(
        "a store that opens late is told of before the start, one story",
        (Change(FeedRuntime, "_tell_positions", "while self._started and self._untold", "while self._untold"),),
        sim_cases.a_store_that_answers_before_the_start_lets_nothing_be_released,
        "lost +[1-9]",
    ),
    Fault(
        "spare segments that are too small gather",
        (
            Change(
                Spares, "make", "[*(spare for spare in self._spares if spare.size > size), Spare(path, size, file)]",
                "sorted([*self._spares, Spare(path, size, file)], key=lambda spare: -spare.size)",
                (("for spare in replaced:", "for spare in []:"),),
            ),
        ),
        sim_cases.spare_segments_that_are_too_small_make_room,
        "more would take the segments to",
    ),
    Fault(
        "a reservation that fails is told to nobody",
        (
            Change(FeedRuntime, "has_headroom", "self.fail(error)", "pass"),
            Change(FeedRuntime, "_reserve", "self.fail(error)", "pass"),
        ),
        sim_cases.a_journal_that_fails_while_room_is_reserved_ends_the_service,
        r'assert story\.process is None and story\.tally\.counts\["failed"\] == 1',
    ),
    Fault(
        "files end where they happen to end after a crash",
        (Change(RollingSink, "_noted", "return first - 1, last", "return 0, 0"),),
        sim_cases.files_that_were_fetched_before_a_crash_are_not_repeated_in_part,
        "holds repeats and more",
    ),
]
