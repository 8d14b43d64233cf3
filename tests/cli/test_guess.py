"""prepare --guess and --kspacing: what is expected of a set before a job is run."""

from __future__ import annotations

import pytest
from ase.build import bulk


@pytest.fixture
def cell(tmp_path):
    path = tmp_path / "si.extxyz"
    bulk("Si", a=5.431, cubic=True).write(path)
    return path


def expected(cli, cell, *options):
    made = cli("prepare", cell, "--dry-run", "--json", *options)
    assert made.code == 0, made.err
    return made.json["expected_standard_error_averages_GPa"]


def tensor(path, c11, c12, c44):
    path.write_text(f"axes ieee\nC11 {c11}\nC12 {c12}\nC44 {c44}\n")
    return path


def test_errors_of_hill_averages_at_a_guess(cli, cell, tmp_path):
    """At an isotropic tensor Voigt and Reuss agree to first order, so the errors are the Voigt ones; elsewhere they are not."""
    plain = expected(cli, cell)
    isotropic = expected(cli, cell, "--guess", tensor(tmp_path / "a.txt", 100, 40, 30))
    uneven = expected(cli, cell, "--guess", tensor(tmp_path / "b.txt", 100, 80, 60))
    assert isotropic == pytest.approx(plain, rel=1e-4)
    assert uneven["bulk"] == pytest.approx(plain["bulk"], rel=1e-4)  # K is (C11 + 2 C12)/3 in both bounds
    assert abs(uneven["shear"] / plain["shear"] - 1) > 0.05


def test_irreducible_points_of_every_job(cli, cell):
    """Counted by spglib for a cell without any symmetry: half the mesh and the point itself."""
    made = cli("prepare", cell, "--dry-run", "--json", "--kspacing", 0.4).json
    jobs = {job["label"]: job for job in made["jobs"]}
    assert jobs["reference"]["laue_class"] == "m-3m"
    assert jobs["s1-plus-1"]["laue_class"] == "-1"
    # 3 x 3 x 3: Gamma and 26 points in pairs
    assert jobs["s1-plus-1"]["irreducible_kpoints"] == 14
    assert "times the reference's" in " ".join(cli("prepare", cell, "--dry-run", "--kspacing", 0.4).out.split())


def test_an_unstable_guess_is_refused(cli, cell, tmp_path):
    """C11 < C12: a tetragonal shear would cost no energy (Born's conditions for cubic crystals)."""
    guess = tensor(tmp_path / "guess.txt", 60, 64, 80)
    result = cli("prepare", cell, "--guess", guess, "--dry-run")
    assert result.code == 3
    assert "not positive" in result.err
    assert str(guess) in result.err
