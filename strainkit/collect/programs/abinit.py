"""ABINIT main output: Hartree and Bohr, stress positive in tension, printed in blocks and again among the final variables."""

from __future__ import annotations

import re

import numpy as np
from ase.units import Bohr, Hartree

from strainkit.collect.returned import Geometry, Problems, Settings, Stress
from strainkit.collect.source import Source
from strainkit.collect.text import NUMBER, found, last, names, number, rows
from strainkit.tensors.arrays import FloatArray
from strainkit.units import STRESS_UNITS_IN_GPA

__all__ = [
    "BAD_MARKS",
    "END_MARK",
    "doubts",
    "energy",
    "forces",
    "geometry",
    "load",
    "recognises",
    "settings",
    "stress",
    "version",
]

END_MARK = re.compile(r"Calculation completed\.")
BAD_MARKS = ((re.compile(r"was not enough Broyd/MD steps to converge"), "unconverged", "ions not relaxed: too few steps"),)
_AFTER = "-outvars: echo values of variables after computation"
_BLOCK = r"-? *sigma\({0} {0}\)= *#...sigma\({1}\)= *#"
_FORMS = [_BLOCK.format(i, pair) for i, pair in ((1, "3 2"), (2, "3 1"), (3, "2 1"))]
_FUNCTIONAL = re.compile(r"Exchange-correlation functional for the present dataset will be:\s*\n\s*(.*?)\s*$", re.M)
_PSEUDO = re.compile(r"- pspini: atom type +\d+ +psp file is (\S+)")


def recognises(head: bytes) -> bool:
    """The main output; the log, which holds much of it too, begins otherwise."""
    return head.lstrip().startswith(b".Version") and b"ABINIT" in head


def load(source: Source) -> str:
    """The last run in the file."""
    text = source.text
    text = text[max(text.rfind("\n.Version"), 0) :]
    if "\n== DATASET  2 " in text:
        raise ValueError("several data sets in one output: give each strained cell its own")
    return text


def _after(text: str) -> str:
    start = text.rfind(_AFTER)
    if start < 0:
        raise ValueError("no variables after the computation")
    return text[start:]


def _variable(text: str, name: str, count: int) -> FloatArray | None:
    """A variable of the final list, exactly `count` numbers; None when it is not in the list."""
    match = re.search(rf" {name}((?:\s+{NUMBER}){{{count}}})\s+(?![-+]?\.?\d)", text)
    if match is None:
        if re.search(rf" {name}\s", text):
            raise ValueError(f"{name} cannot be read")
        return None
    return np.array([number(word) for word in match[1].split()])


def _needed(text: str, name: str, count: int) -> FloatArray:
    value = _variable(text, name, count)
    if value is None:
        raise ValueError(f"no {name}")
    return value


def _atom_count(text: str) -> int:
    """From the head of the output; the final list has it too, but for a single atom."""
    count = int(found(re.compile(r" natom = +(\d+) "), text, "number of atoms")[1])
    value = _variable(_after(text), "natom", 1)
    if int(value[0] if value is not None else 1) != count:
        raise ValueError("natom is printed twice and differs")
    return count


def _same(one: FloatArray | None, other: FloatArray | None) -> bool:
    return one is other if one is None or other is None else np.array_equal(one, other)


def geometry(text: str) -> Geometry:
    """From the variables after the computation: acell, rprim and xred, ten digits."""
    after = _after(text)
    count = _atom_count(text)
    scale = _variable(after, "acell", 3)
    axes = _variable(after, "rprim", 9)
    lattice = (np.eye(3) if axes is None else axes.reshape(3, 3)) * (np.ones(3) if scale is None else scale)[:, None]
    kinds = _variable(after, "ntypat", 1)
    charges = _needed(after, "znucl", 1 if kinds is None else int(kinds[0]))
    typat = _variable(after, "typat", count)
    if typat is None and len(charges) > 1:
        raise ValueError("no typat")
    types = np.ones(count, dtype=int) if typat is None else typat.astype(int)
    if types.min() < 1 or types.max() > len(charges):
        raise ValueError("typat cannot be read")
    fractions = _variable(after, "xred", 3 * count)
    positions = (
        np.zeros((count, 3)) if fractions is None and count == 1 else _needed(after, "xred", 3 * count).reshape(count, 3)
    )
    # the value of one bohr differs in the ninth digit between ABINIT and ASE
    cartesian = _needed(after, "xcart", 3 * count).reshape(count, 3)
    if np.abs(positions @ lattice - cartesian).max() > 2e-9 * max(
        1.0, float(np.abs(lattice).max()), float(np.abs(cartesian).max())
    ):
        raise ValueError("acell, rprim and xred do not give xcart")
    before = text[: text.rfind(_AFTER)]
    if not np.array_equal(_needed(before, "znucl", len(charges)), charges) or not _same(
        _variable(before, "typat", count), typat
    ):
        raise ValueError("znucl or typat are not those of the input")
    precision = 5e-9 * float(np.abs(lattice).max()) * Bohr
    return Geometry(lattice * Bohr, positions, np.rint(charges[types - 1]).astype(np.int64), precision)


