"""The report: self-contained, whole, honest about what is missing, safe against nasty names."""

from __future__ import annotations

import re
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest
from support.files import SILICON, write
from support.published import mandel
from support.returned import linear_law, write_returns
from support.runs import returned_run

import strainkit
from strainkit.collect.table import StressRecord, StressTable, load_table
from strainkit.crystal.read import read_crystal
from strainkit.derive.derived import derive_properties
from strainkit.errors import InputError
from strainkit.evaluate.engines import Engine
from strainkit.evaluate.single import evaluate_cell
from strainkit.fit.finer import FinerChange
from strainkit.fit.result import fit_run
from strainkit.prepare.runfolder import plan_run
from strainkit.present.report import write_figures
from strainkit.present.report_fit import tensor_section
from strainkit.present.report_page import Page, Paragraph, Section, Table, number, render
from strainkit.present.report_verdict import verdict
from strainkit.present.reported import report_text
from strainkit.run.plan import load_plan
from strainkit.tensors.sixvectors import stress_to_voigt
from strainkit.units import EV_PER_A3_IN_GPA

SECTIONS = ["tensor", "shapes", "magnitude", "energies", "moduli", "directions", "provenance", "cautions"]
#: site labels that would be markup, or break out of an attribute, if they were not escaped; bonds too short, to have them named
NASTY = """data_<script>
_cell_length_a 5.624
_cell_length_b 5.624
_cell_length_c 5.624
_cell_angle_alpha 90
_cell_angle_beta 90
_cell_angle_gamma 90
_space_group_name_H-M_alt 'P a -3'
loop_
_atom_site_label
_atom_site_type_symbol
_atom_site_fract_x
_atom_site_fract_y
_atom_site_fract_z
C1"><img/src=x> C 0 0 0
O1<b>&amp; O 0.1 0.1 0.1
"""


class Seen(HTMLParser):
    """Elements, what they would load, text of headings, ids and text of an HTML file."""

    VOID = frozenset({"meta", "link", "br", "hr", "img", "input"})

    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags: list[str] = []
        self.loads: list[str] = []
        self.ids: list[str] = []
        self.text: list[str] = []
        self.open: list[str] = []
        self.headings: list[str] = []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        given = dict(attrs)
        self.loads += [v for k, v in attrs if k in ("src", "href", "xlink:href", "action", "data", "srcset", "poster")]
        self.loads += re.findall(r"url\(([^)]*)\)|@import", " ".join(v or "" for k, v in attrs if k == "style"))
        assert not any(k.startswith("on") for k in given), given
        self.ids += [given["id"]] if "id" in given else []
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_startendtag(self, tag, attrs):
        self.handle_starttag(tag, attrs)
        if tag not in self.VOID:
            self.open.pop()

    def handle_data(self, data):
        self.text.append(data)
        if self.open and self.open[-1] in ("h1", "h2", "h3"):
            self.headings.append(data)
        if self.open and self.open[-1] == "style":
            self.loads += re.findall(r"url\(([^)]*)\)|@import", data)


def self_contained(html: str) -> Seen:
    seen = Seen(html)
    assert seen.open == []
    assert len(html.encode()) < 2_000_000
    assert {load for load in seen.loads if not load.startswith("#")} == {"data:,"}
    assert seen.tags.count("script") == 1
    assert len(seen.ids) == len(set(seen.ids))
    assert all(load[1:] in seen.ids for load in seen.loads if load.startswith("#"))
    return seen


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    """Aragonite's tensor (mmm) at two magnitudes on an invented lattice, with invented noise."""
    folder = tmp_path_factory.mktemp("runs") / "aragonite"
    returned_run(folder, "mmm", (0.005, 0.01))
    return folder


