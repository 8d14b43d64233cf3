"""VASP, OUTCAR: stress in kbar, positive in compression, order xx yy zz xy yz zx; the row above has it in eV."""

from __future__ import annotations

import re

import numpy as np

from strainkit.collect.returned import Geometry, Problems, Settings, Stress
from strainkit.collect.source import Source
from strainkit.collect.text import NUMBER, elements, found, fractional, last, last_number, names, number, rows
from strainkit.tensors.arrays import FloatArray
from strainkit.units import EV_PER_A3_IN_GPA

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

END_MARK = re.compile(r"General timing and accounting informations for this job")
BAD_MARKS: tuple[tuple[re.Pattern[str], str, str], ...] = ()
#: numbers of fixed decimals that may stand without a space between them
_FIXED = r"(-?\d+\.\d{5})"
_TOTAL = re.compile(r"^ +Total +" + r" *".join([_FIXED] * 6) + r"\s*$", re.M)
_KBAR = re.compile(r"^ +in kB +" + r" *".join([_FIXED] * 6) + r"\s*$", re.M)
_VOLUME = re.compile(rf"volume of cell : +({NUMBER})\s*$", re.M)
_AXES = "direct lattice vectors                 reciprocal lattice vectors"
_FORCES = re.compile(r" POSITION +TOTAL-FORCE \(eV/Angst\) *\n")
_ENERGY = re.compile(rf"free +energy +TOTEN += +({NUMBER}) eV\s*$", re.M)
_ABORT = re.compile(r"aborting loop (because EDIFF is reached|EDIFF was not reached)")
_RELAXED = "reached required accuracy - stopping structural energy minimisation"


def recognises(head: bytes) -> bool:
    return head.lstrip().startswith(b"vasp.") and (b"executed on" in head or b"POTCAR:" in head)


def load(source: Source) -> str:
    return source.text


def _species(text: str) -> list[str]:
    """Symbols of the atoms: one VRHFIN or one POTCAR title for each species, times ions per type."""
    counts = [int(word) for word in found(re.compile(r"ions per type = +([\d ]+?) *$", re.M), text, "ions per type")[1].split()]
    names = re.findall(r"VRHFIN =\s*([A-Z][a-z]?)", text) or re.findall(r" POTCAR: +\S+ ([A-Z][a-z]?)(?=[\W_\d])", text)
    # the titles are printed twice
    names = names[: len(counts)]
    if len(names) != len(counts) or sum(counts) > 100_000:
        raise ValueError("species and numbers of ions do not agree")
    return [name for name, count in zip(names, counts, strict=True) for _ in range(count)]


def geometry(text: str) -> Geometry:
    symbols = _species(text)
    start, heading = text.rfind(_AXES), last(_FORCES, text)
    if start < 0 or heading is None:
        raise ValueError("no lattice vectors or positions")
    axes = r" *".join([r"(-?\d+\.\d{9})"] * 6)
    lattice = rows(text, start, 3, axes, "lattice vectors")[:, :3]
    values = rows(text, heading.start(), len(symbols), "...".join("#" * 6), "positions", skip=1)
    return Geometry(lattice, fractional(values[:, :3], lattice), elements(symbols), 0.5e-9)


def _tensor(words: tuple[str, ...]) -> FloatArray:
    xx, yy, zz, xy, yz, zx = (number(word) for word in words)
    return np.array([[xx, xy, zx], [xy, yy, yz], [zx, yz, zz]])


def stress(text: str) -> Stress | None:
    """The kbar row, repeated by the row of totals in eV over the volume."""
    start = text.rfind("FORCE on cell =-STRESS in cart. coord.  units (eV)")
    if start < 0:
        return None
    total, kbar, volume = _TOTAL.search(text, start), _KBAR.search(text, start), _VOLUME.search(text, start)
    if not (total and kbar and volume):
        raise ValueError("the stress cannot be read")
    size = number(volume[1])
    repeat = -_tensor(total.groups()) / size * EV_PER_A3_IN_GPA
    rounding = 1.1e-6 + 0.6e-5 / size * EV_PER_A3_IN_GPA + (0.006 / size + 2e-6) * float(np.abs(repeat).max())
    return Stress(-0.1 * _tensor(kbar.groups()), repeat, rounding)


def energy(text: str) -> float | None:
    """Free energy TOTEN of the last ionic step."""
    heading = text.find("FREE ENERGIE OF THE ION-ELECTRON SYSTEM", max(text.rfind(" Iteration "), 0))
    return None if heading < 0 else last_number(_ENERGY, text, heading)


def forces(text: str) -> FloatArray | None:
    heading = last(_FORCES, text)
    if heading is None:
        return None
    return rows(text, heading.start(), len(_species(text)), "...".join("#" * 6), "forces", skip=1)[:, 3:]


def _parameter(text: str, name: str, default: float) -> float:
    match = re.search(rf" {name} += +({NUMBER})", text)
    return number(match[1]) if match else default


def doubts(text: str) -> Problems:
    problems = []
    loop = last(_ABORT, text)
    if loop is None or "not" in loop[1]:
        problems.append(("unconverged", "electronic steps did not converge"))
    steps, method = int(_parameter(text, "NSW", 0)), int(_parameter(text, "IBRION", -1))
    if steps > 0 and method == 0:
        problems.append(("unconverged", "ions moved by dynamics"))
    if steps > 0 and method in (1, 2, 3) and _RELAXED not in text:
        problems.append(("unconverged", "ions not relaxed"))
    printed = text.rfind("FORCE on cell =-STRESS in cart. coord.  units (eV)")
    if loop is not None and 0 <= printed < text.rfind(" Iteration "):
        problems.append(("unfinished", "the stress is of an earlier ionic step than the last one begun"))
    return tuple(problems)


def settings(text: str) -> Settings:
    method, width = int(_parameter(text, "ISMEAR", 1)), _parameter(text, r"ISMEAR = +-?\d+; +SIGMA", 0.2)
    result: dict[str, str | float | tuple[float, ...]] = {
        "smearing": f"ISMEAR {method}, {width:.4g} eV",
        "spin": "polarised" if _parameter(text, "ISPIN", 1) == 2 else "none",
    }
    if cutoff := _parameter(text, "ENCUT", 0.0):
        result["cutoff_eV"] = cutoff
    if count := re.search(r"NKPTS = +(\d+)", text):
        result["kpoint_count"] = count[1]
    if functional := re.search(r" GGA += +(\S+)", text):
        result["functional"] = functional[1]
    result["pseudopotentials"] = names(" ".join(title.split()) for title in re.findall(r"TITEL += +(\S.*)", text))
    correction = re.search(r" IVDW += +(\d+)", text)
    result["dispersion"] = f"IVDW {correction[1]}" if correction and correction[1] != "0" else "none"
    return result


def version(text: str) -> str:
    match = re.match(r"\s*vasp\.(\S+)", text)
    return match[1] if match else ""
