"""The report of an advice: numbers are those of --json, names harmless, bytes the same, colours apart."""

from __future__ import annotations

import contextlib
import copy
import io
import json
import re
import subprocess
import sys
import xml.etree.ElementTree as ET
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from helpers_advice import feed, write_capture
from helpers_report import Page, numbered_capture
from hypothesis import given
from hypothesis import strategies as st
from strandline import cli
from strandline.caution import CAUTION
from strandline.page_style import OKABE_ITO
from strandline.replay import report
from strandline.replay.pictures import PAPER, log_ticks, pictures_of, svg
from strandline.replay.report_style import DARK, LIGHT
from strandline.replay.wording import share_text, spelled

HOSTILE = [
    "<script>alert(1)</script>",
    "</svg></section><img src=x onerror=alert(1)>",
    '" onload="alert(1)',
    "$x^2$ & $\\frac{1}{0}$",
    "]]><!-- -->",
    "id=\"a\" url(#b) href='#c' #010000",
    "gauge \u202e reversed \x07 \x1b[31m",
    "水位計" * 20,
]
# Names of elements and attributes that run or fetch something (HTML standard, section 8 and indices; SVG 2).
ACTIVE = {"script", "iframe", "object", "embed", "link", "base", "form", "img", "image", "audio", "video", "a", "use"}


def asked(*arguments: object, code: int | None = None) -> dict[str, Any]:
    """What `advise --json` prints."""
    with contextlib.redirect_stdout(io.StringIO()) as out:
        found = cli.main(["advise", *map(str, arguments), "--json"])
    assert found == code if code is not None else found in (0, 1)
    answer: dict[str, Any] = json.loads(out.getvalue())
    return answer


def hostile_capture(folder: Path) -> Path:
    """Eight sources whose names are attacks; the first ones are the latest."""
    generator = np.random.default_rng(3)
    sources = generator.integers(0, len(HOSTILE), 6_000).astype(np.uint32)
    columns = feed(50, generator.exponential(0.5, len(sources)) * (9 - sources), 3, sources)
    write_capture(folder / "hostile.capture", columns, HOSTILE, per_request=5)
    return folder / "hostile.capture"


def numbered(folder: Path) -> Path:
    """Two sources; every 40th number of the first is lost, every 9th of the second comes three seconds late."""
    rows = []
    for place in range(4_000):
        own, source = divmod(place, 2)
        if source == 0 and own % 40 == 7:
            continue
        observed = 1_700_000_000_000 + 100 * place
        rows.append((observed + 20 + 3_000 * (source == 1 and own % 9 == 4), observed, f"gw-{source + 1}", own))
    return numbered_capture(folder, sorted(rows))


@dataclass(frozen=True, slots=True)
class Told:
    """One answer and its report."""

    answer: dict[str, Any]
    text: str
    page: Page


@pytest.fixture(scope="module")
def told(tmp_path_factory: pytest.TempPathFactory) -> Told:
    """The answer and the report of two sources with numbered events."""
    folder = tmp_path_factory.mktemp("report")
    options = "--late-share", "0.05", "--at-most", "1m", "--sequence", "/seq", "--report", folder / "out.html"
    answer = asked(numbered(folder), *options)
    text = (folder / "out.html").read_text()
    return Told(answer, text, Page(text))


def values_of(page: Page, caption: str, heading: str) -> list[float | None]:
    """The exact values below a heading; None where it says unknown."""
    cells = page.table(caption).column(heading)
    assert all(values or text in ("unknown", "") for text, values in cells)
    return [float(values[0]) if values else None for _, values in cells]


