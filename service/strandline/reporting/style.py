"""How a report looks: its style sheet and what it allows a browser to do. Text only; no fact in it.

Marks are of the palette of M. Okabe and K. Ito ("Color Universal Design", 2002), which people with any colour vision
can tell apart; on a light ground its pale ones get an outline in the ink's colour, so none is told by its hue alone.
"""

from __future__ import annotations

POLICY = "default-src 'none'; style-src 'unsafe-inline'; base-uri 'none'; form-action 'none'"
BLACK, ORANGE, SKY, GREEN = "#000000", "#E69F00", "#56B4E9", "#009E73"
YELLOW, BLUE, VERMILLION, PURPLE = "#F0E442", "#0072B2", "#D55E00", "#CC79A7"
LIGHT = {"ground": "#FFFFFF", "ink": "#1A1A1A", "soft": "#595959", "grid": "#D8D8D8", "box": "#F4F4F4", "line": BLUE}
DARK = {"ground": "#15181B", "ink": "#ECECEC", "soft": "#B0B0B0", "grid": "#3A3E42", "box": "#22262A", "line": SKY}


def _set(colours: dict[str, str]) -> str:
    return " ".join(f"--{name}: {value};" for name, value in colours.items())


STYLE = f""":root {{ color-scheme: light dark; {_set(LIGHT)} }}
@media screen and (prefers-color-scheme: dark) {{ :root {{ {_set(DARK)} }} }}
body {{ margin: 0; background: var(--ground); color: var(--ink); font: 16px/1.5 system-ui, sans-serif; }}
main {{ max-width: 62rem; margin: 0 auto; padding: 1.5rem; }}
h1 {{ font-size: 1.5rem; line-height: 1.25; margin: 0 0 .5rem; overflow-wrap: anywhere; }}
h2 {{ font-size: 1.2rem; margin: 2rem 0 .5rem; }}
p, li {{ max-width: 48rem; overflow-wrap: break-word; }}
ul {{ padding-left: 1.2rem; margin: .5rem 0; }}
li {{ margin: .3rem 0; }}
.soft, footer {{ color: var(--soft); font-size: .875rem; }}
.caution {{ border-left: 4px solid {VERMILLION}; background: var(--box); padding: .6rem .9rem; }}
figure {{ margin: 1rem 0; overflow-x: auto; }}
svg {{ width: 100%; min-width: 44rem; height: auto; display: block; font: 12px system-ui, sans-serif; }}
svg text {{ fill: var(--ink); }}
svg text.dim {{ fill: var(--soft); }}
svg .grid {{ stroke: var(--grid); }}
svg .line {{ fill: none; stroke: var(--line); stroke-width: 1.5; }}
svg .area {{ fill: var(--line); opacity: .15; }}
svg .edge {{ stroke: var(--ink); stroke-width: .75; }}
svg .quiet {{ fill: var(--grid); }}
svg .dark {{ fill: var(--ink); }}
svg .unknown {{ fill: var(--box); stroke: var(--soft); stroke-dasharray: 4 3; }}
svg .act {{ stroke: var(--ink); stroke-dasharray: 2 3; }}
table {{ border-collapse: collapse; font-size: .875rem; font-variant-numeric: tabular-nums; }}
.wide {{ max-width: 100%; overflow-x: auto; margin: 1rem 0; }}
caption {{ text-align: left; font-weight: 600; padding: .3rem 0; }}
th, td {{ text-align: left; padding: .2rem 1.2rem .2rem 0; border-bottom: 1px solid var(--grid); vertical-align: top; }}
bdi {{ overflow-wrap: anywhere; }}
thead th {{ color: var(--soft); font-weight: 600; vertical-align: bottom; }}
.number {{ text-align: right; white-space: nowrap; }}
details > summary {{ cursor: pointer; font-weight: 600; font-size: .875rem; margin: 1rem 0 .3rem; }}
footer {{ margin-top: 2.5rem; border-top: 1px solid var(--grid); }}
@media print {{ body {{ font-size: 10pt; }} main {{ max-width: none; padding: 0; }} h2 {{ break-after: avoid; }}
  figure, tr, .caution {{ break-inside: avoid; }} caption {{ break-after: avoid; }} svg {{ min-width: 0; }}
  svg * {{ print-color-adjust: exact; -webkit-print-color-adjust: exact; }}
  .wide {{ overflow: visible; }} table {{ font-size: 8.5pt; }} th, td {{ padding: .1rem .8rem .1rem 0; }} }}
"""
