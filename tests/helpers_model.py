"""The rule of the watermark in plain Python, for tests to hold the feed against. It shares no code with the service.

Lists and dictionaries only, everything looked at anew each time; costs grow with all that is held.
"""

from __future__ import annotations

from dataclasses import dataclass, field

NEVER = -(2**63)


@dataclass(slots=True)
class Known:
    """What every rule knows of one source."""

    newest: int = NEVER
    heard: int = NEVER
    active: bool = False
    excused: bool = False


@dataclass(slots=True)
class ModelSource(Known):
    """What the rule knows of one source."""

    vouched: int = NEVER


@dataclass(slots=True)
class Model:
    """One feed. Times in ns; `held` are (event time, number of the event, when it came)."""

    slack: int
    idle_after: int
    hold_at_most: int
    ahead_limit: int
    clock: str = "event"
    undelivered_at_most: int = 2**60
    now: int = NEVER
    watermark: int = NEVER
    newest: int = NEVER
    sources: dict[str, ModelSource] = field(default_factory=dict)
    held: list[tuple[int, int, int]] = field(default_factory=list)
    released: list[tuple[int, int]] = field(default_factory=list)
    late: list[int] = field(default_factory=list)
    ahead: list[int] = field(default_factory=list)
    repeats: list[int] = field(default_factory=list)
    identities: set[int | None] = field(default_factory=set)
    undelivered: int = 0

    def start(self, names: tuple[str, ...], now: int) -> None:
        """The feed begins; these sources hold it from the start."""
        self.now = now
        for name in names:
            source = self.sources.setdefault(name, ModelSource())
            if not source.active:
                source.active, source.heard = True, now

    def candidate(self) -> int:
        """Where the watermark may stand: the rule of DESIGN section 4 and 6."""
        for source in self.sources.values():
            source.active = source.active and source.heard > self.now - self.idle_after
        counted = [source for source in self.sources.values() if source.active and not source.excused]
        waited_for = [max(source.newest, source.vouched) for source in counted]
        if self.clock == "arrival":
            place = self.now - self.slack
        else:
            place = max(NEVER, min(waited_for, default=self.newest) - self.slack)
        return max([place, *(time for time, _, came in self.held if came <= self.now - self.hold_at_most)])

    def mark(self, *, only_releasing: bool) -> None:
        place = max(self.watermark, self.candidate())
        out = sorted((time, number) for time, number, _ in self.held if time <= place)
        if self.undelivered > self.undelivered_at_most or (only_releasing and not out):
            return
        self.watermark = place
        self.held = [row for row in self.held if row[0] > place]
        self.released += out
        self.undelivered += len(out)

    def arrive(self, events: list[tuple[int, int, str, int | None]], now: int) -> None:
        """Events (time, number, source, identity or None) of one request."""
        self.now = max(self.now, now)
        self.mark(only_releasing=False)
        stood = self.watermark
        for time, number, name, identity in events:
            source = self.sources.setdefault(name, ModelSource())
            if time > self.now + self.ahead_limit:
                self.ahead.append(number)
                continue
            source.newest, source.heard = max(source.newest, time), self.now
            source.active, source.excused = True, False
            self.newest = max(self.newest, time)
            if identity in self.identities:
                self.repeats.append(number)
                continue
            self.identities |= {identity} - {None}
            if time < stood:
                self.late.append(number)
            else:
                self.held.append((time, number, self.now))
        self.mark(only_releasing=False)

    def tick(self, now: int) -> None:
        self.now = max(self.now, now)
        self.mark(only_releasing=True)

    def promise(self, name: str, time: int, now: int) -> None:
        self.now = max(self.now, now)
        if time <= self.now + self.ahead_limit:
            self.candidate()
            source = self.sources.setdefault(name, ModelSource())
            # Nothing older will come: the watermark may go up to the promise, no slack taken off.
            source.vouched = max(source.vouched, time + self.slack)
            source.heard, source.active, source.excused = self.now, True, False
            self.mark(only_releasing=False)

    def excuse(self, name: str, now: int) -> None:
        self.now = max(self.now, now)
        self.sources[name].excused = True
        self.mark(only_releasing=False)

    def drain(self, now: int) -> None:
        self.now = max(self.now, now)
        place = max([self.watermark, *(time for time, _, _ in self.held)])
        out = sorted((time, number) for time, number, _ in self.held)
        self.watermark, self.held = place, []
        self.released += out
        self.undelivered += len(out)
        self.mark(only_releasing=False)