def test_report_of_a_run(cli, run, tmp_path):
    out = tmp_path / "a b" / "page.html"
    figures = ("--figures", tmp_path / "figures", "--figure-format", "png")
    data = cli("report", run, "--out", out, "--frame", "crystal", "--plane", "2,1,0", *figures, "--quiet", "--json").json
    assert {path.name for path in (tmp_path / "figures").iterdir()} == {f"{name}.png" for name in data["figures"]}
    assert data["figure_files"] == [str(tmp_path / "figures" / f"{name}.png") for name in data["figures"]]
    html = out.read_text()
    seen = self_contained(html)
    assert data["report"] == str(out)
    assert data["bytes"] == len(html.encode())
    assert data["sections"] == SECTIONS
    assert [s for s in seen.ids if s in SECTIONS] == SECTIONS
    fit = cli("fit", run, "--json").json
    text = " ".join("".join(seen.text).split())
    # the worst standard error as a share of the constant, or of a tenth of the largest
    largest = max(c["value_GPa"] for c in fit["constants"])
    part = max(c["standard_error_GPa"] / max(abs(c["value_GPa"]), 0.1 * largest) for c in fit["constants"])
    assert data["precision_percent"] == pytest.approx(100 * part, rel=1e-9)
    lead = data["verdict"][0]
    assert lead.startswith("The fit is precise to")
    assert "cannot see" in lead
    assert "finer settings were not tried" in lead
    assert lead in text
    for constant in fit["constants"]:
        assert f"{constant['name']}" in text
    for phrase in (
        "second Piola-Kirchhoff",
        "Hill",
        "(2 1 0)",
        "SHA-256",
        "not a safety case",
        "numpy",
        "energies of the same jobs",
    ):
        assert phrase in text, phrase
    shapes = {
        job["label"].split("-")[0] for job in cli("prepare", "--extend", run, "--more", "1", "--dry-run", "--json").json["jobs"]
    }
    assert (
        {f"stress-strain-{s}" for s in shapes - {"reference"}}
        >= {f for f in data["figures"] if f.startswith("stress")}
        != set()
    )
    assert {"magnitude-shifts", "expected-error", "young-modulus", "linear-compressibility"} <= set(data["figures"])


@pytest.fixture(scope="module")
def silicon(tmp_path_factory):
    """A report as a Python object, and its run folder."""
    folder = tmp_path_factory.mktemp("runs") / "silicon"
    plan, table = returned_run(folder, "m-3m")
    return strainkit.report_run(plan, table), folder


def test_terminal_text_leads_with_the_verdict_and_ends_with_findings(silicon):
    report, _ = silicon
    lines = report_text(report, Path("run/report.html")).splitlines()
    assert max(map(len, lines)) <= 80
    assert "precise to" in lines[1]
    place = lines.index("Findings")
    assert all(line.startswith(("  info", "  warning", "  error", "      ")) for line in lines[place + 1 :])


def test_other_peoples_files_are_left_alone(cli, silicon, tmp_path):
    report, run = silicon
    mine = write(tmp_path, "notes.html", "<p>my notes</p>")
    for out in (mine, tmp_path):
        assert cli("report", run, "--out", out).code == 3
    with pytest.raises(InputError, match="left as it is"):
        report.save(mine)
    assert mine.read_text() == "<p>my notes</p>"
    report.save(mine, force=True)
    report.save(mine)  # now it is strainkit's own
    assert mine.read_text() == report.html


def test_figures_as_files(cli, silicon, tmp_path):
    report, run = silicon
    folder = tmp_path / "figures"
    written = write_figures([report.figures["young-modulus"]], folder, "svg")
    assert written == [folder / "young-modulus.svg"]
    foreign = write(folder, "young-modulus.svg", "<svg/>")
    with pytest.raises(InputError, match="left as it is"):
        write_figures([report.figures["young-modulus"]], folder, "svg")
    assert foreign.read_text() == "<svg/>"
    assert cli("report", run, "--figures", folder, "--figure-format", "gif").code == 2


def test_names_from_files_stay_text(cli, tmp_path):
    """The whole path: CIF, plan, outputs, table, fit, page. Text between dollars would be a formula to matplotlib."""
    run, name = tmp_path / "run", "<img src=x onerror=alert(1)> $x^$ &amp; '\""
    assert cli("prepare", write(tmp_path, f"{name}.cif", NASTY), "--out", run).code == 0
    write_returns(run, load_plan(run), linear_law(mandel("CO_alpha")))
    assert cli("collect", run).code == 0
    data = cli("report", run, "--json").json
    assert any('C1"><img/src=x>' in found["where"] + found["message"] for found in data["findings"])
    seen = self_contained((run / "report.html").read_text())
    assert seen.headings[0] == f"{name}: elastic stiffness"
    assert not {"img", "b"} & set(seen.tags)
    assert any('C1"><img/src=x>' in text for text in seen.text)


def test_every_part_of_a_page_is_escaped():
    """A page of nothing but markup, as comparisons may make one."""
    bad = "</script><script>alert(1)</script><img src=x onerror=alert(1)>'\""
    table = Table.of("t", bad, [bad, bad], [[bad, number(1.0)], [bad, number(2.0)]])
    found = strainkit.Finding(bad, "warning", bad, bad)
    html = render(Page(bad, bad, "doubt", (bad,), (found,), (Section("s", bad, (Paragraph(bad), table)),)))
    seen = self_contained(html)
    assert "img" not in seen.tags
    assert "".join(seen.text).count(bad) >= 10


