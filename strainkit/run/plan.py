"""The plan of a run, and its manifest strain-set.json: the only truth about what was asked for."""

from __future__ import annotations

import re
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any, Literal

import numpy as np

from strainkit import __version__
from strainkit.crystal.crystal import Crystal
from strainkit.crystal.frames import FRAMES, Frame
from strainkit.crystal.symmetry import Symmetry
from strainkit.design.expect import Expectation
from strainkit.design.jobs import StrainJob
from strainkit.errors import InputError
from strainkit.findings import Finding
from strainkit.run.files import atomic_write, dump_json, load_json
from strainkit.tensors.constants import ConstantBasis, constant_basis
from strainkit.tensors.sixvectors import strain_to_voigt

__all__ = ["MANIFEST", "Ions", "Plan", "job_folder", "load_plan"]

MANIFEST = "strain-set.json"
_KIND = "strainkit/strain-set"

Ions = Literal["relaxed", "clamped"]


@dataclass(frozen=True)
class Plan:
    """One crystal's strain set and all that is needed to fit it.

    Attributes
    ----------
    crystal : Crystal
        The reference cell.
    symmetry : Symmetry
    frames : dict of Frame
        By name: "given", "ieee", "crystal".
    jobs : tuple of StrainJob
        The reference first.
    ions : "relaxed" or "clamped"
        Whether the jobs relax their ions at fixed cell.
    aim : str
        How the strains were chosen.
    expectation : Expectation
    findings : tuple of Finding
        Doubts about the cell and the set.
    files : dict
        Relative path -> SHA-256 of every file that prepare wrote.
    calculation : dict
        How the jobs are computed (deck, its settings, k-mesh, pseudopotentials, job script); empty for cells only.
    """

    crystal: Crystal
    symmetry: Symmetry
    frames: dict[str, Frame]
    jobs: tuple[StrainJob, ...]
    ions: Ions
    aim: str
    expectation: Expectation
    findings: tuple[Finding, ...] = ()
    files: dict[str, str] = field(default_factory=dict)
    calculation: dict[str, Any] = field(default_factory=dict)

    @cached_property
    def basis(self) -> ConstantBasis:
        """Independent constants, named in IEEE axes, with their matrices in the given frame."""
        return constant_basis(self.symmetry.invariants, self.frames["ieee"].rotation)

    def to_dict(self) -> dict[str, Any]:
        """The manifest, and what `prepare --json` prints."""
        expected = self.expectation
        symmetry = self.symmetry
        return {
            "schema": f"{_KIND}/1",
            "strainkit_version": __version__,
            "name": self.crystal.name,
            "formula": self.crystal.formula,
            "laue_class": symmetry.laue_class,
            "space_group": symmetry.space_group,
            "independent_constants": len(self.basis.names),
            "constant_names": list(self.basis.names),
            "strained_jobs": len(self.jobs) - 1,
            "aim": self.aim,
            "ions": self.ions,
            "spare_degrees_of_freedom": expected.spare,
            "expected_standard_error_GPa": expected.standard_errors,
            "expected_standard_error_averages_GPa": expected.averages,
            "assumed_noise_GPa": expected.noise,
            "relative_cost": expected.relative_cost,
            "findings": [f.to_dict() for f in self.findings],
            "jobs": [
                {
                    "label": job.label,
                    "shape": job.shape,
                    "magnitude_percent": 100.0 * job.magnitude,
                    "strain_voigt": strain_to_voigt(job.strain),
                    "deformation_gradient": job.gradient,
                    "folder": job_folder(job.label),
                }
                for job in self.jobs
            ],
            "frames": {f.name: {"rotation": f.rotation, "axes": f.axes} for f in self.frames.values()},
            "symmetry": {
                "number": symmetry.number,
                "point_group": symmetry.point_group,
                "system": symmetry.system,
                "tolerance_A": symmetry.tolerance,
                "deviation_A": symmetry.deviation,
                "rotations": symmetry.rotations,
                "standard_lattice_A": symmetry.standard_lattice,
                "transformation": symmetry.transformation,
            },
            "reference_cell": {
                "source": self.crystal.source,
                "lattice_A": self.crystal.lattice,
                "fractional_positions": self.crystal.positions,
                "atomic_numbers": self.crystal.numbers,
                "labels": list(self.crystal.labels),
                "magnetic_moments": self.crystal.magnetic_moments,
            },
            "calculation": self.calculation or None,
            "files": self.files,
        }

    def same_set(self, other: Plan) -> bool:
        """Do two plans ask for the same calculations (whatever files go with them)?"""
        mine, theirs = self.crystal, other.crystal
        return (
            [job.label for job in self.jobs] == [job.label for job in other.jobs]
            and self.ions == other.ions
            and np.array_equal(mine.numbers, theirs.numbers)
            and np.allclose(mine.lattice, theirs.lattice, rtol=0, atol=1e-10)
            and np.allclose(mine.positions, theirs.positions, rtol=0, atol=1e-10)
            and np.allclose([j.gradient for j in self.jobs], [j.gradient for j in other.jobs], rtol=0, atol=1e-12)
        )

    def save(self, run: Path) -> None:
        """Write the manifest into an existing folder."""
        atomic_write(run / MANIFEST, dump_json(self.to_dict()))


