"""strainkit derive on the command line: pages, JSON, typed tensors, mistakes."""

from __future__ import annotations

import pytest
from support.files import SILICON, write

from strainkit.shipped import shipped_folder

TYPED = """# Gammon et al. 1983, 257 K (seen; see tests/data/published_stiffness.json)
name ice Ih
laue 6/mmm
density 919
C11 13.929 0.041
C12 7.082 0.039
C13 5.765 0.023
C33 15.010 0.046
C44 3.014 0.011
"""

#: oxygen sites of ice Ih as neon atoms: only the lattice matters here (a 4.50, c 7.32 A)
ICE_LATTICE = """ice Ih lattice
1.0
4.50 0 0
-2.25 3.897114317 0
0 0 7.32
Ne
4
Direct
0.3333333333 0.6666666667 0.0625
0.6666666667 0.3333333333 0.9375
0.6666666667 0.3333333333 0.5625
0.3333333333 0.6666666667 0.4375
"""


@pytest.fixture
def typed(tmp_path):
    return write(tmp_path, "ice.txt", TYPED)


@pytest.fixture
def lattice(tmp_path):
    return write(tmp_path, "POSCAR", ICE_LATTICE)


def narrow(text: str) -> bool:
    return max(map(len, text.splitlines())) <= 80


def test_page_of_a_run(cli, tmp_path):
    run = tmp_path / "run"
    assert cli("prepare", write(tmp_path, "POSCAR", SILICON), "--out", run).code == 0
    assert cli("evaluate", run, "--engine", "tersoff", "--workers", 1).code == 0
    assert cli("collect", run).code == 0
    result = cli("derive", run, "--plane", "1,1,1", "--plane", "-1,0,2", "--direction", "1,1,0")
    assert result.code == 0
    assert narrow(result.out)
    titles = ["Can it be believed", "Squeezed", "Stretched or bent", "Sheared on a plane", "How uneven", "Sound", "Axes"]
    places = [result.out.index(f"\n{title}\n") for title in titles]
    assert places == sorted(places)
    assert "cannot see errors that are" in result.out
    assert "do not decide" in result.out
    for indices, spacing in (
        ("conventional", 5.432),
        ("given", 5.432 / 3**0.5),
    ):  # (1 0 0) of the cube, and of its rhombohedron
        data = cli("derive", run, "--plane", "1,0,0", "--indices", indices, "--json").json
        assert data["planes"][0]["d_spacing_A"] == pytest.approx(spacing, rel=1e-6)
        assert ("standard cell" in data["indices"]) == (indices == "conventional")
        assert data["frame"] == "ieee"
        assert data["bulk_GPa"]["reuss"] == pytest.approx(97.8, rel=0, abs=0.3)  # Tersoff silicon, tests/data/potentials.json


def test_typed_tensor_with_and_without_a_cell(cli, typed, lattice):
    bare = cli("derive", "--tensor", typed)
    assert bare.code == 0
    assert narrow(bare.out)
    assert "[" not in bare.out.split("Axes")[0].split("Squeezed")[1]  # no indices without a cell
    result = cli("derive", "--tensor", typed, "--cell", lattice, "--plane", "0,0,0,1", "--direction", "2,-1,-1,0")
    assert result.code == 0
    assert narrow(result.out)
    assert "(0 0 1)" in result.out
    assert "axes-assumed" in result.out
    data = cli("derive", "--tensor", typed, "--cell", lattice, "--json").json
    assert data["stability"]["probability"] == 1.0
    assert data["bulk_GPa"]["standard_error"]["reuss"] > 0
    assert data["density_kg_per_m3"] == 919
    assert cli("derive", "--tensor", typed, "--cell", lattice, "--json").json == data  # same command, same numbers
    faster = cli("derive", "--tensor", typed, "--cell", lattice, "--density", 459.5, "--json").json
    ratio = faster["debye"]["speed_m_per_s"]["value"] / data["debye"]["speed_m_per_s"]["value"]
    assert ratio == pytest.approx(2**0.5, rel=1e-9)


