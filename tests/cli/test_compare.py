"""strainkit compare on the command line: runs and typed tensors, files, mistakes, names that mean mischief."""

from __future__ import annotations

import csv
import io
from html.parser import HTMLParser

import numpy as np
import pytest
from ase.build import bulk
from ase.calculators.emt import EMT
from ase.spacegroup import crystal
from support.files import SILICON, write
from support.published import mandel
from support.returned import write_return

from strainkit.run.plan import job_folder, load_plan
from strainkit.tensors.sixvectors import from_mandel, to_mandel
from strainkit.tensors.strain import cauchy_from_pk2
from strainkit.units import EV_PER_A3_IN_GPA

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
    """A run whose energies (eV) and stresses follow the published tensor of silicon (CRC); Gaussian noise in GPa."""
    run, stiffness, rng = folder / name, mandel("Si_CRC"), np.random.default_rng(seed)
    assert cli("prepare", write(folder, "POSCAR", SILICON), "--out", run).code == 0
    plan = load_plan(run)
    for job in plan.jobs:
        strain = to_mandel(job.strain)
        sigma = cauchy_from_pk2(from_mandel(stiffness @ strain + noise * rng.standard_normal(6)), job.gradient)
        stored = 0.5 * strain @ stiffness @ strain * plan.crystal.volume / EV_PER_A3_IN_GPA
        cell = plan.crystal.deformed(job.gradient)
        write_return(run / job_folder(job.label), cell, sigma, energy=energy + stored, engine="lj fmax=0.0002")
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


def test_files_of_others_are_left_alone(cli, tmp_path):
    pair = [write(tmp_path, f"{name}.txt", MEASURED.replace("measured", name)) for name in ("a", "b")]
    for option in ("--csv", "--html"):
        mine = write(tmp_path, "mine", "dear diary")
        refused = cli("compare", *pair, option, mine)
        assert refused.code == 3
        assert "not written by strainkit" in refused.err
        assert mine.read_text() == "dear diary"
        assert cli("compare", *pair, option, mine, "--force").code == 0
        assert cli("compare", *pair, option, mine).code == 0  # its own file it may replace
        assert "dear diary" not in mine.read_text()


def test_baseline_and_other_ranking(cli, runs, tmp_path):
    page = cli("compare", *runs, "--baseline", "fine", "--by", "C44", "--html", tmp_path / "c.html")
    html = (tmp_path / "c.html").read_text()
    assert "Change against fine" in html
    assert "<svg" in html
    assert len(html) < 200_000
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


def test_alloy_formed_from_its_metals(cli, tmp_path):
    """Copper, gold and AuCu3 of the effective-medium potential; the energies again straight from ASE."""
    cubes = {"Cu": [("Cu", (0, 0, 0))], "Au": [("Au", (0, 0, 0))], "AuCu3": [("Au", (0, 0, 0)), ("Cu", (0, 0.5, 0.5))]}
    lengths = {"Cu": 3.59, "Au": 4.06, "AuCu3": 3.73}
    groups = {"Cu": 225, "Au": 225, "AuCu3": 221}
    energies, runs = {}, []
    for name, sites in cubes.items():
        symbols, basis = zip(*sites, strict=True)
        atoms = crystal(symbols, basis, spacegroup=groups[name], cellpar=[lengths[name]] * 3 + [90] * 3)
        atoms.calc = EMT()
        energies[name] = atoms.get_potential_energy() / 4  # four atoms in every one of these cubes
        atoms.write(tmp_path / f"{name}.vasp", direct=True)
        run = tmp_path / name
        assert cli("prepare", tmp_path / f"{name}.vasp", "--out", run, "--ions", "clamped", "--no-displaced").code == 0
        assert cli("evaluate", run, "--engine", "emt", "--workers", 1).code == 0
        assert cli("collect", run).code == 0
        runs.append(run)
    data = cli("compare", *runs, "--json").json
    (formed,) = data["energies"]
    assert formed["product"] == "AuCu3"
    assert formed["parents"] == [{"crystal": "Cu", "formula_units": "3"}, {"crystal": "Au", "formula_units": "1"}]
    expected = 4 * energies["AuCu3"] - 3 * energies["Cu"] - energies["Au"]
    assert formed["energy_eV"] == pytest.approx(expected, rel=0, abs=1e-6)
    assert [c["method"]["engine"] for c in data["crystals"]] == ["emt"] * 3
    assert {f["code"] for f in data["findings"]} == {"clamped-compared"}


def test_many_crystals_with_long_names_keep_to_the_page(cli, tmp_path):
    """Values that overlap like tiles get several letters each."""
    files = []
    for k in range(8):
        text = MEASURED.replace("measured", f"a crystal with a rather long name, the one with number {k}")
        text = text.replace("165.8(3)", f"{160 + 2 * k}.0(9)").replace("79.6(2)", f"{70 + k}.0(3)")
        files.append(write(tmp_path, f"{k}.txt", text))
    for more in ([], ["--baseline", files[3]], ["--by", "C11"]):
        page = cli("compare", *files, *more)
        assert page.code == 0
        assert narrow(page.out)
    letters = [v["letters"] for v in cli("compare", *files, "--json").json["constants"][0]["constants"][0]["values"]]
    assert max(map(len, letters)) > 1
    assert not set(letters[0]) & set(letters[-1])


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
    assert not {"img", "iframe", "object"} & {tag for tag, _ in parsed.tags}
    assert [tag for tag, _ in parsed.tags].count("script") == 1  # the page's own, which sorts tables
    links = [value for _, attrs in parsed.tags for key, value in attrs.items() if key in ("src", "href", "xlink:href")]
    assert all(value.startswith(("#", "data:,")) for value in links)
    assert not [attrs for _, attrs in parsed.tags if any(key.startswith("on") for key in attrs)]
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


