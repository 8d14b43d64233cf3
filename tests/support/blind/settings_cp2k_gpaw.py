"""Blind fault injector: settings in the text of CP2K and GPAW (see settings)."""

from __future__ import annotations

import re

import numpy as np

from support.blind.settings import another_mesh
from support.blind.text import like
from support.blind.text_cp2k_gpaw import Cp2k, Gpaw


# CP2K
def _restart(job: Cp2k, pattern: str, new: str) -> None:
    for name in job.names:
        if name.endswith((".restart", ".inp")):
            job.files[name] = re.sub(pattern, new, job.files[name])


def _cp2k_k_points(job: Cp2k, rng: np.random.Generator) -> bool:
    found = re.search(r"K-Point grid +(\d+) +(\d+) +(\d+)", job.text)
    if not found:
        return False
    mesh = another_mesh(rng, tuple(int(x) for x in found.groups()))
    grid = [np.array([i, j, k]) / mesh for i in range(mesh[0]) for j in range(mesh[1]) for k in range(mesh[2])]
    rows = [" BRILLOUIN|{:6d}{:18.5f}{:15.5f}{:15.5f}{:15.5f}\n".format(i + 1, 1 / len(grid), *p) for i, p in enumerate(grid)]
    job.swap(r"(K-Point grid +)\d+ +\d+ +\d+", r"\g<1>{:d}    {:d}    {:d}".format(*mesh))
    job.swap(r"(List of Kpoints .*?)\d+\n", rf"\g<1>{len(rows)}\n")
    job.swap(r"(BRILLOUIN\| Number .*\n)(?: BRILLOUIN\| +\d.*\n)+", lambda m: m[1] + "".join(rows))
    _restart(job, r"(MONKHORST-PACK) +\d+ +\d+ +\d+", r"\g<1> {:d} {:d} {:d}".format(*mesh))
    return True


def _cp2k_cutoff(job: Cp2k, rng: np.random.Generator) -> bool:
    factor = float(rng.choice((0.75, 0.8, 0.9, 1.1, 1.25, 1.5, 2.0)))
    for pattern in (
        r"(Density cutoff \[a\.u\.\]:)( +\S+)",
        r"(grid level)( +\d+\.\d+)",
        r"(PW_GRID\| Cutoff \[a\.u\.\])( +\S+)",
    ):
        job.swap(pattern, lambda m: m[1] + like(m[2], factor * float(m[2]), True), 0)
    old = float(re.search(r"Density cutoff \[a\.u\.\]: +(\S+)", job.text)[1])
    _restart(job, r"(?<![_A-Z])(CUTOFF +)[\d.E+]+", rf"\g<1>{2 * old:.16E}")
    return True


def _cp2k_functional(job: Cp2k, rng: np.random.Generator) -> bool:
    name, words = (("PADE", "S. Goedecker, M. Teter and J. Hutter, Phys. Rev. B 54, 1703 (1996)"),
                   ("BLYP", "A. Becke, Phys. Rev. A 38, 3098 (1988)"))[int(rng.integers(2))]  # fmt: skip
    _restart(job, r"PBE(?=\n| +T\n)", name)
    return job.swap(r"FUNCTIONAL\| PBE:\n.*\n.*\n", f"FUNCTIONAL| {name}:\n FUNCTIONAL| {words}\n")


def _cp2k_dispersion(job: Cp2k, rng: np.random.Generator) -> bool:
    rows = ("                                                  Pair Potential", "         DFT-D3 (Version 3.1)",
            "         Potential Form: S. Grimme et al, JCP 132: 154104 (2010)")  # fmt: skip
    head = "".join(f" vdW POTENTIAL| {row}\n" for row in rows)
    job.swap(
        r"(  Exchange-correlation energy: .*\n)", r"\g<1>  Dispersion energy:                       -0.02250331316914\n", 0
    )
    return job.swap(r"(\n\n)( QS\| Method:)", rf"\n{head}\g<1>\g<2>")


def _cp2k_smearing(job: Cp2k, rng: np.random.Generator) -> bool:
    line = "                        Smear method:                                FERMI_DIRAC\n"
    job.swap(
        r"(  Exchange-correlation energy: .*\n)", r"\g<1>  Electronic entropic energy:              -0.00000004278002\n", 0
    )
    return job.swap(r"(                        Mixing method: )", line + r"\g<1>")


