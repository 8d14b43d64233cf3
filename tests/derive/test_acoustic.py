"""The acoustic check: force constants and stiffness of one potential agree; a wrong unit and a wrong frame are told apart."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from ase.build import bulk
from support.crystals import random_rotation
from support.phonons import phonopy_file

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.symmetry import find_symmetry
from strainkit.derive.derived import derive_properties
from strainkit.derive.elastic import from_tensor_file
from strainkit.dynamics.phonons import load_phonopy
from strainkit.errors import InputError
from strainkit.evaluate.engines import Engine
from strainkit.tensors.textfile import read_tensor

#: Tersoff silicon, GPa, as ASE's Tersoff gives it; published 142.5, 75.4, 69.0 (npj Comput. Mater. 10, 218, 2024)
CONSTANTS = (142.54, 75.38, 69.03)


@pytest.fixture(scope="module")
def silicon(tmp_path_factory):
    """Turned crystal, and force constants of the unturned one."""
    folder = tmp_path_factory.mktemp("phonons")
    atoms = bulk("Si", a=5.432, cubic=True)
    study = load_phonopy(phonopy_file(folder, atoms, Engine("tersoff"), 2))
    atoms.set_cell(atoms.cell.array @ random_rotation(np.random.default_rng(0)).T, scale_atoms=True)
    return Crystal.from_atoms(atoms, name="silicon"), study


def elastic(crystal, folder, constants):
    path = folder / "tensor.txt"
    path.write_text("axes ieee\n" + "\n".join(f"{n} {c}" for n, c in zip(("C11", "C12", "C44"), constants, strict=True)))
    return from_tensor_file(read_tensor(path), crystal, find_symmetry(crystal, 1e-3), "ieee", None, False)


def test_agreement(silicon, tmp_path):
    crystal, study = silicon
    derived = derive_properties(elastic(crystal, tmp_path, CONSTANTS), study=study)
    assert np.abs(derived.acoustic.difference).max() < 0.01
    assert not derived.findings
    assert derived.to_dict()["acoustic_check"]["agrees"]
    # longitudinal along [100] is sqrt(C11 / rho), written out
    expected = np.sqrt(142.54e9 / (8 * 28.085 * 1.66053907e-27 / 5.432e-10**3)) / 1e3
    assert derived.acoustic.phonons[0, 2] == pytest.approx(expected, rel=5e-3)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda e: [0.1 * c for c in e], "multiplied by 10"),
        (lambda e: [c / 160.2177 for c in e], "multiplied by 160"),
        (lambda e: [e[0], e[1], 118.8], "not by one factor"),  # ions clamped
    ],
)
def test_a_wrong_tensor_is_noticed(silicon, tmp_path, change, words):
    crystal, study = silicon
    derived = derive_properties(elastic(crystal, tmp_path, change(CONSTANTS)), study=study)
    (found,) = [f for f in derived.findings if f.code == "acoustic-mismatch"]
    assert words in found.message


def test_a_tensor_in_another_frame_is_noticed(silicon, tmp_path):
    crystal, study = silicon
    right = elastic(crystal, tmp_path, CONSTANTS)
    turned = right.moduli.rotated(random_rotation(np.random.default_rng(9)), "turned")
    derived = derive_properties(replace(right, moduli=turned, waves=turned), study=study)
    (found,) = [f for f in derived.findings if f.code == "acoustic-mismatch"]
    assert "not by one factor" in found.message


def test_force_constants_of_another_cell_are_refused(silicon, tmp_path):
    crystal, study = silicon
    other = replace(crystal, lattice=crystal.lattice * 1.03)
    with pytest.raises(InputError, match="another than that of the run"):
        derive_properties(elastic(other, tmp_path, CONSTANTS), study=study)
