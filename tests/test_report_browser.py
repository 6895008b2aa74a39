"""The page in a real browser: no complaint, no request, every control at work."""

from __future__ import annotations

import io
import json

import pandas as pd
import pytest
from builders_browser import Browser, find_browser
from builders_report import NAMES, hostile_run

pytestmark = pytest.mark.skipif(
    find_browser() is None, reason="no Chromium installed (apt-get install chromium)"
)

WIDTHS = (360, 800, 1600)
# Texts that leave their drawing, and texts of one drawing that lie on each other.
LOOK = """
(() => {
  const out = [];
  for (const svg of document.querySelectorAll("main svg")) {
    const frame = svg.getBoundingClientRect();
    const texts = [...svg.querySelectorAll("text")].filter((t) => t.textContent);
    const boxes = texts.map((t) => t.getBoundingClientRect());
    const free = getComputedStyle(svg).overflow === "visible" ? 40 : 1.5;
    boxes.forEach((box, i) => {
      if (box.left < frame.left - free || box.right > frame.right + free ||
          box.top < frame.top - 2 || box.bottom > frame.bottom + 2) {
        out.push(`cut: ${texts[i].textContent}`);
      }
      boxes.slice(0, i).forEach((other, j) => {
        const wide = Math.min(box.right, other.right) - Math.max(box.left, other.left);
        const high = Math.min(box.bottom, other.bottom) - Math.max(box.top, other.top);
        if (wide > 1 && high > 4) {
          out.push(`overlap: ${texts[j].textContent} | ${texts[i].textContent}`);
        }
      });
    });
  }
  for (const part of document.querySelectorAll("figure > div, .plot")) {
    if (part.getBoundingClientRect().height < 15) out.push(`empty: ${part.id}`);
  }
  const table = document.getElementById("reciprocity");
  if (table.scrollWidth > table.parentElement.clientWidth) out.push("cut: table");
  const page = document.documentElement;
  if (page.scrollWidth > page.clientWidth) out.push("wider than the window");
  return out;
})()
"""


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    return hostile_run(tmp_path_factory.mktemp("hostile"))


@pytest.fixture(scope="module")
def browser(tmp_path_factory):
    with Browser(tmp_path_factory.mktemp("browser")) as browser:
        yield browser


@pytest.fixture
def page(browser, folder):
    browser.open(folder / "report.html")
    return browser


def readout(page):
    return page.run("document.getElementById('matrix-readout').textContent")


def panel(page):
    return page.run("document.querySelector('#pathway h3').textContent")


@pytest.mark.parametrize("dark", [False, True], ids=["light", "dark"])
@pytest.mark.parametrize("width", WIDTHS)
def test_nothing_is_cut_overlapping_empty_or_wrong(browser, folder, width, dark):
    browser.open(folder / "report.html", width, dark)
    assert browser.complaints() == []
    assert browser.requests() == [(folder / "report.html").as_uri()]
    assert browser.run("window.broken") is None
    assert browser.run(LOOK) == []
    assert browser.run("document.querySelectorAll('main svg').length") > 20


def test_the_look_at_the_page_finds_a_cut_label(page):
    page.run("document.querySelector('#degree-out text').setAttribute('x', -30)")
    assert any(found.startswith("cut") for found in page.run(LOOK))


def test_every_figure_has_words_and_data(page):
    silent = page.run(
        "[...document.querySelectorAll('main svg, main canvas')].filter((e) =>"
        " !e.parentElement.closest('svg') && !e.getAttribute('aria-label') &&"
        " !e.getAttribute('aria-hidden') && !e.querySelector('[role=grid]')).length"
    )
    assert silent == 0
    links = page.run("document.querySelectorAll('a[download$=\".csv\"]').length")
    assert links == 8 + 4  # the page's own figures and those of the open pathway


