"""What every report that is one HTML file has in common: palette, grounds, policy, the rules of texts and tables.

Text only; nothing of an answer in it, and no rule of one report alone (`replay.report_style`, `reporting.style`).
Marks are of the palette of M. Okabe and K. Ito ("Color Universal Design", 2008), which people with any colour vision
can tell apart. Texts stand out from their ground by 4.5 to 1 and more (WCAG 2.2, 1.4.3). Tests work these out.
"""

from __future__ import annotations

from collections.abc import Mapping

OKABE_ITO = {
    "black": "#000000",
    "orange": "#E69F00",
    "sky blue": "#56B4E9",
    "bluish green": "#009E73",
    "yellow": "#F0E442",
    "blue": "#0072B2",
    "vermillion": "#D55E00",
    "reddish purple": "#CC79A7",
}
LIGHT = {"ground": "#FFFFFF", "ink": "#1A1A1A", "soft": "#595959", "grid": "#DDDDDD", "box": "#F4F4F4"}
DARK = {"ground": "#15181B", "ink": "#ECECEC", "soft": "#B0B0B0", "grid": "#3A3E42", "box": "#22262A"}
POLICY = "default-src 'none'; style-src 'unsafe-inline'; base-uri 'none'; form-action 'none'"


def _set(colours: Mapping[str, str]) -> str:
    return " ".join(f"--{name}: {value};" for name, value in colours.items())


_COMMON = f"""body {{ margin: 0; background: var(--ground); color: var(--ink); font: 16px/1.5 system-ui, sans-serif; }}
main {{ max-width: 62rem; margin: 0 auto; padding: 1.5rem; }}
h1 {{ font-size: 1.5rem; line-height: 1.25; margin: 0 0 .5rem; overflow-wrap: anywhere; }}
h2 {{ font-size: 1.2rem; margin: 2rem 0 .5rem; }}
p {{ max-width: 48rem; }}
.caution {{ border-left: 4px solid {OKABE_ITO["vermillion"]}; background: var(--box); padding: .6rem .9rem; }}
figure {{ margin: 1rem 0; }}
svg {{ width: 100%; height: auto; display: block; }}
.wide {{ max-width: 100%; overflow-x: auto; margin: 1rem 0; }}
table {{ border-collapse: collapse; font-size: .875rem; font-variant-numeric: tabular-nums; }}
caption {{ text-align: left; font-weight: 600; padding: .3rem 0; }}
th, td {{ border-bottom: 1px solid var(--grid); vertical-align: top; }}
thead th {{ color: var(--soft); font-weight: 600; vertical-align: bottom; }}
footer {{ margin-top: 2.5rem; border-top: 1px solid var(--grid); color: var(--soft); font-size: .875rem; }}
@media print {{ body {{ font-size: 10pt; }} main {{ max-width: none; padding: 0; }} h2 {{ break-after: avoid; }}
  figure, tr, .caution, pre {{ break-inside: avoid; }} caption {{ break-after: avoid; }}
  .wide {{ overflow: visible; }} table {{ font-size: 8.5pt; }} }}
"""


def style_sheet(light: Mapping[str, str], dark: Mapping[str, str], rules: str) -> str:
    """The style sheet of a report: custom properties by name for either ground, and its own rules after the common."""
    return (
        f":root {{ color-scheme: light dark; {_set(light)} }}\n"
        f"@media screen and (prefers-color-scheme: dark) {{ :root {{ {_set(dark)} }} }}\n{_COMMON}{rules}"
    )
