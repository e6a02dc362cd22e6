"""Planted faults in order within sources: more rows for the table of `planted_faults`."""

from __future__ import annotations

from planted_faults import Fault, Worlds
from planting import Change
from strandline.core import state as state_module
from strandline.core.own import OwnWatermarks

ORDER_FAULTS = [
    Fault(
        "late is judged by the feed's watermark although each source has its own",
        (Change(state_module, "late_rows", "if state.own is not None:", "if False:"),),
        Worlds(0),
        "held behind the watermark of its source|from before its source's watermark",
    ),
    Fault(
        "sources' watermarks are forgotten at restart",
        (Change(OwnWatermarks, "restore", "self.at[:] = at", "pass"),),
        Worlds(0),
        "recovered to another state|from before its source's watermark",
    ),
    Fault(
        "what lies before the most advanced watermark is let go, whichever source it is of",
        (
            Change(
                OwnWatermarks, "release", "return held.release(numbers, self.at)",
                "return held.release(np.arange(len(self.at)), np.full_like(self.at, self.at.max()))",
            ),
        ),
        Worlds(0),
        "that its source has not passed|disordered +[1-9]",
    ),
]
