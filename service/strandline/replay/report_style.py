"""How the report of an advice looks: its colours and its own rules. Text only; nothing of an answer in it.

Both sets of colours are of the palette; each stands out from its ground by 3 to 1 and more (WCAG 2.2, 1.4.11), as a
test works out.
"""

from __future__ import annotations

from ..page_style import DARK as DARK_GROUND
from ..page_style import LIGHT as LIGHT_GROUND
from ..page_style import OKABE_ITO, style_sheet

LIGHT = LIGHT_GROUND | {name: OKABE_ITO[of] for name, of in (("one", "blue"), ("other", "vermillion"))}
DARK = DARK_GROUND | {name: OKABE_ITO[of] for name, of in (("one", "sky blue"), ("other", "orange"))}
LIGHT["chosen"] = DARK["chosen"] = OKABE_ITO["bluish green"]

STYLE = style_sheet(
    LIGHT,
    DARK,
    """dl { display: grid; grid-template-columns: max-content 1fr; gap: .3rem 1rem; margin: 1rem 0; }
dt { color: var(--soft); }
dd { margin: 0; }
pre { background: var(--box); padding: .8rem; overflow-x: auto; white-space: pre-wrap; overflow-wrap: anywhere; }
svg * { stroke-linejoin: round; stroke-linecap: butt; }
.wide { display: inline-block; vertical-align: top; margin-right: 2.5rem; }
th, td { text-align: right; padding: .2rem .7rem; }
th:first-child, td:first-child { text-align: left; padding-left: 0; }
tbody th { font-weight: 400; min-width: 7rem; max-width: 24rem; overflow-wrap: anywhere; }
@media (max-width: 40rem) { dl { grid-template-columns: 1fr; } dt { margin-top: .4rem; }
  svg { min-width: 34rem; } figure { overflow-x: auto; } }
@media print { .wide { display: block; } th, td { padding: .1rem .35rem; } }
""",
)
