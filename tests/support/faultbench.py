"""Clean sets of every Laue class, and an injector of the faults that returned outputs have; all data here are invented.

A clean set is what a program without faults returns: stresses by second and third order (random, averaged over the group)
with Gaussian noise, energies of the same potential, ions that move along the strain, forces below a tolerance, settings, and
a frame of its own for every output. Published tensors (tests/data) give the second order; third-order constants are of the
order of minus ten times those of second order (common practice, no source).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np

from strainkit.collect.readjob import Output, read_outputs, record_of
from strainkit.collect.returned import Returned
from strainkit.collect.scan import Folder, scan
from strainkit.collect.table import StressTable
from strainkit.collect.trust import judge_set
from strainkit.crystal.crystal import Crystal
from strainkit.crystal.frames import crystal_frame
from strainkit.errors import StrainkitError
from strainkit.evaluate.engines import Engine
from strainkit.evaluate.reference import relax_reference
from strainkit.evaluate.runset import evaluate_run
from strainkit.fit.result import Fit, fit_run
from strainkit.prepare.runfolder import plan_run, write_run
from strainkit.run.plan import Plan, job_folder
from strainkit.tensors.rotations import rotate_matrix, rotation6
from strainkit.tensors.sixvectors import from_mandel, to_mandel
from strainkit.tensors.strain import cauchy_from_pk2
from strainkit.units import EV_PER_A3_IN_GPA
from support.crystals import conventional, random_rotation
from support.published import BY_LAUE_CLASS, mandel

SETTINGS = {
    "cutoff_eV": 680.0,
    "kpoints": "6x6x4",
    "functional": "PBE",
    "dispersion": "D3",
    "smearing": "none",
    "spin": "none",
}


@dataclass(frozen=True)
class CleanSet:
    """A plan and what came back of each job, each in its own frame."""

    plan: Plan
    outputs: dict[str, Returned]
    clamped: dict[str, np.ndarray]  # stress (3, 3), GPa, that each job would have with its ions where they started


@dataclass
class Fault:
    """What was done to a set: its name, the jobs it touched, and the finding codes that name it rightly."""

    name: str
    jobs: tuple[str, ...]
    codes: tuple[str, ...]
    detectable: bool = True


@dataclass
class Faulty:
    """A set under injection: outputs, byte-equal copies (label -> file it is a copy of) and faults so far."""

    plan: Plan
    outputs: dict[str, Returned | None]
    clamped: dict[str, np.ndarray]
    copies: dict[str, str] = field(default_factory=dict)
    faults: list[Fault] = field(default_factory=list)


def third_order(rotations: np.ndarray, size: float, rng: np.random.Generator) -> np.ndarray:
    """Symmetric (6, 6, 6), Mandel, GPa, averaged over the group."""
    third = rng.normal(size=(6, 6, 6)) * size
    third = sum(third.transpose(p) for p in [(0, 1, 2), (0, 2, 1), (1, 0, 2), (1, 2, 0), (2, 0, 1), (2, 1, 0)]) / 6
    q = rotation6(rotations)
    return np.einsum("gia,gjb,gkc,abc->ijk", q, q, q, third, optimize=True) / len(q)


def clean_set(
    laue: str,
    rng: np.random.Generator,
    magnitudes: tuple[float, ...] = (0.01,),
    noise: float = 0.003,
    residual: float = 0.0,
    energies: bool = True,
    plan: Plan | None = None,
) -> CleanSet:
    """One clean set.

    Parameters
    ----------
    noise : float
        Standard deviation of a stress component as a part of the typical change of stress.
    residual : float
        Size of the reference stress as a part of the same.
    """
    plan = plan or plan_run(conventional(laue), magnitudes)
    axes = crystal_frame("ieee", plan.symmetry).rotation
    second = rotate_matrix(axes.T, mandel(BY_LAUE_CLASS[laue]))
    stiff = float(np.trace(second)) / 6
    third = third_order(plan.symmetry.rotations, 10 * stiff, rng)
    third -= 10 * stiff * np.einsum("i,j,k->ijk", *(np.array([1, 1, 1, 0, 0, 0.0]),) * 3) * 0.3
    signal = stiff * max(magnitudes)
    free = plan.symmetry.rotations
    s0 = rng.normal(size=6)
    s0 = np.einsum("gab,b->a", rotation6(free), s0) / len(free) * residual * signal
    atoms = len(plan.crystal.numbers)
    gamma = rng.normal(size=(atoms, 3, 6))
    clamped, outputs = {}, {}
    for job in plan.jobs:
        e = to_mandel(job.strain)
        stress = s0 + second @ e + 0.5 * np.einsum("ijk,j,k", third, e, e) + signal * noise * rng.normal(size=6)
        energy = plan.crystal.volume / EV_PER_A3_IN_GPA
        energy *= s0 @ e + 0.5 * e @ second @ e + np.einsum("ijk,i,j,k", third, e, e, e) / 6
        sigma = cauchy_from_pk2(from_mandel(stress), job.gradient)
        clamped[job.label] = sigma + cauchy_from_pk2(from_mandel(0.35 * np.diag(np.diag(second)) @ e), job.gradient)
        turn = random_rotation(rng)
        cell = plan.crystal.deformed(turn @ job.gradient)
        moved = gamma @ e + 2e-4 * rng.normal(size=(atoms, 3))
        outputs[job.label] = Returned(
            program="Quantum ESPRESSO",
            lattice=cell.lattice,
            positions=cell.positions + moved @ np.linalg.inv(plan.crystal.deformed(job.gradient).lattice),
            numbers=cell.numbers,
            stress=turn @ sigma @ turn.T,
            energy=-1234.5 + energy if energies else None,
            forces=2e-5 * rng.normal(size=(atoms, 3)) * stiff / 100,
            version="7.2",
            settings=dict(SETTINGS),
        )
    return CleanSet(plan, outputs, clamped)


def computed_set(crystal: Crystal, engine: Engine, magnitudes: tuple[float, ...], folder: Path) -> CleanSet:
    """A set that a local engine computed: real energies, forces, relaxed ions and noise, read back from its files."""
    relaxed = relax_reference(crystal, engine, fmax=1e-4).crystal
    plan, _ = write_run(plan_run(relaxed, magnitudes), folder)
    evaluate_run(folder, plan, engine, fmax=1e-4, workers=1)
    outputs: dict[str, Returned] = {}
    for job in plan.jobs:
        found = read_outputs(folder, scan(folder, job_folder(job.label), plan.files))[0].returned
        assert found is not None
        outputs[job.label] = replace(found, settings=dict(SETTINGS), version="1")
    # with the ions where they started: only of use for injected faults of the ions
    clamped = {job.label: 1.5 * _stress_of(outputs[job.label]) for job in plan.jobs}
    return CleanSet(plan, outputs, clamped)


def _stress_of(output: Returned) -> np.ndarray:
    assert output.stress is not None
    return output.stress


def collected(case: Faulty) -> StressTable:
    """What collect makes of outputs in memory: the same steps as for a run folder, without the files."""
    records = []
    for job in case.plan.jobs:
        returned = case.outputs.get(job.label)
        folder = Folder(f"jobs/{job.label}", (), (), "", True)
        digest = case.copies.get(job.label, job.label)
        outputs = [] if returned is None else [Output(f"jobs/{job.label}/out", returned.program, digest, returned)]
        records.append(record_of(case.plan, job, folder, outputs))
    judged, findings = judge_set(case.plan, records)
    return StressTable(tuple(judged), tuple(findings))


def fitted(plan: Plan, table: StressTable) -> Fit | None:
    """The fit, or None where there can be none."""
    try:
        return fit_run(plan, table)
    except StrainkitError:
        return None


# the injector: from the list of faults alone


def _pick(case: Faulty, rng: np.random.Generator, strained: bool = True) -> str:
    labels = [job.label for job in case.plan.jobs if (job.shape or not strained) and case.outputs[job.label] is not None]
    return str(rng.choice(labels))


def _change(case: Faulty, label: str, **changes: object) -> None:
    output = case.outputs[label]
    assert output is not None
    case.outputs[label] = replace(output, **changes)  # type: ignore[arg-type]


def _problem(status: str, code: str) -> Callable[[Faulty, np.random.Generator], Fault]:
    def inject(case: Faulty, rng: np.random.Generator) -> Fault:
        label = _pick(case, rng, False)
        output = case.outputs[label]
        assert output is not None
        _change(
            case, label, problems=(*output.problems, (status, "injected")), stress=None if "stress" in code else output.stress
        )
        return Fault(code, (label,), (f"job-{status}",))

    return inject


def _setting(key: str, *values: object) -> Callable[[Faulty, np.random.Generator], Fault]:
    def inject(case: Faulty, rng: np.random.Generator) -> Fault:
        label = _pick(case, rng, False)
        output = case.outputs[label]
        assert output is not None
        assert output.stress is not None
        other = [value for value in values if value != output.settings.get(key)]
        value = other[rng.integers(len(other))]
        if key == "program":
            _change(case, label, program=value)
        elif key == "version":
            _change(case, label, version=value)
        else:
            _change(case, label, settings={**output.settings, key: value})
        part = 1 + 0.02 * rng.normal(size=(3, 3))
        _change(case, label, stress=output.stress * 0.5 * (part + part.T))
        return Fault(f"another {key}", (label,), ("mixed-versions" if key == "version" else "mixed-settings",))

    return inject


def _stress(case: Faulty, labels: list[str], change: Callable[[np.ndarray, Returned], np.ndarray]) -> None:
    for label in labels:
        output = case.outputs[label]
        if output is not None and output.stress is not None:
            _change(case, label, stress=change(output.stress, output))


def _whole(case: Faulty) -> list[str]:
    return [label for label, output in case.outputs.items() if output is not None]


FACTORS = (10.0, 0.1, 160.2176634, 1 / 160.2176634, 1000.0, 1e-3)


def _sign(one: bool) -> Callable[[Faulty, np.random.Generator], Fault]:
    def inject(case: Faulty, rng: np.random.Generator) -> Fault:
        labels = [_pick(case, rng)] if one else _whole(case)
        _stress(case, labels, lambda s, _: -s)
        return Fault(f"sign reversed, {'one job' if one else 'all'}", tuple(labels), ("stress-sign",))

    return inject


def _unit(one: bool) -> Callable[[Faulty, np.random.Generator], Fault]:
    def inject(case: Faulty, rng: np.random.Generator) -> Fault:
        labels = [_pick(case, rng)] if one else _whole(case)
        factor = FACTORS[rng.integers(len(FACTORS))]
        seen = one or all(case.outputs[x].energy is not None for x in labels)  # type: ignore[union-attr]
        _stress(case, labels, lambda s, _: s * factor)
        return Fault(f"unit wrong, {'one job' if one else 'all'}", tuple(labels), ("stress-unit",), seen)

    return inject


def _order(one: bool) -> Callable[[Faulty, np.random.Generator], Fault]:
    """Components in the order xx yy zz xy yz xz, or yz and xz swapped, in the output's own frame made the planned one."""

    def inject(case: Faulty, rng: np.random.Generator) -> Fault:
        labels = [_pick(case, rng)] if one else _whole(case)
        swap = [[5, 3, 4], [4, 3, 5], [4, 5, 3], [3, 5, 4], [5, 4, 3]][rng.integers(5)]
        _untwist(case, labels)

        def change(s: np.ndarray, _: Returned) -> np.ndarray:
            voigt = s[[0, 1, 2, 1, 0, 0], [0, 1, 2, 2, 2, 1]]
            voigt[3:] = voigt[swap]
            xx, yy, zz, yz, xz, xy = voigt
            return np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]])

        _stress(case, labels, change)
        return Fault(f"order of components, {'one job' if one else 'all'}", tuple(labels), ("stress-order",))

    return inject


