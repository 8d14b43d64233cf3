"""Formats whose writers come from ASE and phonopy: those of them that keep the order of atoms and 1e-12 of the strain."""

from __future__ import annotations

import io
import tempfile
import warnings
from pathlib import Path

from strainkit.crystal.crystal import Crystal

__all__ = ["crystal_text", "gen_text", "pwmat_text", "xsf_text"]


def _through_ase(crystal: Crystal, format: str) -> str:
    from ase.io import write

    buffer = io.StringIO()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # remarks of ASE's writers to their developers
        write(buffer, crystal.to_atoms(), format=format)
    return buffer.getvalue()


def gen_text(crystal: Crystal, title: str) -> str:
    """Generic geometry of DFTB+, fractional coordinates."""
    from ase.io.gen import write_gen

    buffer = io.StringIO()
    write_gen(buffer, crystal.to_atoms(), fractional=True)
    return buffer.getvalue()


def crystal_text(crystal: Crystal, title: str) -> str:
    """External geometry (fort.34) of CRYSTAL, no symmetry."""
    return _through_ase(crystal, "crystal")


def xsf_text(crystal: Crystal, title: str) -> str:
    """XCrySDen structure."""
    return f"# {title}\n" + _through_ase(crystal, "xsf")


def pwmat_text(crystal: Crystal, title: str) -> str:
    """atom.config of PWmat."""
    from phonopy.interface.calculator import write_crystal_structure
    from phonopy.structure.atoms import PhonopyAtoms

    cell = PhonopyAtoms(symbols=crystal.symbols, cell=crystal.lattice, scaled_positions=crystal.positions)
    with tempfile.TemporaryDirectory(prefix="strainkit-") as folder:
        path = Path(folder) / "cell"
        write_crystal_structure(str(path), cell, interface_mode="pwmat")
        return path.read_text(encoding="utf-8")
