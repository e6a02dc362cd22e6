"""Colours of the pages: one palette; the dashboard's dark ones are the same by the system's wish and by the button."""

from __future__ import annotations

import re

from strandline.dashboard.serving import read_files
from strandline.page_style import OKABE_ITO

CSS = read_files()["dashboard.css"].content.decode()


def properties(begin: str) -> dict[str, str]:
    """The declarations of the one rule that begins so."""
    (rule,) = re.findall(rf"{re.escape(begin)} \{{([^}}]*)\}}", re.sub(r"/\*.*?\*/", "", CSS, flags=re.DOTALL))
    return dict(re.findall(r"([\w-]+): ([^;]+);", rule))


def test_dark_is_the_same_by_the_system_and_by_the_button() -> None:
    """A rule cannot be shared by a condition on the screen and an attribute: the colours stand there twice."""
    asked_for, chosen = properties(':root:not([data-theme="light"])'), properties(':root[data-theme="dark"]')
    assert asked_for == chosen and chosen["color-scheme"] == "dark" and len(chosen) > 12


def test_the_dashboard_names_colours_of_the_palette_by_their_values() -> None:
    named = {name: value for name, value in properties(":root").items() if name.startswith("--okabe-ito-")}
    assert len(named) >= 5
    for name, value in named.items():
        assert OKABE_ITO[name.removeprefix("--okabe-ito-").replace("-", " ")].lower() == value, name
        assert f"var({name})" in CSS, f"{name} is not used"
