"""The plan of a run, and its manifest strain-set.json: the only truth about what was asked for."""

from __future__ import annotations

import re
from collections import Counter
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path
from typing import Any, Literal, get_args

import numpy as np

from strainkit import __version__
from strainkit.crystal.crystal import Crystal
from strainkit.crystal.frames import FRAMES, Frame, standard_axes
from strainkit.crystal.molecules import Molecules
from strainkit.crystal.symmetry import Symmetry
from strainkit.design.expect import Expectation
from strainkit.design.jobs import StrainJob
from strainkit.errors import InputError
from strainkit.findings import Finding
from strainkit.run.files import atomic_write, dump_json, load_json
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.constants import ConstantBasis, basis_of_group
from strainkit.tensors.sixvectors import strain_to_voigt

__all__ = ["MANIFEST", "AtomMoves", "Ions", "Plan", "job_folder", "load_plan"]

MANIFEST = "strain-set.json"
_KIND = "strainkit/strain-set"

Ions = Literal["relaxed", "clamped"]
AtomMoves = Literal["rigid", "affine"]


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
        The reference first; jobs beyond the strain set (finer settings, displaced cells) at the end.
    ions : "relaxed" or "clamped"
        Whether the jobs relax their ions at fixed cell.
    aim : str
        How the strains were chosen.
    expectation : Expectation
    findings : tuple of Finding
        Doubts about the cell and the set.
    files : dict
        Relative path -> SHA-256 of every file that prepare wrote.
    atoms : "rigid" or "affine"
        Whether the starting cells move molecules as bodies or every atom with the lattice.
    molecules : Molecules or None
        What the bonds of the reference cell make of it; None in a manifest that does not say.
    calculation : dict
        How the jobs are computed (deck, its settings, k-mesh, pseudopotentials, job script); empty for cells only.
    finer : dict
        How the finer jobs are computed: "calculation" as above, and "engine", settings of a local engine.
    starts : dict
        Label -> fractional positions (n, 3) that a job starts from in place of the moved reference.
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
    atoms: AtomMoves = "affine"
    molecules: Molecules | None = None
    finer: dict[str, Any] = field(default_factory=dict)
    starts: dict[str, FloatArray] = field(default_factory=dict)

    def __post_init__(self) -> None:
        if self.atoms not in get_args(AtomMoves) or (self.atoms == "rigid" and self.molecules is None):
            raise ValueError(f"atoms {self.atoms!r} without molecules to move")

    @property
    def strain_set(self) -> tuple[StrainJob, ...]:
        """The jobs that the stiffness is fitted to: the reference and the strained ones."""
        return tuple(job for job in self.jobs if job.kind in ("reference", "strained"))

    def starting_cell(self, job: StrainJob) -> Crystal:
        """The cell that a job starts from: its lattice is the planned one, its atoms are moved as `atoms` says."""
        if job.label in self.starts:
            return replace(self.crystal.deformed(job.gradient), positions=self.starts[job.label])
        if job.moved is not None:
            atom, vector = job.moved
            positions = self.crystal.positions.copy()
            positions[atom] += np.linalg.solve(self.crystal.lattice.T, vector)
            return replace(self.crystal, positions=positions)
        if self.atoms == "rigid" and self.molecules is not None:
            return self.molecules.deformed(self.crystal, job.gradient)
        return self.crystal.deformed(job.gradient)

    @cached_property
    def basis(self) -> ConstantBasis:
        """Independent constants, named in IEEE axes, with their matrices in the given frame."""
        return basis_of_group(self.symmetry.rotations, self.frames["ieee"].rotation)

    @cached_property
    def standard_axes(self) -> FloatArray:
        """Rows (3, 3): axes in the given frame in which crystals of one Laue class have the same strains."""
        return standard_axes(self.symmetry)

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
            "strained_jobs": len(self.strain_set) - 1,
            "aim": self.aim,
            "ions": self.ions,
            "atoms": self.atoms,
            "molecules": None if self.molecules is None else self.molecules.to_dict(),
            "spare_degrees_of_freedom": expected.spare,
            "expected_standard_error_GPa": expected.standard_errors,
            "expected_standard_error_averages_GPa": expected.averages,
            "assumed_noise_GPa": expected.noise,
            "relative_cost": expected.relative_cost,
            "findings": [f.to_dict() for f in self.findings],
            "jobs": [
                {
                    "label": job.label,
                    "kind": job.kind,
                    "shape": job.shape,
                    "magnitude_percent": 100.0 * job.magnitude,
                    "strain_voigt": strain_to_voigt(job.strain),
                    "deformation_gradient": job.gradient,
                    "moved_atom": None if job.moved is None else {"atom": job.moved[0], "displacement_A": job.moved[1]},
                    "folder": job_folder(job.label),
                }
                for job in self.jobs
            ],
            "frames": {f.name: {"rotation": f.rotation, "axes": f.axes} for f in self.frames.values()},
            "symmetry": symmetry.to_dict(),
            "reference_cell": self.crystal.to_dict(),
            "starting_positions": self.starts,
            "finer": self.finer or None,
            "calculation": self.calculation or None,
            "files": self.files,
        }

    def same_set(self, other: Plan) -> bool:
        """Do two plans ask for the same calculations (whatever files go with them)?"""
        mine, theirs = self.crystal, other.crystal
        return (
            [job.label for job in self.jobs] == [job.label for job in other.jobs]
            and (self.ions, self.atoms) == (other.ions, other.atoms)
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
    if (run / "campaign.json").is_file() and not path.is_file():
        raise InputError("a campaign, and this is for one crystal", run, "Name one of its run folders, in runs/001 and so on.")
    if not path.is_file():
        what = "not a run folder" if run.is_dir() else "no such run folder"
        raise InputError(f"{what} (no {MANIFEST})", run, "Make one with: strainkit prepare CELL --out RUN")
    data = load_json(path, _KIND)
    try:
        return _plan_from(data)
    except (KeyError, TypeError, ValueError, IndexError, AttributeError) as error:
        raise InputError(
            f"damaged manifest ({type(error).__name__}: {error})", path, "Restore it, or prepare the run again elsewhere."
        ) from None


def _job_from(data: dict[str, Any]) -> StrainJob:
    moved = data.get("moved_atom")
    return StrainJob(
        label=_safe(data["label"]),
        shape=int(data["shape"]),
        magnitude=data["magnitude_percent"] / 100.0,
        gradient=_finite(data["deformation_gradient"], (3, 3)),
        kind=data.get("kind", "strained" if data["shape"] else "reference"),
        moved=None if moved is None else (int(moved["atom"]), _finite(moved["displacement_A"], (3,))),
    )


def _finite(values: Any, shape: tuple[int, ...]) -> FloatArray:
    array = np.array(values, dtype=float)
    if array.shape != shape or not np.isfinite(array).all():
        raise ValueError(f"{'x'.join(map(str, shape))} finite numbers are needed in place of {values!r}")
    return array


def _plan_from(data: dict[str, Any]) -> Plan:
    if not isinstance(data["name"], str):
        raise ValueError(f"the name {data['name']!r} is not text")
    labels = Counter(job["label"] for job in data["jobs"])
    if twice := [label for label, count in labels.items() if count > 1]:
        raise ValueError(f"more than one job is called {twice[0]!r}")
    if data["ions"] not in get_args(Ions):
        raise ValueError(f"ions {data['ions']!r}")
    return Plan(
        crystal=Crystal.from_dict(data["reference_cell"], data["name"]),
        symmetry=Symmetry.from_dict(data["symmetry"], data["space_group"], data["laue_class"]),
        frames={name: Frame(name, np.array(data["frames"][name]["rotation"]), data["frames"][name]["axes"]) for name in FRAMES},
        jobs=tuple(_job_from(job) for job in data["jobs"]),
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
        atoms=data.get("atoms", "affine"),
        molecules=Molecules.from_dict(data["molecules"]) if data.get("molecules") else None,
        calculation=dict(data.get("calculation") or {}),
        finer=dict(data.get("finer") or {}),
        starts={label: np.array(p, dtype=float) for label, p in (data.get("starting_positions") or {}).items()},
    )


def _safe(label: str) -> str:
    if not re.fullmatch(r"[A-Za-z0-9_-][A-Za-z0-9._-]*", label):
        raise ValueError(f"job label {label!r} is not a plain file name")
    return label
