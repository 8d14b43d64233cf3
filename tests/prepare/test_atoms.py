"""How the atoms of starting cells move: chosen once, written down, and used by everything that starts a job."""

from __future__ import annotations

import json

import numpy as np
import pytest
from ase.io import read
from support.files import DRY_ICE, SILICON, write
from support.molecular import ammonium_chloride, dry_ice

from strainkit.crystal.crystal import Crystal
from strainkit.errors import InputError, UsageError
from strainkit.evaluate import runset
from strainkit.evaluate.engines import Engine
from strainkit.prepare.runfolder import plan_run, write_run
from strainkit.run.plan import Plan, load_plan


@pytest.fixture
def cell(tmp_path):
    return write(tmp_path, "dry_ice.cif", DRY_ICE)


def bonds(atoms) -> np.ndarray:
    """The eight C-O bonds of a cell of dry ice, shortest distances first (angstrom)."""
    distances = atoms.get_all_distances(mic=True)[:4, 4:]
    return np.sort(distances, axis=1)[:, :2]


@pytest.mark.parametrize(
    ("crystal", "ions", "expected"),
    [
        (dry_ice(), "relaxed", "rigid"),
        (dry_ice(), "clamped", "affine"),
        (ammonium_chloride(), "relaxed", "rigid"),
        (Crystal(np.eye(3) * 5.31, np.zeros((1, 3)), np.array([18])), "relaxed", "affine"),
        (Crystal(2.1 * (1 - np.eye(3)), np.array([[0, 0, 0], [0.5, 0.5, 0.5]]), np.array([12, 8])), "relaxed", "affine"),
    ],
)
def test_auto(crystal, ions, expected):
    assert plan_run(crystal, ions=ions).atoms == expected


def test_rigid_keeps_bonds_in_every_file_and_affine_does_not(cli, cell, tmp_path):
    for atoms in ("rigid", "affine"):
        run = tmp_path / atoms
        assert cli("prepare", cell, "--out", run, "--atoms", atoms, "--format", "poscar", "--format", "extxyz").code == 0
        assert json.loads((run / "strain-set.json").read_text())["atoms"] == atoms
        reference = bonds(read(run / "jobs" / "reference" / "POSCAR", format="vasp"))
        for label in ("s1-plus-1", "s1-minus-1"):
            for name, format in (("POSCAR", "vasp"), ("cell.extxyz", "extxyz")):
                change = np.abs(bonds(read(run / "jobs" / label / name, format=format)) - reference).max()
                assert change < 1e-10 if atoms == "rigid" else change > 1e-4


def test_manifest_remembers(cell, tmp_path):
    from strainkit.crystal.read import read_crystal

    plan, _ = write_run(plan_run(read_crystal(cell)), tmp_path / "run")
    again = load_plan(tmp_path / "run")
    assert again.atoms == "rigid"
    assert again.molecules.counts == [("molecule", "CO2", 4)]
    for job in plan.jobs:
        np.testing.assert_allclose(again.starting_cell(job).positions, plan.starting_cell(job).positions, rtol=0, atol=1e-15)
    assert not again.same_set(plan_run(read_crystal(cell), atoms="affine"))


def test_manifest_of_an_older_strainkit_is_affine(cell, tmp_path):
    from strainkit.crystal.read import read_crystal

    write_run(plan_run(read_crystal(cell)), tmp_path / "run")
    path = tmp_path / "run" / "strain-set.json"
    data = json.loads(path.read_text())
    del data["atoms"], data["molecules"]
    path.write_text(json.dumps(data))
    plan = load_plan(tmp_path / "run")
    assert (plan.atoms, plan.molecules) == ("affine", None)


def test_damaged_choice_is_refused(cell, tmp_path):
    from strainkit.crystal.read import read_crystal

    write_run(plan_run(read_crystal(cell)), tmp_path / "run")
    path = tmp_path / "run" / "strain-set.json"
    data = json.loads(path.read_text())
    for change in ({"atoms": "sideways"}, {"molecules": None}, {"molecules": data["molecules"] | {"kinds": ["molecule"]}}):
        path.write_text(json.dumps(data | change))
        with pytest.raises(InputError, match="damaged manifest"):
            load_plan(tmp_path / "run")


def test_evaluate_starts_from_the_same_cell(cell, tmp_path, monkeypatch):
    """The engine is handed exactly the starting cells of the plan."""
    from strainkit.crystal.read import read_crystal

    plan, _ = write_run(plan_run(read_crystal(cell)), tmp_path / "run")
    begun = []
    monkeypatch.setattr(runset, "_guarded", lambda run, label, start, *rest: (begun.append((label, start)), (True, ""))[1])
    runset.evaluate_run(tmp_path / "run", plan, Engine("lj"), workers=1)
    assert [label for label, _ in begun] == [job.label for job in plan.jobs]
    for (_, start), job in zip(begun, plan.jobs, strict=True):
        np.testing.assert_array_equal(start.positions, plan.starting_cell(job).positions)


def test_choices_that_make_no_sense(cli, cell, tmp_path):
    silicon = write(tmp_path, "POSCAR", SILICON)
    result = cli("prepare", silicon, "--out", tmp_path / "run", "--atoms", "rigid")
    assert result.code == 3
    assert "no molecules to move" in result.err
    result = cli("prepare", cell, "--out", tmp_path / "run", "--atoms", "rigid", "--ions", "clamped")
    assert result.code == 2
    assert not (tmp_path / "run").exists()
    with pytest.raises(UsageError, match="rigid molecules with clamped ions"):
        plan_run(dry_ice(), ions="clamped", atoms="rigid")


def test_inspect_shows_molecules_and_problems(cli, tmp_path):
    short = write(tmp_path, "short.cif", DRY_ICE.replace("O1 O", "H1 H").replace("0.1185", "0.0950"))
    result = cli("inspect", short, "--json")
    assert result.code == 0
    assert result.json["molecules"]["counts"] == [{"kind": "molecule", "formula": "CH2", "count": 4}]
    assert "x-ray-hydrogens" in [f["code"] for f in result.json["findings"]]
    text = cli("inspect", short).out
    assert "molecules 4 CH2" in text
    assert "x-ray-hydrogens" in text
    assert max(map(len, text.splitlines())) <= 80
    layers = cli("inspect", write(tmp_path, "POSCAR", SILICON)).out
    assert "molecules none; 1 network of Si2 a cell" in layers


def test_symmetrize_on_the_command_line(cli, tmp_path):
    rounded = write(tmp_path, "cell.vasp", SILICON.replace("0.25 0.25 0.25", "0.2501 0.25 0.25"))
    plain = cli("prepare", rounded, "--out", tmp_path / "plain", "--json")
    assert "--symmetrize --symprec 0.01" in " ".join(f["message"] for f in plain.json["findings"])
    result = cli("prepare", rounded, "--out", tmp_path / "run", "--symmetrize", "--symprec", 0.01, "--json")
    assert result.json["space_group"] == "Fd-3m"
    (said,) = [f for f in result.json["findings"] if f["code"] == "symmetrized"]
    assert "atoms moved by at most" in said["message"]
    plan: Plan = load_plan(tmp_path / "run")
    away = plan.crystal.positions[1] - plan.crystal.positions[0]
    np.testing.assert_allclose(away, 0.25, rtol=0, atol=1e-12)