def test_an_unstable_crystal_stops_neither_table_nor_the_ranking_of_the_others(cli, tmp_path):
    """Invented tensors; C11 < C12 is unstable (M. Born & K. Huang 1954): a shear modulus of (10 - 11)/2, eigenvalue -1."""
    soft = write(tmp_path, "soft.txt", "name soft\nlaue m-3m\nC11 10(1)\nC12 11(1)\nC44 3(1)\n")
    measured = write(tmp_path, "measured.txt", MEASURED)
    other = write(tmp_path, "other.txt", MEASURED.replace("measured", "other").replace("165.8", "170.0"))
    page = cli("compare", soft, measured, other, "--html", tmp_path / "c.html", "--csv", tmp_path / "c.csv")
    assert page.code == 5
    assert narrow(page.out)
    undecided = "smallest eigenvalue -1 +- 1.4 GPa: stability undecided"  # errors of C11 and C12: sqrt(1 + 1)
    assert f"not ranked: soft, no moduli, {undecided}" in " ".join(page.out.split())
    assert "soft is not ranked" in (tmp_path / "c.html").read_text()
    data = cli("compare", soft, measured, other, "--json").json
    assert data["ranking"]["order"] == ["other", "measured"]
    assert data["ranking"]["left_out"][0]["crystal"] == "soft"
    assert [q["values"][0]["value"] for q in data["moduli"]] == [None] * len(data["moduli"])
    assert [q["values"][0]["value"] for q in data["constants"][0]["constants"]] == [10, 11, 3]
    assert cli("compare", soft, measured, other, "--by", "C11", "--json").json["ranking"]["order"] == [
        "other",
        "measured",
        "soft",
    ]
    with_one = cli("compare", soft, measured, "--html", tmp_path / "c.html")
    assert with_one.code == 5
    assert "1. 2 measured" in with_one.out
    refused = cli("compare", soft, measured, "--by", "young")
    assert refused.code == 2
    assert "soft: no moduli, smallest" in refused.err
    softer = write(tmp_path, "softer.txt", "name softer\nlaue m-3m\nC11 6(1)\nC12 11(1)\nC44 3(1)\n")
    neither = cli("compare", soft, softer, "--html", tmp_path / "c.html", "--baseline", "soft")
    assert neither.code == 5
    assert "not ranked: softer, no moduli, smallest eigenvalue -5 GPa: the crystal is not stable" in " ".join(
        neither.out.split()
    )


def test_a_campaign_is_its_crystals(cli, tmp_path):
    copper = bulk("Cu", "fcc", a=3.59)
    copper.write(tmp_path / "one.vasp", direct=True)
    copper.set_cell(1.001 * copper.cell, scale_atoms=True)
    copper.write(tmp_path / "two.vasp", direct=True)
    cells, campaign = [tmp_path / f"{name}.vasp" for name in ("one", "two")], tmp_path / "campaign"
    assert cli("prepare", *cells, "--out", campaign, "--ions", "clamped", "--no-displaced").code == 0
    for run in (campaign / "runs" / "001").iterdir():
        assert cli("evaluate", run, "--engine", "emt", "--workers", 1).code == 0
        assert cli("collect", run).code == 0
    data = cli("compare", campaign, "--json").json
    assert [c["label"] for c in data["crystals"]] == ["one", "two"]
    assert len(data["energies"]) == 1  # the same metal twice: one form against the lower one


def test_an_incomplete_crystal_of_a_campaign_does_not_stop_the_others(cli, tmp_path):
    """Invented: copper at three lattice constants; one run loses a job, then another one everything."""
    copper = bulk("Cu", "fcc", a=3.59)
    for name, scale in (("one", 1.0), ("two", 1.001), ("three", 1.002)):
        copper.set_cell(scale * bulk("Cu", "fcc", a=3.59).cell, scale_atoms=True)
        copper.write(tmp_path / f"{name}.vasp", direct=True)
    cells, campaign = [tmp_path / f"{name}.vasp" for name in ("one", "two", "three")], tmp_path / "campaign"
    assert cli("prepare", *cells, "--out", campaign, "--ions", "clamped", "--no-displaced").code == 0
    runs = {run.name: run for run in (campaign / "runs" / "001").iterdir()}
    for run in runs.values():
        assert cli("evaluate", run, "--engine", "emt", "--workers", 1).code == 0
    for file in (runs["three"] / "jobs").glob("s1-*/returned.extxyz"):
        file.unlink()
    for run in runs.values():
        cli("collect", run)
    result = cli("compare", campaign, "--html", tmp_path / "c.html")
    assert result.code == 4
    assert "1 one" in result.out
    assert "2 two" in result.out
    assert "error not-compared" in result.out
    assert "none of the" in result.out
    assert "not-compared" in (tmp_path / "c.html").read_text()
    data = cli("compare", campaign, "--json").json
    assert [c["label"] for c in data["crystals"]] == ["one", "two"]
    assert [f["where"] for f in data["findings"] if f["code"] == "not-compared"] == [str(runs["three"])]
    (runs["two"] / "stresses.json").unlink()
    result = cli("compare", campaign)
    assert result.code == 4
    assert "1 of 3" in result.err
    assert "strainkit: compare" in result.err