def test_hover_tells_the_numbers_of_a_pathway(page, folder):
    rows = pd.read_csv(folder / "pathways.csv")
    names = list(NAMES.values())
    for code in (1, 5):
        page.mouse("mouseMoved", *page.middle(f'[data-code="{code}"] rect'))
        pre, post = names[code // 3], names[code % 3]
        [row] = rows[(rows.pre_type == pre) & (rows.post_type == post)].itertuples()
        assert readout(page).startswith(f"{pre} → {post}: probability ")
        assert f"probability {row.p_connect:.3g} within" in readout(page)


def test_click_opens_a_pathway(page):
    names = list(NAMES.values())
    page.click(*page.middle('[data-code="3"] rect'))
    assert panel(page) == f"{names[1]} → {names[0]}"
    assert page.run("document.querySelectorAll('#pathway svg').length") == 4
    chosen = "document.querySelector('[aria-selected=true]').dataset.code"
    assert page.run(chosen) == "3"


def test_the_matrix_by_keyboard(page):
    names = list(NAMES.values())
    page.run("document.querySelector('#matrix [tabindex=\"0\"]').focus()")
    page.key("Home", 36)
    page.key("ArrowRight", 39)
    page.key("ArrowDown", 40)
    focused = "document.activeElement.dataset.code"
    assert page.run(focused) == "4"
    assert readout(page).startswith(f"{names[1]} → {names[1]}")
    page.key("ArrowUp", 38)
    page.key("ArrowUp", 38)
    assert page.run(focused) == "1"
    page.key("Enter", 13)
    assert panel(page) == f"{names[0]} → {names[1]}"
    assert page.run("document.activeElement.id") == "pathway"


def test_tab_reaches_every_control(page):
    page.run("document.body.focus()")
    seen = set()
    for _ in range(60):
        page.key("Tab", 9)
        seen.add(
            page.run(
                "(() => { const e = document.activeElement;"
                "return e.dataset.sort || e.dataset.code || e.id || e.textContent })()"
            )
        )
    wanted = {"verdict", "measured", "column-type", "column-cells", "pair-choice"}
    assert wanted | {"pair-view", "turn left", "0"} <= seen


def test_recordings_sort_up_and_down_by_every_column(page):
    order = (
        "[...document.querySelectorAll('#recordings-table tbody tr')].map((r) => ["
        "r.dataset.row, r.dataset.pathway, r.dataset.measured, r.dataset.circuit,"
        "r.dataset.synapses, r.dataset.verdict])"
    )
    rows = page.run(order)
    for place, key in enumerate(("measured", "circuit", "synapses", "verdict"), start=2):
        button = f'button[data-sort="{key}"]'
        page.click(*page.middle(button))
        up = [float(row[place]) for row in page.run(order)]
        assert up == sorted(float(row[place]) for row in rows)
        head = f"document.querySelector('{button}').closest('th')"
        assert page.run(f"{head}.getAttribute('aria-sort')") == "ascending"
        page.click(*page.middle(button))
        assert [float(row[place]) for row in page.run(order)] == up[::-1]
        assert page.run(f"{head}.getAttribute('aria-sort')") == "descending"
    page.click(*page.middle('button[data-sort="row"]'))
    assert page.run(order) == rows


def test_the_pair_turns_by_drag_keys_and_buttons(page):
    picture = "document.querySelector('#pair-view canvas').toDataURL()"
    still = "new Promise((r) => requestAnimationFrame(() => requestAnimationFrame(r)))"
    seen = [page.run(picture)]
    x, y = page.middle("#pair-view canvas")
    page.mouse("mousePressed", x, y, "left")
    page.mouse("mouseMoved", x + 60, y + 20, "left")
    page.mouse("mouseReleased", x + 60, y + 20, "left")
    assert page.run("PAIR.angles()") == pytest.approx([0.5 + 0.6, 0.12 + 0.2])
    page.run(still)
    seen.append(page.run(picture))
    page.run("document.getElementById('pair-view').focus()")
    page.key("ArrowLeft", 37)
    page.key("ArrowDown", 40)
    assert page.run("PAIR.angles()") == pytest.approx([1.01, 0.23])
    page.run(still)
    seen.append(page.run(picture))
    button = "[...document.querySelectorAll('#pair-picker button')].find((b) => "
    page.run(f"{button} b.textContent === 'nearer').click()")
    page.run(still)
    seen.append(page.run(picture))
    page.run(f"{button} b.textContent === 'as at first').click()")
    page.run(still)
    assert page.run(picture) == seen[0]
    assert len(set(seen)) == 4


def test_another_pair_and_another_type_can_be_chosen(page):
    for name in ("pair-choice", "column-type"):
        host = {"pair-choice": "pair-words", "column-type": "column-side"}[name]
        before = page.run(f"document.getElementById('{host}').innerHTML")
        page.run(
            f"(() => {{ const s = document.getElementById('{name}');"
            "s.value = '1'; s.dispatchEvent(new Event('change')); })()"
        )
        assert page.run(f"document.getElementById('{host}').innerHTML") != before
    assert page.complaints() == []


@pytest.mark.parametrize(("name", "table"), [("pathways", 0), ("recordings", 1)])
def test_csv_links_give_the_tables(page, folder, name, table):
    file = ("pathways.csv", "fit.csv")[table]
    shown = pd.read_csv(io.StringIO(page.run(f"csvText(CSV.{name}())")))
    stored = pd.read_csv(folder / file)
    pd.testing.assert_frame_equal(shown[list(stored)], stored, check_exact=True)
    link = f"document.querySelector('[data-csv={name}] a')"
    page.run(f"{link}.addEventListener('click', (e) => e.preventDefault())")
    page.run(f"{link}.click()")
    text = page.run(f"fetch({link}.href).then((r) => r.text())")
    assert text == page.run(f"csvText(CSV.{name}())")
    assert text.startswith(json.dumps(list(shown)[0]))


def test_light_colours_on_paper(browser, folder):
    browser.open(folder / "report.html", dark=True)
    paper = "getComputedStyle(document.body).backgroundColor"
    assert browser.run(paper) != "rgb(255, 255, 255)"
    browser.call("Emulation.setEmulatedMedia", media="print")
    assert browser.run(paper) == "rgb(255, 255, 255)"
    printed = browser.call("Page.printToPDF", printBackground=True)
    assert len(printed["data"]) > 100_000
    browser.call("Emulation.setEmulatedMedia", media="")