def _untwist(case: Faulty, labels: list[str]) -> None:
    """Outputs in the planned frame, as a table or a program that does not turn the cell gives them."""
    for job in case.plan.jobs:
        output = case.outputs[job.label]
        if job.label in labels and output is not None:
            planned = case.plan.crystal.deformed(job.gradient).lattice
            turn = np.linalg.solve(planned, output.lattice).T
            stress = None if output.stress is None else turn.T @ output.stress @ turn
            forces = None if output.forces is None else output.forces @ turn
            _change(case, job.label, lattice=planned, stress=stress, forces=forces)


def _frame(one: bool) -> Callable[[Faulty, np.random.Generator], Fault]:
    """The stress is in the frame with a along x and b in the xy plane, the cell is not (or the other way round)."""

    def inject(case: Faulty, rng: np.random.Generator) -> Fault:
        labels = [_pick(case, rng)] if one else _whole(case)
        other = bool(rng.integers(2))
        if not other:
            _untwist(case, labels)
        for job in case.plan.jobs:
            output = case.outputs[job.label]
            if job.label not in labels or output is None or output.stress is None:
                continue
            planned = case.plan.crystal.deformed(job.gradient).lattice
            if other:  # the cell came back turned, the stress did not
                turn = np.linalg.solve(planned, output.lattice).T
                _change(case, job.label, stress=turn.T @ output.stress @ turn)
            else:
                c_first = np.linalg.qr(planned[[2, 0, 1]].T)[0]  # c, then a: turned about anything but the standard axes
                q = np.linalg.qr(planned.T)[0] * np.sign(np.diag(np.linalg.qr(planned.T)[1]))
                q = q if np.linalg.det(q) > 0 else -c_first
                _change(case, job.label, stress=q.T @ output.stress @ q)
        return Fault(f"rotated frame, {'one job' if one else 'all'}", tuple(labels), ("stress-frame",))

    return inject