def job_folder(label: str) -> str:
    """Folder of a job, relative to the run folder."""
    return f"jobs/{label}"


def load_plan(run: Path) -> Plan:
    """Read the manifest of a run folder.

    Raises
    ------
    InputError
        Not a run folder, or a manifest that is damaged or newer than this strainkit.
    """
    path = run / MANIFEST
    if not path.is_file():
        what = "not a run folder" if run.is_dir() else "no such run folder"
        raise InputError(f"{what} (no {MANIFEST})", run, "Make one with: strainkit prepare CELL --out RUN")
    data = load_json(path, _KIND)
    try:
        return _plan_from(data)
    except (KeyError, TypeError, ValueError, IndexError) as error:
        raise InputError(
            f"damaged manifest ({type(error).__name__}: {error})", path, "Restore it, or prepare the run again elsewhere."
        ) from None


def _plan_from(data: dict[str, Any]) -> Plan:
    cell, symmetry = data["reference_cell"], data["symmetry"]
    moments = cell["magnetic_moments"]
    jobs = tuple(
        StrainJob(
            label=_safe(job["label"]),
            shape=int(job["shape"]),
            magnitude=job["magnitude_percent"] / 100.0,
            gradient=np.array(job["deformation_gradient"], dtype=float),
        )
        for job in data["jobs"]
    )
    return Plan(
        crystal=Crystal(
            lattice=np.array(cell["lattice_A"]),
            positions=np.array(cell["fractional_positions"]),
            numbers=np.array(cell["atomic_numbers"]),
            labels=tuple(cell["labels"]),
            name=data["name"],
            source=cell["source"],
            magnetic_moments=None if moments is None else np.array(moments),
        ),
        symmetry=Symmetry(
            space_group=data["space_group"],
            number=symmetry["number"],
            point_group=symmetry["point_group"],
            laue_class=data["laue_class"],
            system=symmetry["system"],
            rotations=np.array(symmetry["rotations"]),
            standard_lattice=np.array(symmetry["standard_lattice_A"]),
            transformation=np.array(symmetry["transformation"]),
            tolerance=symmetry["tolerance_A"],
            deviation=symmetry["deviation_A"],
        ),
        frames={name: Frame(name, np.array(data["frames"][name]["rotation"]), data["frames"][name]["axes"]) for name in FRAMES},
        jobs=jobs,
        ions=data["ions"],
        aim=data["aim"],
        expectation=Expectation(
            standard_errors=data["expected_standard_error_GPa"],
            averages=data.get("expected_standard_error_averages_GPa", {"bulk": None, "shear": None}),
            spare=data["spare_degrees_of_freedom"],
            relative_cost=data["relative_cost"],
            noise=data["assumed_noise_GPa"],
        ),
        findings=tuple(Finding(**f) for f in data["findings"]),
        files=dict(data["files"]),
        calculation=dict(data.get("calculation") or {}),
    )


def _safe(label: str) -> str:
    if not re.fullmatch(r"[A-Za-z0-9_-][A-Za-z0-9._-]*", label):
        raise ValueError(f"job label {label!r} is not a plain file name")
    return label
