"""Findings: what strainkit cannot be sure of, by name, with the number that made it doubt.

A finding's code never changes meaning. `CODES` is the documented list; a code that is not in it is an error.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import asdict, dataclass
from typing import Any, Literal

from strainkit.errors import StrainkitError, printable

__all__ = ["CODES", "Finding", "Severity", "finding", "worst"]

Severity = Literal["info", "warning", "error"]

#: code -> (severity, meaning)
CODES: dict[str, tuple[Severity, str]] = {
    # the cell
    "deuterium": ("info", "deuterium is treated as hydrogen"),
    "no-symmetry-in-file": ("warning", "the CIF names no space group and lists no operations"),
    "attached-hydrogens": ("warning", "the CIF says that some atoms carry hydrogens which it does not list"),
    "solvent-masked": ("warning", "the CIF says that solvent was taken out of the data and is not among its atoms"),
    "formula-differs": ("warning", "the atoms of the cell do not add up to the formula that the CIF states"),
    "disorder-group": ("info", "one disorder group is all that the file holds: read as an ordered model"),
    "atoms-too-close": ("warning", "atoms closer, or with more bonds, than chemistry allows"),
    "missing-hydrogens": ("warning", "organic atoms whose geometry asks for hydrogens that are not there"),
    "x-ray-hydrogens": ("warning", "bonds to hydrogen as short as X-ray diffraction shows them"),
    "odd-electrons": ("warning", "an odd electron count that nothing in the cell balances"),
    "ions-or-radicals": ("info", "molecules with an odd electron count that can balance each other"),
    "unbonded-atoms": ("warning", "metal atoms or hydrogens without a neighbour at bonding distance"),
    "molecules-and-network": ("info", "molecules beside chains, layers or a framework"),
    "void": ("warning", "empty space that a solvent molecule fits into"),
    "open-framework": ("info", "a framework with empty space that a small molecule fits into"),
    "implausible-density": ("warning", "a density or packing coefficient that hardly any crystal has"),
    "left-handed-cell": ("warning", "the lattice vectors are left-handed"),
    "nonstandard-setting": ("info", "the cell is not the standard one of its space group, and is kept as given"),
    "off-symmetry": ("info", "atoms are not exactly on the positions of the space group"),
    "symmetrized": ("info", "atoms and cell were moved onto the space group, as asked"),
    "symmetry-depends-on-tolerance": ("warning", "ten times more or less tolerance gives another space group"),
    "bonds-changed": ("warning", "relaxing the reference made other molecules or networks of it"),
    # the strain set
    "target-error": ("info", "how the wanted standard error is met"),
    "internal-strain-cost": ("info", "what relaxing the ions costs against clamped ions with displaced cells"),
    "few-spare-degrees": ("warning", "fewer than three spare degrees of freedom to estimate the noise from"),
    # the files of the jobs
    "orientation-not-in-format": ("info", "a cell format holds lengths and angles only, not the Cartesian axes"),
    "no-dispersion": ("warning", "an organic crystal is computed without a dispersion correction"),
    "relaxation-unfinished": ("warning", "the cell comes from a relaxation that did not end or did not converge"),
    # what came back
    "unreadable-output": ("error", "a job's output cannot be parsed"),
    "job-unfinished": ("error", "a job's output has no end-of-job mark or no stress"),
    "job-unconverged": ("error", "a job's electronic steps or ions did not converge"),
    "job-broken": ("error", "a job's output holds impossible numbers"),
    "cell-mismatch": ("error", "a job's output is of another cell or crystal than planned"),
    "cell-drifted": ("error", "a job's output has not the planned cell: relaxed by mistake, or of another strain"),
    "ions-moved": ("error", "ions that had to stay where they were have moved"),
    "output-of-other-job": ("error", "a job's folder holds an output with the cell of another job"),
    "unmatched-output": ("warning", "an output in a folder of no job cannot be given to one"),
    "unit-assumed": ("info", "a typed table does not name the unit of its stresses: taken to be GPa"),
    "matched-by-cell": ("info", "an output lay in another folder and was given to the job whose cell it has"),
    "outputs-disagree": ("warning", "two finished outputs of one job differ"),
    "outputs-changed": ("warning", "outputs changed since they were collected"),
    "link-not-followed": ("warning", "a symbolic link in a job folder is not followed"),
    "reference-missing": ("warning", "there is no usable reference job"),
    "mixed-settings": ("error", "jobs of one set were computed with different settings or programs"),
    "mixed-versions": ("warning", "jobs of one set were computed with different versions of a program"),
    "identical-outputs": ("error", "different jobs returned identical numbers"),
    "stress-sign": ("error", "the data prove that the sign of a stress is reversed"),
    "stress-unit": ("error", "the data prove that a stress is in another unit"),
    "stress-order": ("error", "the data prove that the components of a stress are in another order"),
    "stress-frame": ("error", "the data prove that a stress is in other axes than its cell"),
    "stress-exchanged": ("error", "the data prove that two lines of a table are in each other's place"),
    "set-inconsistent": ("warning", "the stresses of a set do not follow one stiffness, and no known change mends them"),
    "energy-jump": ("warning", "the energy of a job is not the one that the stresses lead to"),
    "ions-elsewhere": ("warning", "the ions of a job left the line of its shape"),
    "forces-left": ("warning", "forces left on the ions can put the stress off"),
    # the fit
    "undetermined-constants": ("error", "the usable jobs do not determine some constants"),
    "jobs-not-used": ("warning", "some planned jobs are missing, unusable or dropped"),
    "lone-partner": ("warning", "a strained job whose opposite is not there, and no rotation maps it to its opposite"),
    "no-error-estimate": ("warning", "no spare degrees of freedom to estimate the noise from"),
    "not-positive-definite": ("error", "the stiffness has an eigenvalue that is not positive"),
    "residual-stress": ("warning", "the reference stress exceeds 5 % of the smallest diagonal constant"),
    "reference-stress-unknown": ("warning", "no usable job determines the reference stress"),
    "ions-unanswered": ("warning", "the relaxed-ion stiffness cannot be given beside the clamped-ion one"),
    "unstable-reference": ("error", "the reference cell has modes without a restoring force"),
    "soft-modes-noisy": ("warning", "the noise of the forces is not small against the softest mode"),
    "clamped-ions": ("warning", "the stiffness is that of ions held at their affine places"),
    "finer-settings-matter": ("warning", "finer settings change a constant by more than its error bar and one percent"),
    "energy-mismatch": ("warning", "energies and stresses of the same jobs give different stiffness"),
    "energy-slope-mismatch": ("warning", "energies and stresses of the same jobs give different reference stress"),
    "outlier": ("warning", "a job that does not fit with the others"),
    "curved": ("warning", "a nonlinear response that this set cannot correct"),
    "even-response": ("info", "a statistically real quadratic response; it does not bias pairs"),
    "offset-removed": ("info", "the reference stress was subtracted as a basis-set offset"),
    "reference-stress-reading": ("warning", "the constants depend on whether the reference stress is real or an offset"),
    # the strain magnitude
    "one-magnitude": ("info", "jobs at one magnitude only: its effect cannot be seen"),
    "cubic-untested": ("info", "too few jobs to test the cubic response"),
    "cubic-response": ("info", "a statistically real cubic response that is too small to matter"),
    "magnitude-matters": ("warning", "a statistically real cubic response that shifts a constant by more than 1 %"),
    "convergence-unclear": ("info", "the shift to zero strain is known too poorly for a verdict"),
    # what is derived
    "acoustic-mismatch": ("warning", "sound speeds of the force constants differ from those of the stiffness"),
    "axes-assumed": ("info", "a tensor file does not name its axes: taken to be the IEEE ones of the cell"),
    "asymmetric-coefficients": ("warning", "the reference stress makes the stress-strain coefficients asymmetric"),
    "stability-uncertain": ("warning", "the error bars leave more than 1 % probability that the crystal is unstable"),
    "tensor-breaks-symmetry": ("warning", "the symmetry of the cell changes the tensor that was typed"),
    # the comparison
    "not-compared": ("error", "a crystal without a tensor is left out of the comparison"),
    "temperatures-differ": ("warning", "values of different temperatures, or static and measured ones, are compared"),
    "clamped-compared": ("warning", "constants of clamped ions, without the answer of the ions, are compared"),
    "methods-differ": ("info", "runs of different programs or settings are compared"),
    "rough-errors": ("info", "errors above a fifth of the value: tests and probabilities are rough"),
    "no-test": ("info", "a tensor without errors takes no part in tests and probabilities"),
    "settings-unverified": ("warning", "energies are subtracted whose settings are not recorded, or may differ in sampling"),
}


@dataclass(frozen=True)
class Finding:
    """One doubt: a documented code, how much it matters, where, and the number in words."""

    code: str
    severity: Severity
    where: str
    message: str

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready dictionary with the four fields."""
        return asdict(self)


def finding(code: str, where: str, message: str) -> Finding:
    """Make a finding of a documented code; its severity is the documented one. File names in it cannot steer a terminal."""
    if code not in CODES:
        raise StrainkitError(f"finding code {code!r} is not documented", "strainkit.findings")
    return Finding(code, CODES[code][0], printable(where), printable(message))


def worst(findings: Iterable[Finding]) -> Severity | None:
    """The highest severity among the findings, None when there are none."""
    order: tuple[Severity, ...] = ("info", "warning", "error")
    present = {f.severity for f in findings}
    return max(present, key=order.index) if present else None
