"""A capture as columns of requests, for passes over it that decode no event: times, sources, arrivals.

Left out is what the feed would have put into quarantine as lying ahead of the arrival clock: it moves no watermark.
Repeated events are in (they are words of their source too). Names and settings are noted on the way. No figures here.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator

import numpy as np

from strandline.core.records import Kind, SettingsRecord, SourcesRecord, decode_small
from strandline.core.settings import Settings

from .basis import TIME_GREATEST, TIME_LEAST, Requests
from .blocks import Block
from .capture import Capture

ROWS = 1 << 18  # blocks of a capture may be small, and a pass carries state and held events from one to the next


class CapturedRequests:
    """The requests of a capture, as often as they are asked for. One block is in memory at a time."""

    def __init__(self, capture: Capture) -> None:
        """Raises CaptureError where the capture begins with a state that cannot be read."""
        self._capture = capture
        state = capture.state()
        self.names: list[str] = [] if state is None else list(state.sources.names)
        self.settings: Settings | None = None if state is None else state.settings
        self.settings_changed = 0  # after the first events, in the passes so far
        first = next(capture.blocks(), None)
        if first is not None:
            self._note(first, settings=True)
        self.tell: Callable[[int], object] = lambda done: None

    def _note(self, block: Block, *, settings: bool) -> None:
        for kind, body in block.smalls(Kind.SOURCES, Kind.SETTINGS):
            match decode_small(kind, body):
                case SourcesRecord(first=first, names=names):
                    self.names[first:] = names
                case SettingsRecord(settings=found):
                    if settings:
                        self.settings = found
                    elif found != self.settings:
                        self.settings_changed += 1

    def blocks(self) -> Iterator[Requests]:
        """All requests that have events, some ROWS rows at a time. Raises CaptureError where a block is damaged."""
        gathered: list[Requests] = []
        for block in self._each():
            gathered.append(block)
            if sum(len(each.times) for each in gathered) >= ROWS:
                yield _joined(gathered)
                gathered = []
        if gathered:
            yield _joined(gathered)

    def _each(self) -> Iterator[Requests]:
        now_ns, done = TIME_LEAST, 0
        self.settings_changed = 0
        for number, block in enumerate(self._capture.blocks()):
            if number:
                self._note(block, settings=False)
            whole = self._requests(block, now_ns)
            done += len(block.times)
            if len(whole.times):
                now_ns = int(whole.instants[-1])
                yield whole
            self.tell(done)

    def _requests(self, block: Block, now_ns: int) -> Requests:
        instants = np.maximum.accumulate(np.clip(block.arrived, now_ns, TIME_GREATEST))
        times, counts, sources = np.clip(block.times, TIME_LEAST, TIME_GREATEST), block.counts, block.sources
        if self.settings is not None and len(times):
            taken = times <= np.repeat(instants + self.settings.ahead_limit_ns, counts)
            if not taken.all():
                ends = np.concatenate(([0], np.cumsum(taken)))
                lasts = np.cumsum(counts)
                counts = ends[lasts] - ends[lasts - counts]
                times, sources = times[taken], sources[taken]
        kept = np.flatnonzero(counts)
        starts = (np.cumsum(counts) - counts)[kept]
        return Requests(times, starts, instants[kept], sources)


def _joined(blocks: list[Requests]) -> Requests:
    """Blocks that follow each other as one."""
    if len(blocks) == 1:
        return blocks[0]
    firsts = np.cumsum([0, *(len(block.times) for block in blocks[:-1])])
    return Requests(
        times=np.concatenate([block.times for block in blocks]),
        starts=np.concatenate([block.starts + first for block, first in zip(blocks, firsts, strict=True)]),
        instants=np.concatenate([block.instants for block in blocks]),
        sources=np.concatenate([block.sources for block in blocks if block.sources is not None]),
    )
