"""The page of a comparison in a real browser: nothing fetched, no complaint, nothing wider than the window."""

from __future__ import annotations

import shutil

import pytest
from support.browser import Browser

from strainkit.derive.comparison import compare_crystals
from strainkit.derive.member import member_of_file
from strainkit.present.comparison_page import comparison_page
from strainkit.present.report_page import render
from strainkit.tensors.textfile import parse_tensor

pytestmark = pytest.mark.browser

#: krypton twice (Kr_10K and Kr_116K of tests/data/published_stiffness.json), and under a name that would be a script, a formula
#: and in a script that the font of figures lacks
KRYPTON = "laue m-3m\naxes ieee\ntemperature {kelvin} K\nC11 {c11}\nC12 {c12}\nC44 {c44}\n"
CRYSTALS = (
    ("</script><script>console.error('run')</script>", 10, "5.14(5)", "2.84(6)", "2.68(3)"),
    ("$\\frac{1}{2}$ krypton", 116, "2.66(3)", "1.73(2)", "1.26(2)"),
    ("\u6c2a", 116, "2.67(3)", "1.72(2)", "1.25(2)"),
)


@pytest.mark.parametrize(("width", "scheme"), [(360, "dark"), (1400, "light")])
def test_page_opens_from_disk(need, tmp_path, width, scheme):
    need("chromium")
    members = [
        member_of_file(parse_tensor(f"name {name}\n" + KRYPTON.format(kelvin=t, c11=a, c12=b, c44=c), f"{k}.txt"))
        for k, (name, t, a, b, c) in enumerate(CRYSTALS)
    ]
    page = comparison_page(compare_crystals(members))
    path = tmp_path / "comparison.html"
    path.write_text(render(page), encoding="utf-8")
    browser = Browser(str(shutil.which("chromium")), tmp_path / "profile")
    try:
        browser.open(path, width, scheme=scheme)
        assert browser.run("document.title") == page.title
        assert browser.run("[document.documentElement.scrollWidth, innerWidth]") == [width, width]
        assert browser.run("document.querySelectorAll('script').length") == 1
        box = browser.run("(r => [r.width, r.height])(document.querySelector('svg.figure').getBoundingClientRect())")
        assert box[0] > 300
        assert box[1] > 80
        names = "[...document.querySelectorAll('#table-ranking tbody tr')].map(r => r.cells[0].textContent)"
        before = browser.run(names)
        browser.click("#table-ranking thead th:nth-child(2) button")
        assert browser.run(names) == before[::-1]
        assert browser.complaints == []
        assert browser.requests == [path.resolve().as_uri()]
    finally:
        browser.close()
