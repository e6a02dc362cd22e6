"""Planted faults in operators' acts and the history of holds: more rows for the table of `planted_faults`."""

from __future__ import annotations

from planted_faults import Fault, Worlds, machine
from planting import Change
from strandline.core.acts import Acts
from strandline.core.feed import Feed
from strandline.core.holds import Holds
from strandline.core.state import State
from strandline.runtime import FeedRuntime

ACT_FAULTS = [
    Fault(
        "a slack set for a time is forgotten at restart",
        (Change(Acts, "restore", 'self.slack_set = msgspec.convert(values["slack"], ActRecord | None)', "pass"),),
        machine,
        "the saved state is another one",
    ),
    Fault(
        "a slack set for a time never ends",
        (Change(Acts, "slack_ended", "chosen.until_ns <= now_ns", "False"),),
        machine,
        "the watermark stands elsewhere|other acts are in force",
    ),
    Fault(
        "a promise is worth more once a shorter slack is set",
        (Change(State, "_fold_act", "self.sources.vouch_again(self.slacks_ns)", "pass"),),
        machine,
        "the watermark stands elsewhere",
    ),
    Fault(
        "a slack set for a time is ended by time that no record tells of",
        (
            Change(
                Feed, "_mark", "or state.acts.slack_ended(now):\n        self._record(effects, IdleRecord(now))",
                "or state.acts.slack_ended(now):\n        state.advance(now)",
            ),
        ),
        machine,
        "other acts are in force|the watermark stands elsewhere|not the folded one",
    ),
    Fault(
        "a tick that leaves no record changes the history of holds",
        (
            Change(
                Feed, "tick", "self._mark(effects, now, only_releasing=True)",
                "self._mark(effects, now, only_releasing=True)\n"
                "    self.state.holds.note(now, ('slack', 0, ''), None)",
            ),
        ),
        machine,
        "the live state is not the folded one",
    ),
    Fault(
        "the history of holds begins anew at a restart",
        (Change(Holds, "restore", "_holder(holder)) for from_ns, holder in rows]", "_holder(holder)) for _ in ()]"),),
        Worlds(0),
        "recovered to another state than the records determine",
    ),
    Fault(
        "a pause is forgotten at restart",
        (
            Change(
                Feed, "start", "(self.next_lsn, Pause(sink, True)) for sink in self.state.acts.paused", "() for _ in ()"
            ),
        ),
        Worlds(0, "rolling_stops"),
        "paused are .* by the records",
    ),
    Fault(
        "a pause before its record is durable",
        (
            Change(
                Feed, "pause", "self._waiting.append((self.next_lsn, Pause(sink, on)))",
                "effects.append(Pause(sink, on))",
            ),
        ),
        machine,
        "a pause left before it was durable",
    ),
    Fault(
        "a resumed sink stays paused",
        (Change(FeedRuntime, "_pause", "worker.pause if effect.on else worker.resume", "worker.pause"),),
        Worlds(0, "rolling_stops"),
        "paused are .* by the records",
    ),
]  # fmt: skip
