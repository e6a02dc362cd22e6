"""What the page of the benchmark says beside its figures. Words only."""

from __future__ import annotations

from typing import NamedTuple


class Section(NamedTuple):
    """A table of the rows whose names begin so."""

    title: str
    prefixes: tuple[str, ...]
    about: str


ABOUT = """# What Strandline costs

This page is made by `python -m strandline_loadgen bench --page deploy/benchmark.md` from a kept result; do not edit it.
A new result: `python -m strandline_loadgen bench --full --json tests/bench/results/DATE.json`, on a machine that does
nothing else. Without `--full` it measures up to a million events held. How long a run took, and in how many rounds, is
told with it below.

Each row sets Strandline against a yardstick that is measured in the same visit, one after the other, and all rows are
visited in turn, round after round. So read the ratios: they carry over to other machines, the times beside them do not.
Medians over the rounds, with the least and the greatest. Before a row is measured, what comes out is compared with what
must come out; a run that loses or disorders anything has no figure.

> Ordering delays data by the slack, up to `hold_at_most`, and longer in an incident (a paused or full sink, the service
> down); late events are not in the ordered output at all. No alarm path that protects people may depend on the ordered
> output alone: take such alarms from the raw feed, and follow local rules and the judgement of licensed people where
> the data guards life."""

ORDERING = """Only keeping events in order, without HTTP, decoding, journal and sinks. Requests of 5,000 events; so many
events are held all the time, and as many leave as come. Shapes: sorted; 1 % come up to the slack late; exponential
delays with a mean of a fifth of the slack; gateways that send in bursts, each at its own period of up to the slack (64,
and 2,048 at 10^7 held: bursts of 64 would be longer than what is measured);
random: delays drawn evenly up to the slack; reversed: blocks of requests that come from the newest event to the oldest.

The peers: a stable re-sort of everything held at each request, by numpy (`argsort`, by index) and of keys packed with
their row numbers (our own `sorting.py`); `list.sort` over all tuples held; `heapq`, a push and a pop for each event;
`SortedKeyList` of sortedcontainers; `bisect.insort` into one list; a polars DataFrame, sorted with `maintain_order`.
Those that keep Python objects get them ready-made and are not charged for making them. Processor time, but for polars,
which has threads of its own: wall time. 80 requests are measured, 40 at 10^7 held; there those that sort anew are
measured over four, and `bisect.insort` from 500,000 held on over one."""

LOSES = """## Where it loses

* **Little is held.** With some 10,000 events held, one sort of everything at each request takes no longer where much is
  in disorder, and less where 1 % is late: there `numpy.argsort` has two runs to merge, and finds them in compiled code.
  Who holds that little and takes large requests needs no runs.
* **A heap at a million and more.** `heapq` costs one to two microseconds an event whatever the shape, as long as the
  caches bear it. Runs are ahead of it by the factor shown, but by two orders only where the feed is in order: what is
  merged out of many open runs has to be compared, however it is done, and each event that leaves has to be fetched from
  memory that no cache holds.
* **Delays that grow with the slack.** With the same delays and more slack the cost stays what it was. Where the delays
  grow as well, more runs are open, and the cost grows with their logarithm and with the memory that a merge walks.
* **Small requests.** Each pays for its record, its answer and its part of a sync, in the interpreter.
* **The heap per event** is above the two columns by what the arrivals and the runs themselves need."""

SECTIONS = (
    Section(
        "From body to ordered bytes",
        ("body to ordered bytes",),
        "The service's decoder, core, a journal in memory and the gathering of released lines, over `decode_lines` of "
        "msgspec into two members, on the same bodies. Processor time.",
    ),
    Section(
        "Bodies of Arrow columns",
        ("Arrow",),
        "The same way for bodies of Arrow columns, whose rows become lines of JSON; beside it what each part takes.",
    ),
    Section(
        "How the core's cost grows",
        ("growth",),
        "The whole core in the steady state; the cost of an event at the larger end over that at the smaller one.",
    ),
    Section("Memory", ("heap",), "Heap bytes for each event held (tracemalloc), with the journal on a disk."),
    Section(
        "The journal",
        ("journal",),
        "Share of the rate of one write and one fdatasync a group, of the same bytes in the same groups.",
    ),
    Section(
        "The whole service over HTTP",
        ("service",),
        "Share of the rate of a bare handler (aiohttp, the same decoder, one checksum, one sync for all who wait, "
        "nothing kept); and with ordering on, share of the rate at which the same service passes everything through as "
        "it arrives (every event has the same time, slack 0). Sender and server share the cores.",
    ),
    Section("Brokers", ("taking from",), "Events taken from a broker's messages, up to the acknowledgement."),
    Section(
        "A partition of a cluster",
        ("a partition",),
        "Share of the rate of an intake with a journal of its own; the rate with a log on three brokers, which here "
        "take the cores from it; and the time in which another instance takes over, everything being held.",
    ),
    Section(
        "Release latency",
        ("release latency",),
        "From the arrival that let the watermark pass an event to the SQLite commit that holds it, at half the highest "
        "rate, on a fixed schedule.",
    ),
    Section(
        "Doing nothing", ("idle",), "Processor time of the process (/proc) over 20 s in which nobody sends anything."
    ),
    Section(
        "Stores",
        ("rows into SQLite", "COPY into PostgreSQL"),
        "Share of the rate of the driver's own bulk load of ready-made rows at equal commit size: `executemany` in one "
        "transaction, and `copy_records_to_table` of asyncpg. The sinks make their rows from lines and keep their "
        "position in the same transaction.",
    ),
    Section("Starting again", ("recovery",), "Folding the journal, from the page cache, until the first request."),
    Section("Limits of the machine", ("limit",), "What no ingest here can be faster than."),
)