def _earlier_step(case: Faulty, rng: np.random.Generator) -> Fault:
    """The stress with the ions where they started; energy, forces and positions are those of the last step."""
    label = _pick(case, rng)
    output = case.outputs[label]
    assert output is not None
    job = next(j for j in case.plan.jobs if j.label == label)
    turn = np.linalg.solve(case.plan.crystal.deformed(job.gradient).lattice, output.lattice).T
    _change(case, label, stress=turn @ case.clamped[label] @ turn.T)
    return Fault("stress of an earlier step", (label,), ("energy-jump",))


def _ions(case: Faulty, rng: np.random.Generator) -> Fault:
    """Ions stopped on the way: the stress is between clamped and relaxed, forces are left."""
    label = _pick(case, rng)
    output = case.outputs[label]
    job = next(j for j in case.plan.jobs if j.label == label)
    assert output is not None
    assert output.stress is not None
    turn = np.linalg.solve(case.plan.crystal.deformed(job.gradient).lattice, output.lattice).T
    part = float(rng.uniform(0.1, 1.0))
    aim = turn @ case.clamped[label] @ turn.T
    moved = output.positions - case.plan.crystal.positions
    force = 2.0 * part * (moved @ output.lattice)  # a spring of 2 eV/A^2
    _change(
        case,
        label,
        stress=output.stress + part * (aim - output.stress),
        positions=case.plan.crystal.positions + (1 - part) * moved,
        forces=force,
    )
    return Fault("ions not converged", (label,), ("forces-left",))


