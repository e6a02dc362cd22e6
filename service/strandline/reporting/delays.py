"""How far the output was behind in each stall, and when it was current again, from the steps that are known. Pure."""

from __future__ import annotations

from bisect import bisect_left, bisect_right
from collections.abc import Sequence

from msgspec import structs

from .facts import Delay, Series, Stall, tenth
from .holding import STALL_AT_LEAST_NS

# Between two samples the newest event time moves by about a second, and the watermark with it.
NEAR_NS = 1_000_000_000
UNKNOWN = Delay(usual_ns=None, worst_ns=None, worst_at_ns=None, current_ns=None, again_at_ns=None)


class Behind:
    """How far the output was behind in the whole time, to be asked about parts of it."""

    def __init__(self, series: Series) -> None:
        self.series = series
        self.usual_ns = _usual(series)

    def fallen(self, stall: Stall) -> Stall | None:
        """What is a stall of a time in which a source was furthest behind: from where to where the output was late.

        None where it was never STALL_AT_LEAST_NS further behind than usual, as far as is known.
        """
        series, usual_ns = self.series, self.usual_ns
        # A step that had begun before may tell of whoever held the feed before.
        places = [at for at in self._places(stall) if series.t_ns[at] >= stall.from_ns]
        if usual_ns is None or not places:
            return None
        worst_ns, slack_ns = max(self._at(at) for at in places), max(series.slack_ns[at] for at in places)
        if worst_ns < max(usual_ns, slack_ns) + STALL_AT_LEAST_NS:
            return None
        current_ns = max(usual_ns, slack_ns) + max(NEAR_NS, series.step_ns)
        out = [at for at in places if self._at(at) > current_ns]
        if not out:
            return None
        return _cut(stall, tenth(series.t_ns[out[0]]), tenth(series.t_ns[out[-1]] + series.step_ns))

    def delay(self, stall: Stall) -> Delay:
        """Current again: not further behind than usual, or than the slack, to the nearest second or step."""
        series, usual_ns, places = self.series, self.usual_ns, self._places(stall)
        if usual_ns is None or not places:
            return UNKNOWN
        worst_at = max(places, key=lambda at: (self._at(at), -at))
        worst_ns = self._at(worst_at)
        current_ns = max(usual_ns, series.slack_ns[worst_at]) + max(NEAR_NS, series.step_ns)
        again_at_ns = None
        if not stall.goes_on and worst_ns > current_ns:
            first = max(worst_at, bisect_left(series.t_ns, stall.to_ns - series.step_ns))
            again = (at for at in range(first, len(series.t_ns)) if series.behind_ns[at] is not None)
            again_at_ns = next((series.t_ns[at] for at in again if self._at(at) <= current_ns), None)
        return Delay(
            usual_ns=usual_ns,
            worst_ns=worst_ns,
            worst_at_ns=series.t_ns[worst_at],
            current_ns=current_ns,
            again_at_ns=again_at_ns,
        )

    def _places(self, stall: Stall) -> list[int]:
        """The steps that lie in a stall, at least in part, and of which something is known; after a stop the next."""
        series = self.series
        first = bisect_right(series.t_ns, stall.from_ns - series.step_ns)
        past = bisect_right(series.t_ns, stall.to_ns)
        if stall.phases[0].why == "stopped":
            first, past = past, past + 1
        return [at for at in range(first, min(past, len(series.t_ns))) if series.behind_ns[at] is not None]

    def _at(self, place: int) -> int:
        return self.series.behind_ns[place] or 0


def _usual(series: Series) -> int | None:
    """The median of how far behind the output was; a tenth from below where much of the time was far worse than that.

    So it is what is usual also where a report is of little more than the incident.
    """
    values = sorted(value for value in series.behind_ns if value is not None)
    if not values:
        return None
    low, middle = values[len(values) // 10], values[len(values) // 2]
    return middle if middle - low < STALL_AT_LEAST_NS else low


def _cut(stall: Stall, from_ns: int, to_ns: int) -> Stall | None:
    from_ns, to_ns = max(stall.from_ns, from_ns), min(stall.to_ns, to_ns)
    phases = [
        structs.replace(phase, from_ns=max(phase.from_ns, from_ns), to_ns=min(phase.to_ns, to_ns))
        for phase in stall.phases
        if phase.from_ns < to_ns and phase.to_ns > from_ns
    ]
    began_before, goes_on = stall.began_before and from_ns == stall.from_ns, stall.goes_on and to_ns == stall.to_ns
    return structs.replace(stall, phases=phases, began_before=began_before, goes_on=goes_on) if phases else None


def worst_of(series: Series, values: Sequence[int | None]) -> tuple[int, int] | None:
    """The greatest of a column and the first step that has it; None where there is none."""
    seen = [(value, -t_ns) for value, t_ns in zip(values, series.t_ns, strict=True) if value is not None]
    if not seen:
        return None
    value, t_ns = max(seen)
    return value, -t_ns