def test_numbers_in_the_report_are_those_of_json(told: Told) -> None:
    answer, page = told.answer, told.page
    curve, steps = answer["pictures"]["curve"], answer["pictures"]["steps"]
    assert values_of(page, "Late share by slack", "slack") == [each["slack_ns"] for each in curve]
    for heading, name in (("late, first part", "first_share"), ("late, second part", "second_share")):
        assert values_of(page, "Late share by slack", heading) == [each[name] for each in curve]
    for heading, name in (("hold, mean", "hold_ns_mean"), ("held, mean", "held_events_mean"),
                          ("held, most", "held_events_peak")):  # fmt: skip
        assert values_of(page, "Hold and held events by slack", heading) == [each["figure"][name] for each in curve]
    p99 = [(each["figure"]["hold_ns_quantiles"] or {}).get("0.99") for each in curve]
    assert values_of(page, "Hold and held events by slack", "hold, 99 in 100") == p99
    for heading, name in (("events", "events"), ("late", "late"), ("late share", "late_share"),
                          ("lateness, 99 in 100", "lateness_ns_p99"), ("the latest", "lateness_ns_max")):  # fmt: skip
        assert values_of(page, "Lateness by time", heading) == [step["lateness"][name] for step in steps]
    tenths = "The second part in tenths, with the slack chosen"
    assert values_of(page, tenths, "late") == [each["late"] for each in answer["tenths"]]
    for heading, name in (
        ("events", "events"),
        ("late", "late"),
        ("mean delay", "delay_ns_mean"),
        ("slack without it", "slack_without_ns"),
        ("late if excused", "late_if_excused"),
    ):
        assert values_of(page, "The sources that cost most", heading) == [each[name] for each in answer["sources"]]
    whose = [each["lateness"]["lateness_ns_max"] for each in answer["sources"]]
    assert values_of(page, "The sources that cost most", "the latest") == whose
    shown = [float(value) for value in page.values]
    for each in (answer["slack_ns"], answer["late_share"], *answer["interval"], *answer["interval_ns"],
                 answer["wanted"]["late_share"], answer["wanted"]["at_most_ns"], answer["lag_ns_mean"]):  # fmt: skip
        assert float(each) in shown
    assert "\n".join(answer["configuration"]) in page.within("pre")
    assert answer["explanation"] in "".join(page.within("dd"))
    assert CAUTION in "".join(page.within("p"))


def test_sequences_and_reordering_in_the_report(told: Told) -> None:
    answer, page, found = told.answer, told.page, told.answer["sequence"]
    assert values_of(page, "By source", "lost") == [each["lost"] for each in found["sources"]] == [50, 0]
    assert [text for text, _ in page.table("Lost upstream").column("source")] == ["gw-1"] * 20
    lost = [f"{each['first']}" for each in found["lost_ranges"]]
    assert [text for text, _ in page.table("Lost upstream").column("numbers")] == lost
    assert values_of(page, "Lost upstream", "missed at") == [each["missed_at_ns"] for each in found["lost_ranges"]]
    filled = found["filled_gaps"]
    assert values_of(page, "Late, but all there", "filled after") == [each["filled_after_ns"] for each in filled]
    # An event of gw-2 comes each 200 ms; one that takes 3,000 ms more is missed when the next comes, 200 ms later.
    assert {each["filled_after_ns"] for each in filled} == {2_800_000_000}
    figures = dict(page.table("By sequence number").column("value"))
    assert figures["50"] == ["50"] and found["lost"] == 50
    shown = [value for value in answer["reordering"].values() if isinstance(value, int | float)]
    values = {value for _, values in page.table("Reordering by event time").column("value") for value in values}
    assert {repr(value) for value in shown} <= values


def test_hostile_names_stay_texts_everywhere(tmp_path: Path) -> None:
    file = tmp_path / "out.html"
    answer = asked(hostile_capture(tmp_path), "--late-share", "0.1", "--sources", "8", "--report", file)
    text = file.read_text()
    page = Page(text)
    for tag, attributes in page.elements:
        assert tag not in ACTIVE - {"use"}
        for name, value in attributes.items():
            assert not name.startswith("on") and name != "src"
            if name.endswith("href"):
                assert value.startswith("#")
    names = [text for text, _ in page.table("The sources that cost most").column("source")]
    harmless = dict(zip(HOSTILE, HOSTILE, strict=True)) | {HOSTILE[6]: "gauge \\u202e reversed \\x07 \\x1b[31m"}
    assert names == [harmless[each["source"]] for each in answer["sources"]]
    drawn = page.within("text")
    for name in HOSTILE[:7]:
        short = harmless[name] if len(harmless[name]) <= 24 else harmless[name][:23] + "…"
        assert short in drawn, name
    assert "水位計水位計水位計水位…" in drawn  # 11 wide ones, and the dots
    assert "\x1b" not in text and "\u202e" not in text


