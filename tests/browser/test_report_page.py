"""The report in a real browser: nothing fetched, no complaint, readable on a phone and on a desk, in light and dark."""

from __future__ import annotations

import io
import shutil

import numpy as np
import pytest
from PIL import Image
from support.browser import Browser
from support.runs import returned_run

import strainkit

pytestmark = pytest.mark.browser

#: contrast of text with what is behind it, for every element that holds text of its own: WCAG 2.2, relative luminance
CONTRAST = """
(() => {
  const channel = (c) => (c /= 255) <= 0.04045 ? c / 12.92 : ((c + 0.055) / 1.055) ** 2.4;
  const light = ([r, g, b]) => 0.2126 * channel(r) + 0.7152 * channel(g) + 0.0722 * channel(b);
  const parts = (text) => text.match(/[\\d.]+/g).map(Number);
  const behind = (e) => {
    for (; e; e = e.parentElement) {
      const c = parts(getComputedStyle(e).backgroundColor);
      if (c.length < 4 || c[3] > 0) return c;
    }
    return [255, 255, 255];
  };
  const ratio = (a, b) => (Math.max(light(a), light(b)) + 0.05) / (Math.min(light(a), light(b)) + 0.05);
  const found = [];
  for (const e of document.querySelectorAll("body *:not(script):not(svg):not(svg *)")) {
    const own = [...e.childNodes].some((n) => n.nodeType === 3 && n.textContent.trim());
    if (own) found.push([ratio(parts(getComputedStyle(e).color), behind(e)), e.tagName, e.textContent.trim().slice(0, 40)]);
  }
  const figures = [];
  for (const e of document.querySelectorAll("svg.figure [style*='--']")) {
    const style = getComputedStyle(e);
    for (const name of ["fill", "stroke"])
      if (new RegExp(name + ": var.--(?!line)").test(e.getAttribute("style")))
        figures.push([ratio(parts(style[name]), behind(e)), e.id, style[name]]);
  }
  return { text: found.sort((a, b) => a[0] - b[0]).slice(0, 3), count: found.length,
           figures: figures.sort((a, b) => a[0] - b[0]).slice(0, 3), drawn: figures.length };
})()
"""


@pytest.fixture(scope="module")
def report(tmp_path_factory):
    """A monoclinic crystal at two magnitudes, so that every kind of figure and table is there."""
    plan, table = returned_run(tmp_path_factory.mktemp("runs") / "diopside", "2/m", (0.005, 0.01))
    return strainkit.report_run(plan, table)


@pytest.fixture(scope="module")
def page(report, tmp_path_factory):
    path = tmp_path_factory.mktemp("page") / "report.html"
    report.save(path)
    return path


@pytest.fixture
def browser(need, tmp_path):
    need("chromium")
    found = Browser(str(shutil.which("chromium")), tmp_path / "profile")
    yield found
    found.close()


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("width", [360, 1400])
def test_page_opens_from_disk(browser, page, report, width, scheme):
    browser.open(page, width, scheme=scheme)
    assert browser.run("document.title") == report.page.title
    # nothing is wider than the window but what scrolls inside its own box
    assert browser.run("[document.documentElement.scrollWidth, innerWidth]") == [width, width]
    boxes = browser.run(
        "[...document.querySelectorAll('svg.figure')].map(e => { const r = e.getBoundingClientRect();"
        "return [r.left, r.right, r.height, e.querySelector('title').textContent, e.getAttribute('role')]; })"
    )
    assert [box[3] for box in boxes] == [drawing.title for drawing in report.figures.values()]
    for left, right, height, _, role in boxes:
        assert 0 <= left < right <= width
        assert right - left > 300
        assert height > 200
        assert role == "img"
    contrast = browser.run(CONTRAST)
    assert contrast["count"] > 300
    assert contrast["text"][0][0] >= 4.5, contrast["text"]  # WCAG 2.2, 1.4.3
    assert contrast["drawn"] > 100
    assert contrast["figures"][0][0] >= 3.0, contrast["figures"]  # WCAG 2.2, 1.4.11
    headings = browser.run("[...document.querySelectorAll('h1,h2,h3,h4,h5,h6')].map(e => Number(e.tagName[1]))")
    assert headings == [1] + [2] * (len(report.page.sections) + 1)
    assert browser.complaints == []
    assert browser.requests == [page.resolve().as_uri()]


