"""strainkit compare on the command line: runs and typed tensors, files, mistakes, names that mean mischief."""

from __future__ import annotations

import csv
import io
from html.parser import HTMLParser

import numpy as np
import pytest
from support.files import SILICON, write
from support.published import mandel
from support.returned import linear_law, write_return, write_returns

from strainkit.run.plan import job_folder, load_plan
from strainkit.tensors.sixvectors import from_mandel

MEASURED = """name measured
laue m-3m
axes ieee
temperature 298
source invented for this test
C11 165.8(3)
C12 63.9(3)
C44 79.6(2)
"""


def silicon_run(cli, folder, name, noise, seed, energy=-1.0):
    """A run whose stresses follow the published tensor of silicon (CRC) with Gaussian noise, GPa."""
    run = folder / name
    assert cli("prepare", write(folder, "POSCAR", SILICON), "--out", run).code == 0
    rng, exact = np.random.default_rng(seed), linear_law(mandel("Si_CRC"))
    plan = load_plan(run)
    write_returns(run, plan, lambda strain: exact(strain) + noise * from_mandel(rng.standard_normal(6)))
    write_return(
        run / job_folder("reference"), plan.crystal, np.zeros((3, 3)), energy=energy, engine="lj epsilon=1.0 fmax=0.0002"
    )
    assert cli("collect", run).code == 0
    return run


@pytest.fixture
def runs(cli, tmp_path):
    return [silicon_run(cli, tmp_path, "coarse", 0.02, 1, -10.0), silicon_run(cli, tmp_path, "fine", 0.002, 2, -10.2)]


def narrow(text: str) -> bool:
    return max(map(len, text.splitlines())) <= 80


def test_page_and_files(cli, runs, tmp_path):
    measured = write(tmp_path, "measured.txt", MEASURED)
    page = cli("compare", *runs, measured, "--csv", tmp_path / "c.csv", "--html", tmp_path / "c.html")
    assert page.code == 0
    assert narrow(page.out)
    titles = ["Crystals", "Side by side", "Constants, IEEE axes", "Ranked by Young's modulus E, GPa"]
    places = [page.out.index(title) for title in titles]
    assert places == sorted(places)
    assert "temperatures-differ" in page.out
    assert "cannot see errors that are smooth" in " ".join(page.out.split())
    assert "coarse (Si) less fine: 9.65 kJ/mol, 0.1000 eV" in page.out  # 0.2 eV a cell of two atoms, by hand
    data = cli("compare", *runs, measured, "--json").json
    assert data["schema"] == "strainkit/comparison/1"
    assert [c["label"] for c in data["crystals"]] == ["coarse", "fine", "measured"]
    assert data["crystals"][2]["temperature_K"] == 298
    assert data["crystals"][2]["source"] == "invented for this test"
    bulk = next(q for q in data["moduli"] if q["name"] == "bulk_GPa")["values"]
    published = (165.78 + 2 * 63.94) / 3  # CRC; tests/data/published_stiffness.json
    for value in bulk:
        assert abs(value["value"] - published) < 6 * value["standard_error"] + 0.1
    assert data == cli("compare", *runs, measured, "--json").json  # same command, same numbers
    rows = list(csv.DictReader(io.StringIO((tmp_path / "c.csv").read_text())))
    assert {row["kind"] for row in rows} == {"value", "difference", "energy"}
    in_csv = [float(r["value"]) for r in rows if (r["kind"], r["quantity"]) == ("value", "bulk_GPa")]
    assert in_csv == [v["value"] for v in bulk]
    assert len([r for r in rows if r["kind"] == "difference"]) == len(data["differences"]) == data["tests"]


def test_baseline_and_other_ranking(cli, runs):
    page = cli("compare", *runs, "--baseline", "fine", "--by", "C44")
    assert page.code == 0
    assert narrow(page.out)
    assert "Change against 2 fine" in page.out
    assert "Ranked by C44, GPa" in page.out
    by_folder = cli("compare", *runs, "--baseline", runs[1], "--json").json
    assert by_folder["baseline"] == "fine"
    assert {d["first"] for d in by_folder["differences"]} == {"fine"}