def test_the_widest_names_leave_room_for_what_is_drawn(tmp_path: Path) -> None:
    """Where there was none, a warning would say so, and warnings are errors here."""
    for number, letter in enumerate("W計"):
        sources = np.random.default_rng(4).integers(0, 12, 3_000).astype(np.uint32)
        columns = feed(50, np.random.default_rng(3).exponential(0.5, len(sources)), 3, sources)
        write_capture(tmp_path / f"{number}.capture", columns, [letter * (40 + each) for each in range(12)])
        files = "--report", tmp_path / f"{number}.png", "--report", tmp_path / f"{number}.html"
        asked(tmp_path / f"{number}.capture", "--late-share", "0.1", "--sources", "12", *files)


def test_nothing_is_fetched_and_the_page_says_so(told: Told) -> None:
    text, page = told.text, told.page
    assert page.elements[0] == ("html", {"lang": "en"})
    assert page.within("title")[0] == "How long river-gauges should wait"
    policies = [found["content"] for _, found in page.elements if found.get("http-equiv") == "Content-Security-Policy"]
    assert policies == ["default-src 'none'; style-src 'unsafe-inline'; base-uri 'none'; form-action 'none'"]
    addresses = set(re.findall(r"https?://[^\"'\s<)]+", text))
    assert addresses <= {"http://www.w3.org/2000/svg", "http://www.w3.org/1999/xlink"}  # names, not fetched
    assert "@import" not in text and not re.search(r"url\((?!#)", text)
    ids = [found["id"] for _, found in page.elements if "id" in found]
    assert len(ids) == len(set(ids))
    pointed = set(re.findall(r"url\(#([^)]+)\)|href=\"#([^\"]+)\"", text))
    assert {one or other for one, other in pointed} <= set(ids)


def test_each_picture_has_a_name_an_alternative_and_a_table(told: Told) -> None:
    page = told.page
    drawn = [found for tag, found in page.elements if tag == "svg"]
    ids = {found["id"] for _, found in page.elements if "id" in found}
    assert len(drawn) == 4
    for attributes in drawn:
        assert attributes["role"] == "img" and set(attributes["aria-labelledby"].split()) <= ids
    alternatives = page.within("desc")
    assert len(alternatives) == 4 and all(len(each) > 60 and "table below" in each for each in alternatives)
    for table in page.tables:
        assert table.caption and len({len(row) for row in table.rows}) == 1 and len(table.rows) > 1


def test_the_same_capture_gives_the_same_bytes(tmp_path: Path) -> None:
    """In processes of their own, so that no hash's seed and no time has a say; nor has a user's own matplotlibrc."""
    capture = numbered(tmp_path)
    found = []
    for turn in ("one", "two"):
        folder = tmp_path / turn
        folder.mkdir()
        (folder / "matplotlibrc").write_text("" if turn == "one" else "lines.linewidth: 9\nfont.size: 30\n")
        command = [sys.executable, "-W", "error", "-m", "strandline.cli", "advise", str(capture)]
        command += ["--late-share", "0.05", "--report", "out.html", "--report", "out.png", "--sequence", "/seq"]
        subprocess.run(command, cwd=folder, capture_output=True, check=True, timeout=120)
        found.append([(folder / name).read_bytes() for name in ("out.html", "out.png")])
    assert found[0] == found[1]
    assert found[0][1].startswith(b"\x89PNG\r\n\x1a\n")
    assert b"tEXt" not in found[0][1] and b"tIME" not in found[0][1]  # no text, no time of making