@pytest.mark.parametrize(("scheme", "ground"), [("light", (255, 255, 255)), ("dark", (0x14, 0x17, 0x1B))])
def test_figures_are_really_painted(browser, page, report, scheme, ground):
    """Of each figure's pixels some are ground and some are ink; a map is mostly colour."""
    browser.open(page, 1400, scheme=scheme)
    for name in report.figures:
        picture = np.asarray(Image.open(io.BytesIO(browser.picture(f"#figure-{name} svg"))).convert("RGB"), dtype=int)
        away = np.abs(picture - ground).max(axis=2)
        assert 0.02 < (away > 40).mean() < 0.9, name
        if name in ("young-modulus", "shear-least"):
            assert (np.ptp(picture, axis=2) > 40).mean() > 0.3, name


def test_tables_sort_by_number_and_back(browser, page, report):
    browser.open(page, 1400)
    head = "#table-constants thead th:nth-child(2)"
    names = "[...document.querySelectorAll('#table-constants tbody tr')].map(r => r.cells[0].textContent)"
    rows = report.tables["constants"].rows
    assert browser.run(names) == [row[0].text for row in rows]
    by_value = [row[0].text for row in sorted(rows, key=lambda row: row[1].key)]
    assert by_value != [row[0].text for row in rows]
    for order, word in ((by_value, "ascending"), (by_value[::-1], "descending"), (by_value, "ascending")):
        browser.click(f"{head} button")
        assert browser.run(names) == order
        assert browser.run(f"document.querySelector('{head}').getAttribute('aria-sort')") == word
    browser.click("#table-constants thead th:nth-child(1) button")
    assert browser.run(names) == [row[0].text for row in rows]
    assert browser.run("document.querySelectorAll('#table-stiffness button').length") == 0
    assert browser.complaints == []


def test_it_prints_on_a4_in_light(browser, page):
    """With a dark screen too; A4 is 595 by 842 points."""
    browser.open(page, 1400, scheme="dark")
    pdf = browser.pdf()
    sizes = {tuple(round(float(x)) for x in box.split()) for box in _media_boxes(pdf)}
    assert sizes == {(0, 0, 595, 842)}
    browser.call("Emulation.setEmulatedMedia", media="print", features=[{"name": "prefers-color-scheme", "value": "dark"}])
    assert browser.run("getComputedStyle(document.body).backgroundColor") == "rgb(255, 255, 255)"
    assert browser.run("getComputedStyle(document.querySelector('nav')).display") == "none"


def _media_boxes(pdf: bytes) -> list[str]:
    import re

    return [box.decode() for box in re.findall(rb"/MediaBox \[([^\]]+)\]", pdf)]


def test_hostile_names_do_nothing(browser, tmp_path):
    """Scripts in names neither run nor, by the page's own policy, could."""
    from strainkit.present.report_page import Page, Paragraph, Section, Table, render

    steal = "document.title='owned'"
    bad = f"</script><script>{steal}</script><img src='http://example.invalid/x' onerror=\"{steal}\">"
    table = Table.of("t", bad, [bad, bad], [[bad, bad], [bad, bad]])
    finding = strainkit.Finding(bad, "warning", bad, bad)
    path = tmp_path / "bad.html"
    path.write_text(render(Page(bad, bad, "bad", (bad,), (finding,), (Section("s", bad, (Paragraph(bad), table)),))))
    browser.open(path, 800)
    browser.click("#table-t button")
    assert browser.run("document.title") == bad
    assert browser.run("document.querySelectorAll('img').length") == 0
    assert browser.requests == [path.resolve().as_uri()]
    assert browser.complaints == []
    # a script that did get in would be refused
    browser.run(
        f"(() => {{ const s = document.createElement('script'); s.textContent = \"{steal}\"; document.body.append(s); }})()"
    )
    assert browser.run("document.title") == bad