def _drift(case: Faulty, rng: np.random.Generator) -> Fault:
    """The cell of one job relaxed towards the unstrained one."""
    label = _pick(case, rng)
    output = case.outputs[label]
    assert output is not None
    assert output.stress is not None
    job = next(j for j in case.plan.jobs if j.label == label)
    part = float(rng.uniform(0.05, 1.0))
    back = np.eye(3) + part * (np.linalg.inv(job.gradient) - np.eye(3))
    turn = np.linalg.solve(case.plan.crystal.deformed(job.gradient).lattice, output.lattice).T
    lattice = case.plan.crystal.lattice @ job.gradient.T @ back.T @ turn.T
    _change(case, label, lattice=lattice, stress=(1 - part) * output.stress)
    return Fault("cell drifted", (label,), ("cell-drifted", "output-of-other-job"))


def _other_crystal(case: Faulty, rng: np.random.Generator) -> Fault:
    label = _pick(case, rng, False)
    output = case.outputs[label]
    assert output is not None
    kind = int(rng.integers(3))
    if kind == 0:
        _change(case, label, numbers=np.where(output.numbers == 8, 16, output.numbers))
    elif kind == 1:
        forces = None if output.forces is None else output.forces[:-1]
        _change(case, label, numbers=output.numbers[:-1], positions=output.positions[:-1], forces=forces)
    else:
        _change(case, label, numbers=output.numbers[::-1].copy())
    return Fault("another crystal", (label,), ("cell-mismatch",))