def test_a_capture_without_any_late_event_has_a_report(tmp_path: Path) -> None:
    for sources, drawn in ((1, 3), (2, 4)):  # of one source there is none to compare with
        folder = tmp_path / str(sources)
        folder.mkdir()
        rows = [(1_000 * row + 5, 1_000 * row, f"gw-{row % sources}", row) for row in range(1_000)]
        options = "--late-share", "0.05", "--report", folder / "out.html", "--report", folder / "out.png"
        answer = asked(numbered_capture(folder, rows), *options, code=0)
        assert answer["slack_ns"] == 0 and answer["sources_known"] == sources
        page = Page((folder / "out.html").read_text())
        assert len([tag for tag, _ in page.elements if tag == "svg"]) == drawn
        assert set(values_of(page, "Late share by slack", "late, first part")) == {0.0}


def test_several_days_are_shown_by_the_hour_and_a_contradiction_is_said(tmp_path: Path) -> None:
    delays = np.random.default_rng(1).exponential(90, 4_000)
    write_capture(tmp_path / "days.capture", feed(0.02, delays, 1), ["gw-1"], per_request=1)
    file = tmp_path / "out.html"
    options = "--late-share", "0.01", "--at-most", "8s", "--report", file, "--report", tmp_path / "out.png"
    answer = asked(tmp_path / "days.capture", *options, code=1)
    assert answer["verdict"] == "contradiction" and answer["pictures"]["by_day"]
    page = Page(file.read_text())
    clocks = [text for text, _ in page.table("Lateness by time").column("time")]
    assert len(clocks) == 24 and (clocks[0], clocks[-1]) == ("00:00 to 01:00", "23:00 to 24:00")
    assert {float(answer["attainable"]), float(answer["least_ns"])} <= {float(value) for value in page.values}


def test_what_was_not_known_is_said_to_be_unknown(told: Told) -> None:
    answer = copy.deepcopy(told.answer)
    for each in answer["pictures"]["curve"][3:]:
        each["figure"].update(hold_ns_mean=None, hold_ns_quantiles=None, held_events_mean=None, held_events_peak=None)
    answer["sources"][0]["lateness"] = None
    page = Page(report.report_html(answer))
    assert values_of(page, "Hold and held events by slack", "held, most")[3:] == [None] * (
        len(answer["pictures"]["curve"]) - 3
    )


def test_pictures_are_well_formed_and_draw_with_the_palette_only(told: Told) -> None:
    # Okabe & Ito, "Color Universal Design" (2008): RGB of the eight colours in their table.
    published = {(0, 0, 0), (230, 159, 0), (86, 180, 233), (0, 158, 115), (240, 228, 66), (0, 114, 178), (213, 94, 0),
                 (204, 121, 167)}  # fmt: skip
    assert {tuple(bytes.fromhex(colour[1:])) for colour in OKABE_ITO.values()} == published
    own = {colour.lower() for colour in (*OKABE_ITO.values(), PAPER.ink, PAPER.grid, PAPER.paper)}
    for picture in pictures_of(told.answer):
        drawn = svg(picture, told.answer, PAPER)
        assert ET.fromstring(drawn).tag == "{http://www.w3.org/2000/svg}svg"
        assert set(re.findall(r"#[0-9a-f]{6}\b", drawn)) <= own
    assert not re.search(r'="[^"]*#0[1-5]0000', told.text)  # every colour that stood in for one of the page is gone
    assert all(f"var(--{name})" in told.text for name in ("grid", "one", "other", "chosen"))


def luminance(colour: str) -> float:
    """Relative luminance (WCAG 2.2, definitions)."""
    parts = [part / 255 for part in bytes.fromhex(colour[1:])]
    red, green, blue = (part / 12.92 if part <= 0.04045 else ((part + 0.055) / 1.055) ** 2.4 for part in parts)
    return 0.2126 * red + 0.7152 * green + 0.0722 * blue


