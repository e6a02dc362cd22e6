"""How a report looks: its style sheet, and what it allows a browser to do. Text only; nothing of an answer in it.

Both sets of colours are of the palette that `pictures` names; each stands out from its ground by 3 to 1 and more
(WCAG 2.2, 1.4.11), texts by 4.5 to 1 (1.4.3). A test works these out.
"""

from __future__ import annotations

POLICY = "default-src 'none'; style-src 'unsafe-inline'; base-uri 'none'; form-action 'none'"
LIGHT = {"ground": "#FFFFFF", "ink": "#1A1A1A", "soft": "#595959", "grid": "#DDDDDD", "box": "#F4F4F4"}
LIGHT |= {"one": "#0072B2", "other": "#D55E00", "chosen": "#009E73"}
DARK = {"ground": "#15181B", "ink": "#ECECEC", "soft": "#B0B0B0", "grid": "#3A3E42", "box": "#22262A"}
DARK |= {"one": "#56B4E9", "other": "#E69F00", "chosen": "#009E73"}


def _set(colours: dict[str, str]) -> str:
    return " ".join(f"--{name}: {value};" for name, value in colours.items())


STYLE = f""":root {{ color-scheme: light dark; {_set(LIGHT)} }}
@media screen and (prefers-color-scheme: dark) {{ :root {{ {_set(DARK)} }} }}
body {{ margin: 0; background: var(--ground); color: var(--ink); font: 16px/1.5 system-ui, sans-serif; }}
main {{ max-width: 60rem; margin: 0 auto; padding: 1.5rem; }}
h1 {{ font-size: 1.6rem; line-height: 1.25; margin: 0 0 .5rem; overflow-wrap: anywhere; }}
h2 {{ font-size: 1.2rem; margin: 2rem 0 .5rem; }}
p {{ max-width: 48rem; }}
.caution {{ border-left: 4px solid var(--other); background: var(--box); padding: .6rem .9rem; }}
dl {{ display: grid; grid-template-columns: max-content 1fr; gap: .3rem 1rem; margin: 1rem 0; }}
dt {{ color: var(--soft); }}
dd {{ margin: 0; }}
pre {{ background: var(--box); padding: .8rem; overflow-x: auto; white-space: pre-wrap; overflow-wrap: anywhere; }}
figure {{ margin: 1rem 0; }}
svg {{ width: 100%; height: auto; display: block; }}
svg * {{ stroke-linejoin: round; stroke-linecap: butt; }}
.wide {{ display: inline-block; vertical-align: top; max-width: 100%; overflow-x: auto; margin: 1rem 2.5rem 1rem 0; }}
table {{ border-collapse: collapse; font-size: .875rem; font-variant-numeric: tabular-nums; }}
caption {{ text-align: left; font-weight: 600; padding: .3rem 0; }}
th, td {{ text-align: right; padding: .2rem .7rem; border-bottom: 1px solid var(--grid); vertical-align: top; }}
th:first-child, td:first-child {{ text-align: left; padding-left: 0; }}
thead th {{ color: var(--soft); font-weight: 600; vertical-align: bottom; }}
tbody th {{ font-weight: 400; min-width: 7rem; max-width: 24rem; overflow-wrap: anywhere; }}
footer {{ margin-top: 2.5rem; border-top: 1px solid var(--grid); color: var(--soft); font-size: .875rem; }}
@media (max-width: 40rem) {{ dl {{ grid-template-columns: 1fr; }} dt {{ margin-top: .4rem; }}
  svg {{ min-width: 34rem; }} figure {{ overflow-x: auto; }} }}
@media print {{ body {{ font-size: 10pt; }} main {{ max-width: none; padding: 0; }} h2 {{ break-after: avoid; }}
  figure, tr, .caution, pre {{ break-inside: avoid; }} caption {{ break-after: avoid; }}
  .wide {{ display: block; overflow: visible; }} table {{ font-size: 8.5pt; }}
  th, td {{ padding: .1rem .35rem; }} }}
"""