@pytest.mark.parametrize(
    ("case", "code", "lead"),
    [
        ("undetermined", 4, "Incomplete: the jobs that came back do not determine"),
        ("none", 5, "No tensor: none of the"),
        ("unstable", 5, "Not mechanically stable: the smallest eigenvalue"),
    ],
)
def test_reports_of_what_is_not_a_tensor(cli, tmp_path, case, code, lead):
    folder = tmp_path / "run"
    if case == "unstable":
        stiffness = mandel("Si_CRC") - 1.2 * np.diag([0, 0, 0, 160.0, 160.0, 160.0])
        returned_run(folder, "m-3m", stiffness=stiffness)
    else:
        kept = ("reference",) if case == "none" else ("reference", "s1")
        returned_run(folder, "mmm", keep=lambda label: label.startswith(kept))
    result = cli("report", folder, "--json")
    assert result.code == code
    assert result.json["verdict"][0].startswith(lead)
    assert result.json["tone"] == "bad"
    assert result.json["sections"] == SECTIONS
    seen = self_contained((folder / "report.html").read_text())
    assert any(lead in text for text in seen.text)
    assert cli("report", folder).code == code


def test_report_needs_a_stress_table(cli, tmp_path):
    assert cli("prepare", write(tmp_path, "dry.cif", NASTY), "--out", tmp_path / "run").code == 0
    result = cli("report", tmp_path / "run")
    assert result.code == 3
    assert "no stress table yet" in result.err
    assert cli("report", tmp_path / "nothing").code == 3
    cells = [write(tmp_path, f"{name}.vasp", SILICON) for name in "ab"]
    assert cli("prepare", *cells, "--out", tmp_path / "many").code == 0
    result = cli("report", tmp_path / "many", "--json")
    assert result.code == 5
    assert all("no stress table yet" in crystal["problem"] for crystal in result.json["crystals"])
    assert "one of its run folders" in cli("report", tmp_path / "many", "--out", tmp_path / "x.html").err


def test_the_same_from_a_notebook(silicon):
    from matplotlib.figure import Figure

    report, run = silicon
    assert isinstance(report.figures["young-modulus"].figure, Figure)
    assert report.figures["young-modulus"]._repr_html_().count("<svg") == 1
    constants = report.tables["constants"]
    assert [row[0].text for row in constants.rows] == ["C11", "C12", "C44"]
    fit = fit_run(load_plan(run), load_table(run))
    assert [row[1].key for row in constants.rows] == pytest.approx(fit.regression.values, rel=1e-12)
    assert "<td>" in constants._repr_html_()
    assert 'srcdoc="&lt;!DOCTYPE html&gt;' in report._repr_html_()


def test_clamped_ions_are_told_from_relaxed_ones(tmp_path):
    """Tersoff silicon, C44 118.8 and 69.0 GPa: published 119 (Tersoff 1989), 69.0 (npj Comput. Mater. 10, 218, 2024)."""
    plan = plan_run(read_crystal(write(tmp_path, "POSCAR", SILICON)), [0.003], "clamped", displaced=True)
    records = []
    for job in plan.jobs:
        found = evaluate_cell(plan.starting_cell(job), Engine("tersoff"), relax=False)
        stress = stress_to_voigt(found.stress * EV_PER_A3_IN_GPA)
        records.append(StressRecord(job.label, "done", stress=stress, forces=found.forces))
    table = StressTable(tuple(records))
    fit = fit_run(plan, table)
    tables = {block.name: block for block in tensor_section(fit, "ieee").blocks if isinstance(block, Table)}
    assert tables["relaxed-stiffness"].rows[3][4].key == pytest.approx(69.0, rel=2e-3)
    assert tables["stiffness"].rows[3][4].key == pytest.approx(118.8, rel=2e-3)
    assert "clamped" in tables["stiffness"].caption
    row = tables["constants"].rows[2]
    assert (row[1].key, row[4].key) == pytest.approx((118.8, 69.0), rel=2e-3)
    said = " ".join(verdict(fit, derive_properties(fit), table, "", fit.findings).sentences)
    assert "answer of the ions is added" in said


def test_finer_settings_are_part_of_the_verdict(silicon):
    """C12 of Si_CRC in tests/data is 63.94 GPa, and 3 GPa of that 4.7 %; of C11, 165.78 GPa, they are less."""
    report, run = silicon
    change = FinerChange(
        ("s1-plus-1-finer", "s1-minus-1-finer"), np.array([3.0, 3.0, 0.0]), None, np.array([True, True, False])
    )
    fit = replace(report.fit, finer=change)
    found = verdict(fit, report.derived, load_table(run), "", fit.findings)
    assert "finer settings, tried on 2 jobs, move no constant by more than 4.7 % (C12, +3 GPa)" in found.sentences[0]
    constants = next(block for block in tensor_section(fit, "ieee").blocks if getattr(block, "name", "") == "constants")
    assert [row[-1].text for row in constants.rows] == ["3.00", "3.00", "~0.00"]