def _copied(case: Faulty, rng: np.random.Generator) -> Fault:
    """One job's folder holds the whole output of another."""
    a, b = rng.choice([label for label, out in case.outputs.items() if out is not None], 2, replace=False)
    case.outputs[str(b)] = case.outputs[str(a)]
    case.copies[str(b)] = str(a)
    return Fault(
        "output of another job", (str(b),), ("cell-drifted", "cell-mismatch", "output-of-other-job", "identical-outputs")
    )


def _same_numbers(case: Faulty, rng: np.random.Generator) -> Fault:
    """Stress and energy of one job under the cell of another."""
    a, b = map(str, rng.choice([label for label, out in case.outputs.items() if out is not None], 2, replace=False))
    _untwist(case, [a, b])
    source = case.outputs[a]
    assert source is not None
    _change(case, b, stress=source.stress, energy=source.energy)
    return Fault("two jobs with identical numbers", (a, b), ("identical-outputs",))


def _energy(case: Faulty, rng: np.random.Generator) -> Fault:
    """Another minimum: energy drops by one to fifty times the strain energy, ions jump, the stress changes by a fifth."""
    label = _pick(case, rng)
    output = case.outputs[label]
    rest = case.outputs[case.plan.jobs[0].label]
    assert output is not None
    assert output.stress is not None
    atoms = len(output.numbers)
    jump = np.zeros((atoms, 3))
    jump[rng.integers(atoms)] = 0.5 * rng.normal(size=3) + 0.3
    energy = output.energy
    if energy is not None and rest is not None and rest.energy is not None:
        energy -= float(rng.uniform(1, 50)) * abs(energy - rest.energy)
    part = rng.normal(size=(3, 3))
    size = 0.2 * np.abs(output.stress).max()
    _change(
        case,
        label,
        energy=energy,
        positions=output.positions + jump @ np.linalg.inv(output.lattice),
        stress=output.stress + size * 0.5 * (part + part.T),
    )
    return Fault("another minimum", (label,), ("energy-jump", "ions-elsewhere"))


def _nan(case: Faulty, rng: np.random.Generator) -> Fault:
    label = _pick(case, rng, False)
    _change(case, label, stress=None, problems=(("broken", "the stress is not a finite number"),))
    return Fault("NaN or infinity", (label,), ("job-broken",))


def _no_reference(case: Faulty, rng: np.random.Generator) -> Fault:
    case.outputs[case.plan.jobs[0].label] = None
    return Fault("reference missing", (case.plan.jobs[0].label,), ("reference-missing",))


#: codes that say no more than that a job, or the set, does not fit
OUTLIERS = ("outlier", "energy-mismatch", "set-inconsistent")

FAULTS: dict[str, Callable[[Faulty, np.random.Generator], Fault]] = {
    "output truncated": _problem("unfinished", "output truncated"),
    "electronic steps not converged": _problem("unconverged", "electronic steps not converged"),
    "stress missing": _problem("unfinished", "stress missing"),
    "NaN or infinity": _nan,
    "reference missing": _no_reference,
    "ions not converged": _ions,
    "stress of an earlier step": _earlier_step,
    "cell drifted, or another strain": _drift,
    "another crystal": _other_crystal,
    "output of another job": _copied,
    "two jobs with identical numbers": _same_numbers,
    "another cutoff": _setting("cutoff_eV", 500.0, 690.0),
    "other k-points": _setting("kpoints", "4x4x3", "6x6x5"),
    "another functional": _setting("functional", "LDA", "PBEsol"),
    "another dispersion correction": _setting("dispersion", "none", "TS"),
    "another smearing": _setting("smearing", "gaussian 0.1 eV"),
    "spin": _setting("spin", "polarised"),
    "another program": _setting("program", "ABINIT", "CP2K"),
    "another version": _setting("version", "6.7"),
    "sign, one job": _sign(True),
    "sign, all": _sign(False),
    "unit, one job": _unit(True),
    "unit, all": _unit(False),
    "order, one job": _order(True),
    "order, all": _order(False),
    "frame, one job": _frame(True),
    "frame, all": _frame(False),
    "another minimum": _energy,
}