def _cp2k_spin(job: Cp2k, rng: np.random.Generator) -> bool:
    job.swap(r"DFT\| Number of spin states( +)1", r"DFT| Number of spin states\g<1>2")
    new = "DFT| Spin unrestricted (spin-polarized) Kohn-Sham calculation            UKS"
    return job.swap(r"DFT\| Spin restricted Kohn-Sham \(RKS\) calculation +RKS", new)


def _cp2k_version(job: Cp2k, rng: np.random.Generator) -> bool:
    return job.swap(r"CP2K version [\d.]+", f"CP2K version {rng.choice(('8.2', '9.1', '2022.2', '2024.1'))}", 0)


def _cp2k_pseudopotential(job: Cp2k, rng: np.random.Generator) -> bool:
    _restart(job, "SZV-MOLOPT-SR-GTH", "DZVP-MOLOPT-SR-GTH")
    return job.swap("SZV-MOLOPT-SR-GTH", "DZVP-MOLOPT-SR-GTH", 0)


# GPAW
def _gpaw_k_points(job: Gpaw, rng: np.random.Generator) -> bool:
    found = re.search(r"size['=: ]+\((\d+), (\d+), (\d+)\)", job.text)
    mesh = another_mesh(rng, tuple(int(x) for x in found.groups()))
    job.swap(r"(size['=: ]+)\(\d+, \d+, \d+\)", r"\g<1>({:d}, {:d}, {:d})".format(*mesh))
    new = rf"\n{np.prod(mesh)} k-points: {mesh[0]} x {mesh[1]} x {mesh[2]} Monkhorst-Pack grid"
    job.swap(r"\n\d+ k-points: \d+ x \d+ x \d+ Monkhorst-Pack grid", new)
    return job.swap(r"\n\d+ k-points in the irreducible", rf"\n{(np.prod(mesh) + 4) // 3} k-points in the irreducible")


def _gpaw_cutoff(job: Gpaw, rng: np.random.Generator) -> bool:
    factor = float(rng.choice((0.75, 0.8, 0.9, 1.1, 1.25, 1.5, 2.0)))
    job.swap(r"(Cutoff energy:)( +\S+)", lambda m: m[1] + like(m[2], factor * float(m[2]), False))
    return job.swap(r"(ecut[:=] ?)([\d.]+)", lambda m: f"{m[1]}{factor * float(m[2])}")


def _gpaw_functional(job: Gpaw, rng: np.random.Generator) -> bool:
    name = str(rng.choice([x for x in ("LDA", "PBEsol", "RPBE", "PBE") if f"xc: {x}\n" not in job.text]))
    old = re.search(r"  xc: (\S+)", job.text)
    if not old:
        return False
    job.swap(rf"{old[1]} Exchange-Correlation functional", f"{name} Exchange-Correlation functional")
    job.swap(rf"XC parameters: {old[1]}", f"XC parameters: {name}")
    return job.swap(rf"  xc: {old[1]}", f"  xc: {name}")


def _gpaw_dispersion(job: Gpaw, rng: np.random.Generator) -> bool:
    return False


def _gpaw_smearing(job: Gpaw, rng: np.random.Generator) -> bool:
    width = float(rng.choice((0.01, 0.05, 0.2)))
    job.swap(r"Occupation numbers:.*\n(?:  .*\n)?", f"Occupation numbers: Fermi-Dirac:\n  width: {width:.4f}  # eV\n")
    return job.swap(r"(occupations: ).*\n(?: {10,}.*\n)*", rf"\g<1>{{name: fermi-dirac,\n                width: {width}}}\n")


def _gpaw_spin(job: Gpaw, rng: np.random.Generator) -> bool:
    job.swap(r"(  xc: )", r"  spinpol: True\n\g<1>")
    return job.swap("Spin-paired calculation", "Spin-polarized calculation.\nMagnetic moment: 0.000000")


def _gpaw_version(job: Gpaw, rng: np.random.Generator) -> bool:
    return job.swap(r"(\|__ \|  _\|___\|_____\|  )\S+", rf"\g<1>{rng.choice(('21.6.0', '22.1.0', '23.9.1', '24.1.0'))}")


def _gpaw_pseudopotential(job: Gpaw, rng: np.random.Generator) -> bool:
    digest = "".join(rng.choice(list("0123456789abcdef"), 32))
    return job.swap(r"(    id: )[0-9a-f]{32}", rf"\g<1>{digest}")