def _block(text: str, start: int) -> FloatArray:
    parts = [rows(text, start, 1, form, "stress", skip=row)[0] for row, form in enumerate(_FORMS)]
    (xx, yz), (yy, xz), (zz, xy) = parts
    return np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]])


def stress(text: str) -> Stress | None:
    """strten (xx yy zz yz xz xy) of the final variables, repeated by the block in GPa."""
    start = text.rfind("-Cartesian components of stress tensor (GPa)")
    values = _variable(_after(text), "strten", 6)
    if start < 0 or values is None:
        return None
    xx, yy, zz, yz, xz, xy = values * STRESS_UNITS_IN_GPA["Ha/bohr^3"]
    value = np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]])
    repeat = _block(text, start)
    return Stress(value, repeat, 1e-6 * float(np.abs(value).max()) + 3e-7)


def energy(text: str) -> float | None:
    """etotal, the free energy where there is smearing."""
    return float(_needed(_after(text), "etotal", 1)[0] * Hartree)


def forces(text: str) -> FloatArray | None:
    after = _after(text)
    count = _atom_count(text)
    values, start = _variable(after, "fcart", 3 * count), text.rfind(" cartesian forces (hartree/bohr) at end:")
    if values is None and start < 0:
        return None
    block = rows(text, start, count, "@...#...#...#", "forces") if start >= 0 else np.zeros((0, 3))
    if values is None or np.shape(block) != (count, 3) or np.abs(block - values.reshape(count, 3)).max() > 1e-9:
        raise ValueError("the forces are printed twice and differ")
    return np.asarray(block * Hartree / Bohr)


def doubts(text: str) -> Problems:
    """The words about the last electronic cycle, and the words of a finished relaxation."""
    problems = []
    cycle = text[max(text.rfind("SELF-CONSISTENT-FIELD CONVERGENCE"), 0) :]
    if "not enough SCF cycles to converge" in cycle or not re.search(r" At SCF step +\d+.*converged", cycle):
        problems.append(("unconverged", "electronic steps did not converge"))
    if "=== [ionmov=" in text and "gradients are converged" not in text:
        problems.append(("unconverged", "ions not relaxed"))
    return tuple(problems)


def settings(text: str) -> Settings:
    """Variables that ABINIT omits have their defaults: no smearing, no dispersion, one spin."""
    after = _after(text)
    result: dict[str, str | float | tuple[float, ...]] = {}
    cutoff, count, mesh = _variable(after, "ecut", 1), _variable(after, "nkpt", 1), _variable(after, "kptrlatt", 9)
    if cutoff is not None:
        result["cutoff_eV"] = float(cutoff[0]) * Hartree
    if count is not None:
        result["kpoint_count"] = str(int(count[0]))
    if mesh is not None and not np.any(mesh.reshape(3, 3) - np.diag(mesh[::4])):
        result["kpoints"] = "x".join(str(int(n)) for n in mesh[::4])
    functional, ixc = last(_FUNCTIONAL, text), _variable(after, "ixc", 1)
    if functional is not None:
        result["functional"] = functional[1]
    elif ixc is not None:  # no words are printed for a negative one
        result["functional"] = f"ixc {int(ixc[0])}"
    result["pseudopotentials"] = names(path.rpartition("/")[2] for path in _PSEUDO.findall(text))
    occopt, width, spins = (_variable(after, name, 1) for name in ("occopt", "tsmear", "nsppol"))
    result["smearing"] = "none"
    if occopt is not None and 3 <= occopt[0] <= 8 and width is not None:
        result["smearing"] = f"occopt {int(occopt[0])}, {width[0] * Hartree:.4g} eV"
    dispersion = _variable(after, "vdw_xc", 1)
    result["dispersion"] = "none" if dispersion is None else f"vdw_xc {int(dispersion[0])}"
    result["spin"] = "polarised" if spins is not None and spins[0] == 2 else "none"
    return result


def version(text: str) -> str:
    match = re.search(r"\.Version\s+(\S+)", text)
    return match[1] if match else ""