def test_a_frame_of_nine_numbers(cli, typed, lattice):
    data = cli("derive", "--tensor", typed, "--cell", lattice, "--frame", "0,0,1,1,0,0,0,1,0", "--json").json
    assert data["frame"] == "custom"
    assert data["stress_strain_GPa"][0][0] == pytest.approx(15.01, rel=1e-6)


def test_unstable_tensor(cli, tmp_path):
    path = write(tmp_path, "soft.txt", "laue m-3m\nC11 10\nC12 11\nC44 3\n")
    result = cli("derive", "--tensor", path)
    assert result.code == 5
    assert "not-positive-definite" in result.out
    assert "Nothing else is derived" in result.out
    assert cli("derive", "--tensor", path, "--json").json["young_GPa"] is None


@pytest.mark.parametrize(
    ("arguments", "code", "message"),
    [
        ([], 2, "one tensor is needed"),
        (["RUN", "--tensor", "TENSOR"], 2, "one tensor is needed"),
        (["RUN", "--cell", "CELL"], 2, "--cell and --density belong to --tensor"),
        (["--tensor", "TENSOR", "--noise", "0.1"], 2, "are for run folders"),
        (["--tensor", "TENSOR", "--plane", "1,1,1"], 2, "need a cell"),
        (["--tensor", "TENSOR", "--plane", "1,1"], 2, "are not indices"),
        (["--tensor", "TENSOR", "--density", "-1"], 2, "not possible"),
        (["--tensor", "TENSOR", "--frame", "crystal"], 2, "need a cell"),
        (["--tensor", "TENSOR", "--frame", "1,2"], 2, "unknown frame"),
        (["--tensor", "nothing.txt"], 3, "No such file"),
        (["--tensor", "CELL"], 3, "line 1: cannot make sense"),
        (["--tensor", "TENSOR", "--cell", "nothing.cif"], 3, "No such file"),
        (["--tensor", "CUBIC", "--cell", "CELL"], 2, "Laue class m-3m, the cell of 6/mmm"),
    ],
)
def test_mistakes(cli, tmp_path, typed, lattice, arguments, code, message):
    names = {
        "RUN": tmp_path / "run",
        "TENSOR": typed,
        "CELL": lattice,
        "CUBIC": write(tmp_path, "si.txt", "laue m-3m\nC11 166\nC12 64\nC44 80\n"),
    }
    result = cli("derive", *(names.get(argument, argument) for argument in arguments))
    assert result.code == code
    assert message in result.err
    assert result.out == ""


def test_one_distance_of_lattice_planes(cli, tmp_path):
    """Corundum, rhombohedrally centred: the obverse setting has -h+k+l = 3n, so (0 1 2) but not (0 1 -2).

    Distances by hand from a 4.7589, c 12.991 A of the sample cell; the constants are invented.
    """
    tensor = write(tmp_path, "tensor.txt", "axes ieee\nC11 497\nC12 163\nC13 116\nC14 22\nC33 501\nC44 147\n")
    cell = shipped_folder("sample_cells") / "corundum.cif"
    by_indices = (4 / 3 / 4.7589**2 + 4 / 12.991**2) ** -0.5
    page = " ".join(cli("derive", "--tensor", tensor, "--cell", cell, "--plane", "0,1,-2").out.split())
    assert page.count(f"asked for; d {by_indices / 3:.3f} A") == 2
    assert f"{by_indices / 3:.3f} A apart (centring counted; by the indices alone {by_indices:.3f} A)" in page
    page = " ".join(cli("derive", "--tensor", tensor, "--cell", cell, "--plane", "0,1,2").out.split())
    assert page.count(f"asked for; d {by_indices:.3f} A") == 2
    assert "by the indices alone" not in page