def test_the_saved_fit_is_followed(cli, runs):
    plain = cli("compare", *runs, "--json").json["crystals"][0]
    assert plain["degrees_of_freedom"] is not None
    assert cli("fit", runs[0], "--noise", "0.02").code == 0
    known = cli("compare", *runs, "--json").json["crystals"][0]
    assert known["degrees_of_freedom"] is None


def test_a_tensor_with_its_cell(cli, runs, tmp_path):
    cell = write(tmp_path, "si.vasp", SILICON)
    measured = write(tmp_path, "measured.txt", MEASURED)
    data = cli("compare", runs[1], f"{measured}:{cell}", "--json").json
    assert data["crystals"][1]["formula"] == "Si2"
    assert data["crystals"][1]["softest_shear"]["along"]["nearest_plane"] is not None
    assert len(data["constants"][0]["constants"]) == 3


class _Page(HTMLParser):
    """Tags, attributes and text of a page."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.words = ""
        self.feed(text)

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))

    def handle_data(self, data):
        self.words += data


def test_names_cannot_inject_anything(cli, tmp_path):
    bad = "<img src=x onerror=alert(1)>\x1b[2J\u202e"
    evil = write(tmp_path, "evil.txt", MEASURED.replace("name measured", f"name {bad}").replace("invented", "</p><script>"))
    formula = write(tmp_path, "formula.txt", MEASURED.replace("name measured", "name @SUM(1)"))
    page = cli("compare", evil, formula, "--html", tmp_path / "c.html", "--csv", tmp_path / "c.csv")
    assert page.code == 0
    assert "\x1b" not in page.out
    assert "\u202e" not in page.out
    html = (tmp_path / "c.html").read_text()
    parsed = _Page(html)
    assert not {"img", "script", "a", "link", "iframe"} & {tag for tag, _ in parsed.tags}
    assert not [attrs for _, attrs in parsed.tags if {"src", "href", "onerror"} & set(attrs)]
    assert "<img src=x onerror=alert(1)>" in parsed.words
    assert "\x1b" not in html
    cells = {row["crystal"] for row in csv.DictReader(io.StringIO((tmp_path / "c.csv").read_text()))}
    assert "'@SUM(1)" in cells
    assert not any(cell.startswith("@") for cell in cells)


@pytest.mark.parametrize(
    ("arguments", "code", "message"),
    [
        ([], 2, "at least two"),
        (["RUN"], 2, "at least two"),
        (["RUN", "RUN"], 2, "given twice"),
        (["RUN", "nowhere"], 3, "no such run folder"),
        (["RUN", "EMPTY"], 3, "strainkit collect"),
        (["RUN", "TENSOR", "--baseline", "gold"], 2, "no crystal 'gold'"),
        (["RUN", "TENSOR", "--by", "hardness"], 2, "--by"),
        (["RUN", "TENSOR:nothing.cif"], 3, "nothing.cif"),
        (["RUN", "POSCAR"], 3, "cannot make sense"),
    ],
)
def test_mistakes(cli, tmp_path, arguments, code, message):
    places = {"TENSOR": write(tmp_path, "measured.txt", MEASURED), "POSCAR": write(tmp_path, "POSCAR", SILICON)}
    if "RUN" in arguments and len(arguments) > 1:
        places["RUN"] = silicon_run(cli, tmp_path, "run", 0.01, 3)
    if "EMPTY" in arguments:
        places["EMPTY"] = tmp_path / "empty"
        assert cli("prepare", places["POSCAR"], "--out", places["EMPTY"]).code == 0
    words = [str(places.get(a, a)) for a in arguments]
    words = [w.replace("TENSOR:", f"{places['TENSOR']}:") for w in words]
    result = cli("compare", *words)
    assert result.code == code
    assert message in result.err
    assert not result.out


def test_an_unstable_crystal(cli, tmp_path):
    soft = write(tmp_path, "soft.txt", "name soft\nlaue m-3m\nC11 10(1)\nC12 11(1)\nC44 3(1)\n")
    page = cli("compare", soft, write(tmp_path, "measured.txt", MEASURED), "--by", "C11")
    assert page.code == 5
    assert "C11, GPa" in page.out
    assert cli("compare", soft, tmp_path / "measured.txt").code == 2  # no modulus to rank by
