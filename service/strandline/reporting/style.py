"""How a report of an incident looks: its colours and its own rules. Text only; no fact in it.

On a light ground the palette's pale marks get an outline in the ink's colour, so none is told by its hue alone.
"""

from __future__ import annotations

from ..page_style import DARK as DARK_GROUND
from ..page_style import LIGHT as LIGHT_GROUND
from ..page_style import OKABE_ITO, style_sheet

LIGHT = LIGHT_GROUND | {"line": OKABE_ITO["blue"]}
DARK = DARK_GROUND | {"line": OKABE_ITO["sky blue"]}

STYLE = style_sheet(
    LIGHT,
    DARK,
    """p, li { max-width: 48rem; overflow-wrap: break-word; }
ul { padding-left: 1.2rem; margin: .5rem 0; }
li { margin: .3rem 0; }
.soft { color: var(--soft); font-size: .875rem; }
figure { overflow-x: auto; }
svg { min-width: 44rem; font: 12px system-ui, sans-serif; }
svg text { fill: var(--ink); }
svg text.dim { fill: var(--soft); }
svg .grid { stroke: var(--grid); }
svg .line { fill: none; stroke: var(--line); stroke-width: 1.5; }
svg .area { fill: var(--line); opacity: .15; }
svg .edge { stroke: var(--ink); stroke-width: .75; }
svg .quiet { fill: var(--grid); }
svg .dark { fill: var(--ink); }
svg .unknown { fill: var(--box); stroke: var(--soft); stroke-dasharray: 4 3; }
svg .act { stroke: var(--ink); stroke-dasharray: 2 3; }
th, td { text-align: left; padding: .2rem 1.2rem .2rem 0; }
bdi { overflow-wrap: anywhere; }
.number { text-align: right; white-space: nowrap; }
@media print { svg { min-width: 0; }
  svg * { print-color-adjust: exact; -webkit-print-color-adjust: exact; }
  th, td { padding: .1rem .8rem .1rem 0; } }
""",
)