def inject(clean: CleanSet, names: list[str], rng: np.random.Generator) -> Faulty | None:
    """A clean set with some faults in random places and sizes; None where they fall on one job and cannot be told apart."""
    case = Faulty(clean.plan, dict(clean.outputs), clean.clamped)
    for name in names:
        before = set().union(*(fault.jobs for fault in case.faults if len(fault.jobs) <= 2))
        try:
            fault = FAULTS[name](case, rng)
        except AssertionError:  # nothing left to spoil
            return None
        if before & set(fault.jobs) and len(fault.jobs) <= 2:
            return None
        case.faults.append(fault)
    return case


def verdict(clean: CleanSet, case: Faulty) -> list[str]:
    """For each fault: named, outlier (the job or the set is said not to fit), mislabelled, missed or harmless.

    Harmless: not seen, and no constant moved by its error bar.
    """
    table = collected(case)
    fit = fitted(case.plan, table)
    found = [*table.findings, *(f for record in table.records for f in record.findings)]
    late = [] if fit is None else [f for f in fit.findings if f.code in ("outlier", "energy-mismatch")]
    words = []
    for fault in case.faults:
        fitting = [f for f in [*found, *late] if f.code in fault.codes]
        whole = len(fault.jobs) > 2
        if any(_places(f.where, f.message, fault.jobs, whole) for f in fitting):
            words.append("named")
        elif any(f.code in OUTLIERS and _near(f.where, fault.jobs) for f in [*found, *late]):
            words.append("outlier")
        elif any(f.severity != "info" for f in [*found, *late]) or fit is None:
            words.append("mislabelled")
        else:
            words.append("missed" if moved(clean, fit) else "harmless")
    return words


def _places(where: str, message: str, jobs: tuple[str, ...], whole: bool) -> bool:
    named = f"{where} {message}" if where == "strain set" else where
    return whole or any(label in named or f"{label}:" in message for label in jobs)


def _near(where: str, jobs: tuple[str, ...]) -> bool:
    """Is a job of the same shape named? The two sides of a pair cannot be told apart by the odd part."""
    return where == "strain set" or any(label.split("-")[0] + "-" in where for label in jobs)


def moved(clean: CleanSet, fit: Fit) -> bool:
    """Did any constant move by more than its error bar (of the clean fit)?"""
    truth = fitted(clean.plan, collected(Faulty(clean.plan, dict(clean.outputs), clean.clamped)))
    assert truth is not None
    if fit.undetermined or truth.regression.covariance is None:
        return False
    bars = np.sqrt(np.diag(truth.regression.covariance))
    return bool((np.abs(fit.regression.values - truth.regression.values) > bars).any())


def shift(clean: CleanSet, case: Faulty) -> float:
    """Largest change of a constant, as a part of the largest constant."""
    fit = fitted(case.plan, collected(case))
    truth = fitted(clean.plan, collected(Faulty(clean.plan, dict(clean.outputs), clean.clamped)))
    if fit is None or truth is None:
        return float("nan")
    return float(np.nanmax(np.abs(fit.regression.values - truth.regression.values)) / np.abs(truth.regression.values).max())


def alarms(clean: CleanSet) -> list[str]:
    """Codes above info that collect finds in a clean set."""
    table = collected(Faulty(clean.plan, dict(clean.outputs), clean.clamped))
    found = [*table.findings, *(f for record in table.records for f in record.findings)]
    return [f.code for f in found if f.severity != "info"]
