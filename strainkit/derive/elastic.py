"""What everything is derived from: the tensors of one crystal, its cell, and the frame that results are printed in."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.frames import Frame, chosen_frame, crystal_frame
from strainkit.crystal.lattice import IndexAxes, index_axes
from strainkit.crystal.symmetry import Symmetry
from strainkit.derive.spread import stable_draws
from strainkit.errors import UsageError, counted
from strainkit.findings import Finding, finding
from strainkit.fit.result import Fit
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.prestress import stress_strain_coefficients
from strainkit.tensors.rotations import rotate_matrix
from strainkit.tensors.sixvectors import stiffness_to_voigt
from strainkit.tensors.stiffness import Stiffness
from strainkit.tensors.textfile import TensorFile

__all__ = ["ElasticCrystal", "from_fit", "from_tensor_file"]

#: a typed tensor that its crystal's symmetry changes by more than this part of its largest constant is doubted
_NOTABLE_CHANGE = 0.02


@dataclass(frozen=True)
class ElasticCrystal:
    """Elastic tensors of one crystal, all in the given frame.

    Attributes
    ----------
    name, origin : str
        What it is, and where the tensor comes from, in words.
    moduli : Stiffness
        Symmetric part of the stress-strain coefficients B: moduli and stability.
    waves : Stiffness
        Thermodynamic stiffness C: with `stress`, the speeds of sound. Equal to `moduli` without stress.
    stress : (3, 3)
        Reference stress, GPa, positive in tension; zero where unknown.
    frame : Frame
        Axes in which components and vectors are printed.
    laue_class : str or None
    crystal : Crystal or None
    axes : IndexAxes or None
        What (hkl) and [uvw] refer to; None without a cell.
    naming : (3, 3) or None
        Rows: the conventional axes in which constants have their names; None when unknown.
    density : float or None
        kg/m^3.
    findings : tuple of Finding
    """

    name: str
    origin: str
    moduli: Stiffness
    waves: Stiffness
    stress: FloatArray
    frame: Frame
    laue_class: str | None = None
    crystal: Crystal | None = None
    axes: IndexAxes | None = None
    naming: FloatArray | None = None
    density: float | None = None
    findings: tuple[Finding, ...] = ()

    @cached_property
    def compliance(self) -> FloatArray:
        """Mandel compliance (6, 6) of the moduli, 1/GPa."""
        return np.linalg.inv(self.moduli.mandel)

    @cached_property
    def draws(self) -> FloatArray:
        """Stable draws (s, 6, 6) of the moduli, Mandel, GPa; none without covariance."""
        return stable_draws(self.moduli)

    @cached_property
    def compliance_draws(self) -> FloatArray:
        """The same as compliances, 1/GPa."""
        return np.linalg.inv(self.draws)

    @property
    def wave_draws(self) -> FloatArray:
        """The same draws of the thermodynamic stiffness, whose errors are those of the moduli."""
        return self.draws + (self.waves.mandel - self.moduli.mandel)


def from_fit(fit: Fit, frame: str = "ieee", given_indices: bool = False) -> ElasticCrystal:
    """Tensors of a fitted run: B for moduli and stability, C with the reference stress for waves.

    Parameters
    ----------
    fit : Fit
    frame : str
        See `chosen_frame`.
    given_indices : bool
        Take (hkl) and [uvw] in the cell as given even when that is not a conventional one.

    Raises
    ------
    IncompleteError
        When some constants are undetermined.
    """
    plan = fit.plan
    stress = np.nan_to_num(fit.reference_stress)
    moduli = fit.effective
    asymmetry = _asymmetry(fit.answer, stress)
    ions = f"ions {plan.ions}" if fit.relaxed is None else "clamped ions and their answer to strain"
    without = f", without {', '.join(fit.dropped)}" if fit.dropped else ""
    removed = ", reference stress removed as an offset" if fit.reading == "offset" else ""
    return ElasticCrystal(
        name=plan.crystal.name,
        origin=f"fit of {counted(len(fit.jobs_used), 'job')}, {ions}, order {fit.order}{removed}{without}",
        moduli=moduli,
        waves=fit.answer,
        stress=stress,
        frame=chosen_frame(frame, plan.symmetry),
        laue_class=plan.symmetry.laue_class,
        crystal=plan.crystal,
        axes=index_axes(plan.symmetry, given_indices),
        naming=plan.frames["ieee"].rotation,
        density=plan.crystal.density,
        findings=(*fit.findings, *asymmetry),
    )


def _asymmetry(stiffness: Stiffness, stress: FloatArray) -> list[Finding]:
    """A finding where B is not symmetric by more than its error bars (it is under a pressure, not under other stresses)."""
    b = stiffness_to_voigt(stress_strain_coefficients(stiffness.mandel, stress))
    gap = np.abs(b - b.T)
    errors = stiffness.standard_errors
    allowed = 1e-3 * np.abs(b).max() if errors is None else 2.0 * errors
    if not (gap > np.maximum(allowed, 1e-6)).any():
        return []
    i, j = np.unravel_index(int(np.argmax(gap)), (6, 6))
    return [
        finding(
            "asymmetric-coefficients",
            "reference stress",
            f"B{i + 1}{j + 1} and B{j + 1}{i + 1} differ by {gap[i, j]:.2g} GPa because the reference stress is not a "
            "pressure: moduli and stability use the symmetric part",
        )
    ]


def from_tensor_file(
    file: TensorFile,
    crystal: Crystal | None = None,
    symmetry: Symmetry | None = None,
    frame: str = "given",
    density: float | None = None,
    given_indices: bool = False,
) -> ElasticCrystal:
    """Tensors typed by a user, taken as stress-strain coefficients (equal to C at zero pressure).

    Parameters
    ----------
    file : TensorFile
        Its axes are those it names, IEEE ones when it names none.
    crystal, symmetry : optional
        The cell, for planes, directions, Debye temperatures and for constants that symmetry fixes.
    frame, given_indices
        As for `from_fit`; the given frame is the cell's, or the file's axes without a cell.
    density : float, optional
        kg/m^3; the file's or the cell's when left out.
    """
    if symmetry is None or crystal is None:
        return _without_cell(file, chosen_frame(frame, None), density)
    if file.laue_class not in (None, symmetry.laue_class):
        raise UsageError(
            f"the tensor is of Laue class {file.laue_class}, the cell of {symmetry.laue_class}",
            file.where,
            "Check the line `laue` and the structure.",
        )
    typed = crystal_frame(file.axes or "ieee", symmetry)
    rotations = typed.rotation @ symmetry.rotations @ typed.rotation.T
    stiffness, _ = file.stiffness(rotations)
    given = stiffness.rotated(typed.rotation.T, "given")
    doubts = _foreign(stiffness, rotations, file.where, typed.name)
    if file.axes is None:
        doubts.append(finding("axes-assumed", file.where, f"no line `axes`: taken to be ieee ({typed.axes})"))
    return ElasticCrystal(
        name=file.name,
        origin=f"typed in {file.where}, {typed.name} axes",
        moduli=given,
        waves=given,
        stress=np.zeros((3, 3)),
        frame=chosen_frame(frame, symmetry),
        laue_class=symmetry.laue_class,
        crystal=crystal,
        axes=index_axes(symmetry, given_indices),
        naming=crystal_frame("ieee", symmetry).rotation,
        density=density or file.density or crystal.density,
        findings=(*crystal.remarks, *doubts),
    )


def _without_cell(file: TensorFile, frame: Frame, density: float | None) -> ElasticCrystal:
    stiffness, words = file.stiffness()
    return ElasticCrystal(
        name=file.name,
        origin=f"typed in {file.where}; symmetry axes: {words}",
        moduli=stiffness,
        waves=stiffness,
        stress=np.zeros((3, 3)),
        frame=frame,
        laue_class=file.laue_class,
        naming=None if file.laue_class is None else np.eye(3),
        density=density or file.density,
    )


def _foreign(stiffness: Stiffness, rotations: FloatArray, where: str, axes: str) -> list[Finding]:
    """A finding where the crystal's own rotations change a typed tensor."""
    average = np.mean([rotate_matrix(r, stiffness.mandel) for r in rotations], axis=0)
    change = np.abs(stiffness_to_voigt(average - stiffness.mandel))
    errors = stiffness.standard_errors
    allowed = np.full((6, 6), _NOTABLE_CHANGE * np.abs(stiffness.voigt).max())
    if not (change > (allowed if errors is None else np.maximum(allowed, 3.0 * errors))).any():
        return []
    return [
        finding(
            "tensor-breaks-symmetry",
            where,
            f"the symmetry of the cell changes this tensor by up to {change.max():.2g} GPa when its axes are {axes}: "
            "the axes may be others; used as typed",
        )
    ]
