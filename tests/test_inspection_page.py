"""The page: self-contained, escaped, small; its drawings are the arbor's own places."""

from __future__ import annotations

import json
import re
import shutil
import subprocess
from html import escape
from html.parser import HTMLParser
from xml.etree import ElementTree

import numpy as np
import pytest
from builders_inspection import STAND_INS, cut, inspected, scaled, stand_in
from builders_morphology import write_table

from circuitgen.inspection import inspect_file, page_html
from circuitgen.inspection.drawing import UNITS_PER_PX, drawings, views

NASTY = 'a "quote" & <script>alert(1)<b> é ü \' ' + "x" * 60 + ".swc"


class _Reader(HTMLParser):
    """Collects tags, attributes and text."""

    def __init__(self, page):
        super().__init__()
        self.tags, self.attributes, self.text = [], [], ""
        self.feed(page)

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        self.attributes += attrs

    def handle_data(self, data):
        self.text += data


def nasty_sheet(folder):
    """Inspect a file whose name is hostile."""
    name = NASTY.replace("/", "")
    return inspect_file(
        write_table(folder / name, cut(stand_in("L4_basket_1"), (0, 0, 1), 20))
    )


def test_names_are_shown_not_run(tmp_path):
    sheet = nasty_sheet(tmp_path)
    reader = _Reader(page_html([sheet]))
    assert NASTY in reader.text
    assert "script" not in reader.tags
    assert "b" in reader.tags  # of the page itself
    assert reader.text.count("alert(1)") >= 2
    labels = [value for name, value in reader.attributes if name == "aria-label"]
    assert len(labels) == 2
    assert all(NASTY in label for label in labels)


def test_the_page_asks_nobody_for_anything(tmp_path):
    page = page_html([nasty_sheet(tmp_path)])
    reader = _Reader(page)
    assert not {"script", "link", "img", "iframe", "object"} & set(reader.tags)
    assert all(
        value.startswith("#") for name, value in reader.attributes if name == "href"
    )
    assert "src" not in dict(reader.attributes)
    assert not re.search(r"url\(|@import|https?:", page)
    assert ("content", "default-src 'none'; style-src 'unsafe-inline'") in (
        reader.attributes
    )


def test_fifty_files_stay_small():
    sheets = [inspect_file(path) for path in STAND_INS[::5]] * 5
    assert len(sheets) == 50
    assert len(page_html(sheets).encode()) < 4e6


def _points(svg, css_class):
    """Return all points of one path of a drawing, in its units."""
    root = ElementTree.fromstring(svg)
    [path] = [p for p in root.iter("path") if p.get("class") == css_class]
    points = []
    for part in path.get("d").split("M")[1:]:
        numbers = [int(n) for n in re.findall(r"-?\d+", part)]
        steps = np.array(numbers).reshape(-1, 2)
        points.append(np.cumsum(steps, axis=0))
    return np.vstack(points)


@pytest.mark.parametrize("upright", ["x", "y", "z", "-x", "-y", "-z"])
def test_drawn_points_lie_on_the_arbor(tmp_path, upright):
    """Drawn points come back, by the scale bar, to places on the cable."""
    sheet = inspected(tmp_path, stand_in("L6_pyramidal_1"), upright)
    arbor = sheet.arbor
    for (svg, _), view in zip(
        drawings(arbor, upright, "cell"), views(upright), strict=True
    ):
        bar = re.search(r'class="bar" d="M(-?\d+) \d+H(-?\d+)".*>([\d.]+) µm<', svg)
        scale = (int(bar[2]) - int(bar[1])) / float(bar[3])
        points = _points(svg, "axon") / scale
        rows = arbor.kind == 2
        ends = np.vstack([arbor.start_um[rows], arbor.end_um[rows]])
        flat = np.column_stack([ends @ view.across, -(ends @ view.up)])
        # Half a unit of rounding each way, and of the bar over a length of 1,000 um.
        slack = 2.0 / scale + np.abs(flat).max() / float(bar[3]) / scale
        away = np.abs(points[:, None, :] - flat[None]).max(axis=2).min(axis=1)
        assert away.max() < slack
        # What is left out lies within 1.25 px of what is drawn.
        assert np.abs(points.min(axis=0) - flat.min(axis=0)).max() < slack + 2 / scale
        assert np.abs(points.max(axis=0) - flat.max(axis=0)).max() < slack + 2 / scale


def test_the_axis_toward_the_pia_is_up_and_seen_from_the_side(tmp_path):
    sheet = inspected(tmp_path, stand_in("L5_thick_1"))
    side, above = (svg for svg, _ in drawings(sheet.arbor, "y", "cell"))
    soma = re.search(r'class="soma" d="M(-?\d+) (-?\d+)', side)
    apical_top = _points(side, "dendrite")[:, 1].min()
    assert apical_top < int(soma[2]) - 100 * UNITS_PER_PX  # SVG counts downward
    size = [float(n) for n in re.search(r'viewBox="([^"]+)"', above)[1].split()]
    assert size[3] < 1.5 * size[2]


@pytest.mark.parametrize("factor", [0.0, 1e-6, 1e4])
def test_odd_sizes_are_drawn(tmp_path, factor):
    table = scaled(stand_in("L4_basket_1")[:400], *(factor,) * 4)
    sheet = inspected(tmp_path, table)
    assert not sheet.usable
    assert "nan" not in page_html([sheet]).lower()


def test_a_refused_file_has_a_place_on_the_page(tmp_path):
    path = tmp_path / "broken.swc"
    path.write_text("1 1 0 0 0 5 -1\n" + "2 2 0 z 0 1 1\n" * 40)
    text = _Reader(page_html([inspect_file(path)])).text
    assert "broken.swc" in text
    assert "line 2 has 'z' where a number belongs" in text
    assert "30 problems more" in text


@pytest.mark.skipif(not shutil.which("chromium"), reason="no browser here")
def test_a_browser_shows_the_page_without_sideways_scrolling(tmp_path):
    """At three widths, in frames as wide as a phone, a tablet and a desk's screen."""
    page = page_html([nasty_sheet(tmp_path), inspect_file(STAND_INS[0])])
    widths = [360, 800, 1600]
    frames = "".join(
        f'<iframe srcdoc="{escape(page)}" '
        f'style="width:{width}px;height:9000px;border:0"></iframe>'
        for width in widths
    )
    probe = (
        "onload=()=>{document.title=JSON.stringify([...document.querySelectorAll("
        "'iframe')].map(f=>f.contentDocument).map(d=>[d.documentElement.scrollWidth,"
        "d.querySelectorAll('svg').length,d.title]))}"
    )
    path = tmp_path / "host.html"
    host = f"<title>-</title><script>{probe}</script>{frames}"
    path.write_text(f'<meta charset="utf-8">{host}', encoding="utf-8")
    shown = subprocess.run(
        ["chromium", "--headless", "--no-sandbox", "--disable-gpu",
         f"--user-data-dir={tmp_path / 'profile'}", "--dump-dom", path.as_uri()],
        capture_output=True, text=True, timeout=60, check=True,
    ).stdout  # fmt: skip
    found = json.loads(re.search(r"<title>(.*?)</title>", shown)[1])
    assert found == [[width, 4, "Reconstructions inspected"] for width in widths]
