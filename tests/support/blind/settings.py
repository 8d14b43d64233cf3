"""Blind fault injector: another k-mesh, cutoff, functional and so on in a program's text.

Each edit is what the program prints under that other setting (forms: tests/data/outputs; versions and names of functionals:
from memory of the programs). False when the edit does not apply.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from importlib import import_module

import numpy as np
import spglib

from strainkit.crystal.spacegroup import spglib_raises
from support.blind.abinit import Abinit
from support.blind.text import Editor, Espresso, like, numbers

#: row of the table -> code whose documented meaning it is
SETTINGS = {
    "k-points": "mixed-settings",
    "cutoff": "mixed-settings",
    "functional": "mixed-settings",
    "dispersion": "mixed-settings",
    "smearing": "mixed-settings",
    "spin": "mixed-settings",
    "version": "mixed-versions",
    "pseudopotential (not in the list)": "mixed-settings",
}


def choice(name: str, editor: Editor, rng: np.random.Generator) -> Callable[[Editor], bool]:
    """The new value of a setting, drawn once, as an edit for every job that shall have it."""
    seed = int(rng.integers(2**31))
    kind, word = type(editor).__name__.lower(), name.split()[0].replace("-", "_")
    place = globals() if kind in ("espresso", "abinit") else vars(import_module("support.blind.settings_cp2k_gpaw"))
    function = place[f"_{kind}_{word}"]
    return lambda job: bool(function(job, np.random.default_rng(seed)))


def another_mesh(rng: np.random.Generator, old: tuple[int, ...]) -> tuple[int, ...]:
    """Another mesh: one or all numbers larger or smaller."""
    new = list(old)
    step, which = int(rng.choice((-2, -1, 1, 2))), int(rng.integers(4))
    for i in range(3):
        if which in (i, 3):
            new[i] = max(1, new[i] + step)
    return tuple(new) if tuple(new) != tuple(old) else (old[0] + 1, old[1] + 1, old[2] + 1)


def _irreducible(lattice: np.ndarray, places: np.ndarray, mesh: tuple[int, ...]) -> tuple[np.ndarray, np.ndarray]:
    """Fractional irreducible points of a mesh through Gamma, and their weights."""
    cell = (lattice, places, np.ones(len(places), dtype=int))
    with spglib_raises():
        mapping, grid = spglib.get_ir_reciprocal_mesh(mesh, cell, is_shift=[0, 0, 0], symprec=1e-4)
    first, counts = np.unique(mapping, return_counts=True)
    return grid[first] / np.array(mesh), counts / counts.sum()


# Quantum ESPRESSO
def _espresso_k_points(job: Espresso, rng: np.random.Generator) -> bool:
    axes = np.array([numbers(x)[:3] for x in re.findall(r"  a\(\d\) = \((.*)\)", job.text)[:3]])
    places = np.array([numbers(x)[:3] for x in re.findall(r"tau\( *\d+\) = \((.*)\)", job.text)]) @ np.linalg.inv(axes)
    block = re.search(r"(number of k points= +)(\d+)(.*\n.*\n)((?: +k\( .*\n)+)", job.text)
    fractional = np.array([numbers(row.split("=", 1)[1])[:3] for row in block[4].splitlines()]) @ axes.T
    old = []
    for column in fractional.T:
        denominators = [n for n in range(1, 13) if np.allclose(column * n, np.round(column * n), atol=1e-3)]
        old.append(denominators[0] if denominators else 4)
    points, weights = _irreducible(axes, places, another_mesh(rng, tuple(old)))
    points = points @ np.linalg.inv(axes).T
    rows = [
        "        k({:5d}) = ({:12.7f}{:12.7f}{:12.7f}), wk ={:12.7f}\n".format(i + 1, *p, 2 * w)
        for i, (p, w) in enumerate(zip(points, weights, strict=True))
    ]
    new = f"{block[1]}{len(rows)}{block[3]}" + "".join(rows)
    job.text = job.text[: block.start()] + new + job.text[block.end() :]
    return True


def _scaled_cutoff(job: Espresso | Abinit, rng: np.random.Generator, patterns: tuple[str, ...]) -> bool:
    factor = float(rng.choice((0.75, 0.8, 0.9, 1.1, 1.25, 1.5, 2.0)))
    for pattern in patterns:
        job.swap(pattern, lambda m: m[1] + like(m[2], factor * float(m[2]), True), 0)
    return True


def _espresso_cutoff(job: Espresso, rng: np.random.Generator) -> bool:
    patterns = (r"(kinetic-energy cutoff +=)( +\S+)", r"(charge density cutoff +=)( +\S+)", r"( ecut=)( +\S+)")
    return _scaled_cutoff(job, rng, patterns)


def _espresso_functional(job: Espresso, rng: np.random.Generator) -> bool:
    new = (
        ("SLA  PW   PSX  PSC ", "   1   4  10   8   0   0   0"),
        ("SLA  PZ   NOGX NOGC", "   1   1   0   0   0   0   0"),
        ("SLA  PW   RPB  PBC ", "   1   4  13   4   0   0   0"),
    )[int(rng.integers(3))]
    return job.swap(r"(Exchange-correlation=).*\n( +\().*\)", rf"\g<1> {new[0]}\n\g<2>{new[1]})")


def _espresso_dispersion(job: Espresso, rng: np.random.Generator) -> bool:
    """DFT-D3 or Grimme-D2 (words of pw.x 6.7) where there was none; none or Grimme-D2 where there was DFT-D3."""
    had = "Parameters for DFT-D3" in job.text
    if had:
        job.swap(r" +-+\n     Parameters for DFT-D3 Dispersion Correction:\n(?:.*\n)*?(?=     Subspace diagonalization)", "")
        job.swap(r"     DFT-D3 Dispersion .*\n", "", 0)
        if rng.random() < 0.5:
            return True
    words, term = "Parameters for DFT-D3 Dispersion Correction:", "DFT-D3 Dispersion        "
    if had or rng.random() > 0.5:
        words, term = "Parameters for Dispersion (Grimme-D2) Correction:", "Dispersion Correction    "
    line = "     " + "-" * len(words)
    head = f"{line}\n     {words}\n{line}\n"
    if "D2" in words:
        head += "       atom      VdW radius       C_6     \n\n        Si          3.243       320.089\n\n"
    job.swap(r"(     ewald contribution .*\n)", rf"\g<1>     {term} =      -0.04332427 Ry\n", 0)
    return job.swap(r"(     Subspace diagonalization in iterative)", head + r"\g<1>")


def _espresso_smearing(job: Espresso, rng: np.random.Generator) -> bool:
    kind = str(rng.choice(("Fermi-Dirac", "Marzari-Vanderbilt", "Methfessel-Paxton", "gaussian")))
    width = float(rng.choice((0.002, 0.005, 0.01, 0.02, 0.05)))
    job.swap(r"highest occupied level \(ev\): +(\S+)", r"the Fermi energy is     \g<1> ev", 0)
    job.swap(r"(     ewald contribution .*\n)", r"\g<1>     smearing contrib. (-TS)   =      -0.00081530 Ry\n", 0)
    return job.swap(r"(number of k points= +\d+)\n", rf"\g<1>  {kind} smearing, width (Ry)=  {width:.4f}\n")


def _espresso_spin(job: Espresso, rng: np.random.Generator) -> bool:
    moment = "".join(
        f"     {word} magnetization{gap}=     0.00 Bohr mag/cell\n" for word, gap in (("total", " " * 7), ("absolute", " " * 4))
    )
    job.swap(r"(     estimated scf accuracy .*\n)", rf"\g<1>\n{moment}", 0)
    head = "     Starting magnetic structure \n     atomic species   magnetization\n        Si           0.200\n\n"
    return job.swap(r"(     +\d+ Sym\. Ops\.|     No symmetry found)", head + r"\g<1>")


def _espresso_version(job: Espresso, rng: np.random.Generator) -> bool:
    return job.swap(r"Program PWSCF v\.\S+", "Program PWSCF v." + str(rng.choice(("6.4.1", "6.8", "7.0", "7.2", "7.3.1"))))


def _espresso_pseudopotential(job: Espresso, rng: np.random.Generator) -> bool:
    digest = "".join(rng.choice(list("0123456789abcdef"), 32))
    job.swap(r"MD5 check sum: \S+", f"MD5 check sum: {digest}")
    return job.swap(r"(pseudo/\w+)\.[\w.-]+UPF", r"\g<1>.pbe-n-rrkjus_psl.1.0.0.UPF")


# ABINIT
def _abinit_k_points(job: Abinit, rng: np.random.Generator) -> bool:
    axes = np.array([numbers(x)[:3] for x in re.findall(r" R\(\d\)=(.*?)G", job.text)[:3]])
    lines = job.text.split("\n")
    start = next(i for i, line in enumerate(lines) if re.match(r" +xred ", line))
    count = int(re.search(r"natom +(\d+)", job.text)[1])
    places = np.array([numbers(line)[:3] for line in lines[start : start + count]])
    diagonal = [int(x) for x in re.search(r"kptrlatt +(.*)", job.text)[1].split()[::4]]
    mesh = another_mesh(rng, tuple(diagonal))
    points, weights = _irreducible(axes, places, mesh)
    lattice = "{:5d}{:5d}{:5d}  {:5d}{:5d}{:5d}  {:5d}{:5d}{:5d}".format(*np.diag(mesh).ravel())
    rows = [" ".join(f"{x:15.8E}" for x in p).strip() for p in points]
    weight = [" ".join(f"{x:10.5f}" for x in weights[i : i + 6]) for i in range(0, len(weights), 6)]
    job.swap(r"( kptrlatt).*", rf"\g<1>    {lattice}", 0)
    job.swap(r"( nkpt +=? *)\d+", rf"\g<1>{len(rows)}", 0)
    job.swap(r"(nkpt: )\d+", rf"\g<1>{len(rows)}", 0)
    job.swap(r"( kpt +).*\n(?: {15,}[-\d].*\n)*", lambda m: m[1] + f"\n{' ' * 23}".join(rows) + "\n", 0)
    job.swap(r"( wtk +).*\n(?: {15,}[-\d].*\n)*", lambda m: m[1] + f"\n{' ' * 22}".join(weight) + "\n", 0)
    return True


def _abinit_cutoff(job: Abinit, rng: np.random.Generator) -> bool:
    return _scaled_cutoff(job, rng, (r"( ecut +)(\S+)", r"(\{ecut:)( +[\d.]+)", r"(ecut\(hartree\)=)( +\S+)"))


def _abinit_functional(job: Abinit, rng: np.random.Generator) -> bool:
    number, words = ((11, "GGA: Perdew-Burke-Ernzerhof functional"), (7, "LDA: Perdew-Wang 92 LSD fit to Ceperley-Alder data"),
                     (-116133, "LibXC: PBEsol"))[int(rng.integers(3))]  # fmt: skip
    if re.search(rf" ixc +{number}\n", job.text):
        return False
    job.swap(r"(functional for the present dataset will be:\n).*", rf"\g<1>  {words} - ixc={number}", 0)
    if number > 0 and "functional for the present" not in job.text:
        block = f"\n Exchange-correlation functional for the present dataset will be:\n  {words} - ixc={number}\n"
        job.swap(r"(meta: \{optdriver.*\n\.\.\.\n)", rf"\g<1>{block}")
    return job.swap(r"( ixc +)-?\d+", rf"\g<1>{number}", 0)


def _abinit_dispersion(job: Abinit, rng: np.random.Generator) -> bool:
    return job.swap(r"(\n +typat .*)", rf"\g<1>\n          vdw_xc           {rng.choice((5, 6, 7))}", 0)


def _abinit_smearing(job: Abinit, rng: np.random.Generator) -> bool:
    option, width = int(rng.choice((3, 4, 7))), float(rng.choice((0.002, 0.005, 0.02)))
    job.swap(r"( occopt =? +)1\n", rf"\g<1>{option}\n", 0)
    job.swap(r"( occopt = +)1 ", rf"\g<1>{option} ", 0)
    job.swap(r"occopt: +\S+ tsmear: +\S+ ", f"occopt:   {option:.8E}, tsmear:   {width:.8E}, ", 0)
    job.swap(r"(\n +optforces )", rf"\n           occopt           {option}\g<1>", 0)
    return job.swap(r"(\n +typat )", rf"\n           tsmear      {width:.8E} Hartree\g<1>", 0)


def _abinit_spin(job: Abinit, rng: np.random.Generator) -> bool:
    job.swap(r"nspden =( +)1", r"nspden =\g<1>2", 0)
    job.swap(r"nsppol =( +)1", r"nsppol =\g<1>2", 0)
    job.swap(r"nsppol: 1, nspinor: 1, nspden: 1", "nsppol: 2, nspinor: 1, nspden: 2", 0)
    return job.swap(r"(\n +nstep )", r"\n           nspden           2\n           nsppol           2\g<1>", 0)


def _abinit_version(job: Abinit, rng: np.random.Generator) -> bool:
    return job.swap(r"\.Version \S+ of", f".Version {rng.choice(('8.10.3', '9.4.2', '9.10.3', '10.0.9'))} of")


def _abinit_pseudopotential(job: Abinit, rng: np.random.Generator) -> bool:
    job.swap(r"psp8_standard|Si\.psp8|14_Si_psml\.psp8", "Si-sp.psp8", 0)
    return job.swap(
        r"- (\w+)    ONCVPSP-3\.\d\.\d  r_core=.*", r"- \g<1>    ONCVPSP-4.0.1  r_core=   1.30303   1.42197   1.51712", 0
    )


__all__ = ["SETTINGS", "another_mesh", "choice"]