def contrast(one: str, other: str) -> float:
    """Contrast ratio (WCAG 2.2, definitions)."""
    high, low = sorted((luminance(one), luminance(other)), reverse=True)
    return (high + 0.05) / (low + 0.05)


@pytest.mark.parametrize("colours", [LIGHT, DARK], ids=["light", "dark"])
def test_colours_stand_out_from_their_ground(colours: dict[str, str]) -> None:
    assert contrast("#FFFFFF", "#000000") == pytest.approx(21)
    for name in ("one", "other", "chosen"):
        assert contrast(colours[name], colours["ground"]) >= 3, name  # WCAG 2.2, 1.4.11
        assert colours[name] in OKABE_ITO.values()
    for name in ("ink", "soft"):
        for ground in ("ground", "box"):
            assert contrast(colours[name], colours[ground]) >= 4.5, (name, ground)  # 1.4.3


def test_without_matplotlib_it_says_what_to_install(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    capture = numbered(tmp_path)
    for name in [name for name in sys.modules if name.partition(".")[0] == "matplotlib"]:
        monkeypatch.delitem(sys.modules, name)
    monkeypatch.setitem(sys.modules, "matplotlib", None)  # importing it fails as where it is not installed
    assert cli.main(["advise", str(capture), "--late-share", "0.05"]) in (0, 1)
    capsys.readouterr()
    assert cli.main(["advise", str(capture), "--late-share", "0.05", "--report", str(tmp_path / "out.html")]) == 2
    told = capsys.readouterr()
    assert "pip install 'strandline[report]'" in told.err and "verdict " in told.out, "the answer is given all the same"
    assert not (tmp_path / "out.html").exists()


def test_without_a_report_matplotlib_is_not_imported(tmp_path: Path) -> None:
    code = "import sys; from strandline import cli; cli.main(sys.argv[1:]); print('matplotlib' in sys.modules)"
    command = [sys.executable, "-c", code, "advise", str(numbered(tmp_path)), "--late-share", "0.05"]
    done = subprocess.run(command, capture_output=True, text=True, check=True, timeout=60)
    assert done.stdout.splitlines()[-1] == "False"


@pytest.mark.parametrize(
    ("more", "words"),
    [
        (["--report", "out.pdf"], "a .html or a .png file"),
        (["--report", "no/such/out.html"], "make it first"),
        (["--report", "out.html", "--quick"], "give one of the two"),
        (["--sequence", "seq"], "must begin with '/'"),
        (["--sequence", "/nothing"], "has a whole number there"),
    ],
)
def test_wrong_use_says_what_to_do(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch, more: list[str], words: str
) -> None:
    monkeypatch.chdir(tmp_path)
    capture = numbered(tmp_path)
    assert cli.main(["advise", str(capture), "--late-share", "0.05", *more]) == 2
    assert words in capsys.readouterr().err
    assert not list(tmp_path.glob("out.*"))


@given(st.floats(-12, 12), st.floats(0.29, 15))
def test_ticks_of_a_log_axis_are_round_few_and_within(low: float, decades: float) -> None:
    """0.29 decades are the least that an axis spans (a factor of 1.3 times 1.5)."""
    ends = 10**low, 10 ** (low + decades)
    ticks = log_ticks(*ends)
    assert 3 <= len(ticks) <= 8 and ticks == sorted(set(ticks))
    for tick in ticks:
        assert ends[0] <= tick <= ends[1] and float(f"{tick:.2g}") == tick


def test_words_of_shares_and_slacks() -> None:
    assert [share_text(share) for share in (None, 0.0, 1.0, 0.0000499, 0.123456, 0.16)] == [
        "unknown", "0", "1", "0.0000499", "0.123", "0.16",
    ]  # fmt: skip
    assert (spelled(0), spelled(1_500_000), spelled(19_100_000_000)) == ("0s", "1500us", "19.1s")
