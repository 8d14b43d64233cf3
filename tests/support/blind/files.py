"""Blind fault injector: faults of files and of a program's words (see faults for how faults are written)."""

from __future__ import annotations

import re

import numpy as np

from strainkit.run.extxyz import RETURNED
from strainkit.run.plan import job_folder
from support.blind.faults import CELLS, Injected, change_stress, fault, pick, stress_of
from support.blind.sets import StrainSet
from support.blind.settings import SETTINGS, choice
from support.blind.text import editor, rewrite
from support.blind.text_cp2k_gpaw import Gpaw

REAL = frozenset(("real",))


def _text(work: StrainSet, label: str) -> tuple[str, str]:
    """Path and text of a job's main output; companions that are written at the very end are taken away."""
    if not work.real:
        return f"{job_folder(label)}/{RETURNED}", work.outputs[label].text()
    job = editor(work, label)
    for name in job.names:
        if name.endswith(("returned.extxyz", "/done")):
            job.files[name] = ""
    return job.main, job.text


@fault("output truncated", CELLS)
def truncated(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
    """The output cut anywhere (a full disk, a job that was killed)."""
    label = pick(work, rng, taken)
    if label is None:
        return None
    path, text = _text(work, label)
    end = int(len(text) * (rng.uniform(0.02, 1.0) if rng.random() < 0.7 else rng.uniform(0.97, 1.0)))
    work.files[path] = text[:end]
    return Injected((label,), frozenset(("job-unfinished", "unreadable-output")), f"cut at {end} of {len(text)} bytes")


@fault("piece of the output lost", REAL)
def piece_lost(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
    """A piece of 30 to 3000 bytes gone, two times out of three around the last stress (a full disk, a bad copy)."""
    label = pick(work, rng, taken)
    if label is None:
        return None
    path, text = _text(work, label)
    size = int(10 ** rng.uniform(1.5, 3.5))
    words = [m.start() for m in re.finditer(r"(?i)stress", text)]
    start = int(rng.integers(len(text))) if rng.random() < 0.33 else int(rng.choice(words[-6:]) - rng.integers(size))
    work.files[path] = text[: max(start, 0)] + text[max(start, 0) + size :]
    codes = ("job-unfinished", "unreadable-output", "job-broken", "job-unconverged")
    return Injected((label,), frozenset(codes), f"{size} bytes lost at {start} of {len(text)}")


@fault("one printed digit changed", REAL)
def digit(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
    """One place of those that print the last stress, bit damage: sign, digit or point."""
    label = pick(work, rng, taken)
    if label is None:
        return None
    job = editor(work, label)
    before = dict(job.files)
    job.change_stress(lambda s: s + np.diag([0.37, -0.23, 0.11]) * max(1e-3, np.abs(s).max()))
    places = []
    for name in job.names:
        old, new = before[name].split("\n"), job.files[name].split("\n")
        places += [(name, i) for i in range(len(old)) if len(old) == len(new) and old[i] != new[i]]
    job.files.update(before)
    if not places:
        return None
    name, i = places[int(rng.integers(len(places)))]
    lines = before[name].split("\n")
    digits = [m.start() for m in re.finditer(r"\d", lines[i])]
    k = digits[int(rng.integers(len(digits)))]
    new = str(rng.choice([x for x in "0123456789" if x != lines[i][k]]))
    note = f"line {i + 1} of {name.rsplit('/', 1)[1]}: {lines[i].strip()[:50]!r}, column {k + 1} to {new}"
    lines[i] = lines[i][:k] + new + lines[i][k + 1 :]
    job.files[name] = "\n".join(lines)
    return Injected((label,), frozenset(("job-broken", "unreadable-output", "outputs-disagree")), note)


@fault("stress missing", CELLS)
def no_stress(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
    """No stress at all, or none after the last ionic step."""
    label = pick(work, rng, taken)
    if label is None:
        return None
    codes = frozenset(("job-unfinished", "unreadable-output"))
    if not work.real:
        work.outputs[label].stress = None
        return Injected((label,), codes, "no stress")
    path, text = _text(work, label)
    patterns = {
        "qe": r"     Computing stress .*\n(?:.*\n){6}",
        "abinit": r"-? *Cartesian components of stress tensor.*\n(?:.*sigma.*\n){3}|cartesian_stress_tensor.*\n(?:- \[.*\n){3}"
        r"|pressure_GPa.*\n| +strten.*\n.*\n",
        "cp2k": r" STRESS\|.*\n",
        "gpaw": r"Stress tensor:\n(?:.*\n){3}|Stress tensor  #.*\n(?:\|.*\n){5}",
    }
    found = list(re.finditer(patterns[work.kind], text))
    last = work.kind == "qe" and len(found) > 1 and rng.random() < 0.5
    for match in reversed(found[-1:] if last else found):
        text = text[: match.start()] + text[match.end() :]
    work.files[path] = text
    return Injected((label,), codes, "no stress after the last step" if last else "no stress")


@fault("stress of an earlier ionic step", REAL)
def earlier(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
    """The numbers of the first ionic step stand where those of the last should, or the whole last step is not printed."""
    label = pick(work, rng, taken)
    if label is None or work.kind == "gpaw":
        return None
    job = editor(work, label)
    starts = {
        "qe": r"\n     Self-consistent Calculation\n",
        "abinit": r"\n--- Iteration: \( *\d+/",
        "cp2k": r"\n OPTIMIZATION STEP: ",
    }
    steps = [m.start() for m in re.finditer(starts[work.kind], job.text)]
    if len(steps) < 3:
        return None
    first = type(job)({job.main: job.text[: steps[1]]}, label)
    first.files[job.main] += "\n" if work.kind == "cp2k" else ""
    value = first.stress()
    if np.allclose(value, job.stress(), atol=1e-9):
        return None
    change_stress(work, label, lambda s: value)
    return Injected((label,), frozenset(("job-unfinished", "job-broken")), "stress of the first ionic step in every place")


@fault("electronic steps not converged", REAL)
def electrons(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
    """The program's own words about the last cycle, with a stress and an energy that are off accordingly."""
    label = pick(work, rng, taken)
    if label is None:
        return None
    job, n = editor(work, label), int(rng.integers(60, 200))
    if work.kind == "qe":
        if rng.random() < 0.5:
            words = f"convergence NOT achieved after {n} iterations: stopping"
            job.swap(r"convergence has been achieved in +\d+ iterations", words, last=True)
        else:  # scf_must_converge = .false.
            words = rf"\g<1>   {10 ** rng.uniform(-6, -2):.8f} Ry"
            job.swap(r"(!    total energy .*\n +estimated scf accuracy +<).*Ry", words, last=True)
    elif work.kind == "abinit":
        words = f" scprqt:  WARNING -\n  nstep= {n:4d} was not enough SCF cycles to converge;\n"
        words += f"  potential residual=  {10 ** rng.uniform(-6, -2):.3E} exceeds tolvrs=  1.000E-10\n"
        job.swap(r" At SCF step .*=>converged\.\n", words, last=True)
    elif work.kind == "cp2k":
        words = " *** WARNING in qs_scf.F:601 :: SCF run NOT converged ***"
        job.swap(r"  \*\*\* SCF run converged in +\d+ steps \*\*\*", words, last=True)
        last = job.text.rfind("NOT converged")  # the last step is computed twice: once more at the minimum
        before = job.text[:last].rfind("  *** SCF run converged in")
        if before > 0 and rng.random() < 0.7:
            line = job.text[before : job.text.index("\n", before)]
            job.text = job.text[:before] + words + job.text[before + len(line) :]
    else:
        path, text = _text(work, label)  # GPAW stops there: no stress, and the script returns nothing
        end = list(re.finditer(r"Converged after \d+ iterations\.|Converged in \d+ steps", text))[-1].start()
        work.files[path] = text[:end] + "Did not converge!\n\nHere are some tips:\n"
        return Injected((label,), frozenset(("job-unconverged", "job-unfinished")), "GPAW stopped")
    off = rng.normal(size=(3, 3)) * 10 ** rng.uniform(-3, 0)
    change_stress(work, label, lambda s: s + (off + off.T) / 2)
    return Injected((label,), frozenset(("job-unconverged",)), f"stress off by {np.abs(off + off.T).max() / 2:.2g} GPa")


@fault("ions not converged", CELLS)
def ions(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
    """The words of a relaxation that ran out of steps, or forces that were left; the stress is off accordingly."""
    label = pick(work, rng, taken, strained=True)
    if label is None:
        return None
    off, largest = rng.normal(size=(3, 3)) * 10 ** rng.uniform(-3, 0), 10 ** rng.uniform(-1.7, 0)
    note = f"largest force {largest:.2g} eV/A, stress off by {np.abs(off + off.T).max() / 2:.2g} GPa"
    if work.real:
        if not _ran_out(work, label, largest):
            return None
    else:
        output = work.outputs[label]
        forces = rng.normal(size=output.cell.positions.shape)
        output.forces = (forces - forces.mean(0)) * largest / np.linalg.norm(forces - forces.mean(0), axis=1).max()
        if rng.random() < 0.5:
            output.info["converged"] = False
            note += ", said so"
    change_stress(work, label, lambda s: s + (off + off.T) / 2)
    return Injected((label,), frozenset(("job-unconverged", "forces-left")), note)


def _ran_out(work: StrainSet, label: str, largest: float) -> bool:
    """The words for too few ionic steps, and larger forces in the last block."""
    job = editor(work, label)
    if work.kind == "qe":
        job.lines_after("Forces acting on atoms", 6, lambda k, line: _larger(line, largest / 25.711), slice(-1, None))
        done = job.swap(r"     bfgs converged in .*\n.*\n", "     The maximum number of steps has been reached.\n")
        job.swap(r"     Final energy .*\n|Begin final coordinates\n|End final coordinates\n", "", 0)
        return done
    if work.kind == "abinit":
        words = " fconv : WARNING -\n  ntime=   20 was not enough Broyd/MD steps to converge gradients: \n"
        words += f"  max grad (force/stress) = {largest / 51.422:.4E} > tolmxf= 3.8890E-06 ha/bohr (free atoms)\n"
        return job.swap(r" At Broyd/MD step +\d+, gradients are converged : \n.*\n", words)
    if work.kind == "cp2k":
        words = " *** MAXIMUM NUMBER OF OPTIMIZATION STEPS REACHED ***\n ***        EXITING GEOMETRY OPTIMIZATION         ***\n"
        start = re.search(r" \*+\n \*\*\* +GEOMETRY OPTIMIZATION COMPLETED +\*\*\*\n \*+\n", job.text)
        end = job.text.rfind(" ENERGY| Total FORCE_EVAL")
        if not start or end < start.end():
            return False
        job.text = job.text[: start.start()] + words + job.text[job.text.index("\n", end) :]
        return True
    assert isinstance(job, Gpaw)
    forces = list(re.finditer(r"Forces in eV/Ang:\n((?: +\d+ [A-Z].*\n)+)", job.text))
    if not forces:
        return False
    rows = [rewrite(row, [largest / 2, -largest / 3, largest], False) for row in forces[-1][1].splitlines()]
    job.text = job.text[: forces[-1].start(1)] + "\n".join(rows) + "\n" + job.text[forces[-1].end(1) :]
    if job.xyz:
        job.files[job.xyz] = job.files[job.xyz].replace("converged=T", "converged=F")
    return True


def _larger(line: str, value: float) -> str:
    """A line of forces with the last component larger."""
    head, word, tail = line.partition("force =")
    return head + word + rewrite(tail, [value / 2, -value / 3, value]) if word else line


@fault("duplicate output", CELLS)
def duplicate(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
    """A second finished output in the folder of a job whose stress is another (an older try)."""
    label = pick(work, rng, taken)
    if label is None:
        return None
    path = editor(work, label).main if work.real else f"{job_folder(label)}/{RETURNED}"
    old, size = work.copy(), 10 ** rng.uniform(-3, -0.3)
    off = rng.normal(size=(3, 3)) * size * max(0.1, np.abs(stress_of(work, label)).max()) / 2
    change_stress(old, label, lambda s: s + off + off.T)
    text = old.outputs[label].text() if not work.real else old.files[path]
    stem, dot, suffix = path.rpartition(".")
    stems = (f"{stem}-old", f"{job_folder(label)}/a-first-try", f"{stem}2")
    name = str(rng.choice(stems)) + dot + suffix
    work.files[name] = text
    codes = ("outputs-disagree", "mixed-settings", "mixed-versions")
    return Injected((label,), frozenset(codes), f"{name.rsplit('/', 1)[1]}, stress off by {np.abs(off + off.T).max():.2g} GPa")


@fault("output of another job", CELLS)
def copied(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
    """All files of one job copied over another's."""
    label = pick(work, rng, taken)
    other = pick(work, rng, taken | {label or ""})
    if label is None or other is None:
        return None
    if work.real:
        job, source = editor(work, label), editor(work, other)
        for name in job.names:
            work.files[name] = ""
        for name in source.names:
            work.files[job.folder + name.removeprefix(source.folder)] = work.files[name]
    else:
        work.outputs[label] = work.outputs[other]
    codes = ("identical-outputs", "output-of-other-job", "cell-mismatch", "cell-drifted")
    return Injected((label,), frozenset(codes), f"files of {other}")


def _settings(name: str, code: str) -> None:
    @fault(f"set differs in {name}", REAL)
    def differs(work: StrainSet, rng: np.random.Generator, taken: frozenset[str]) -> Injected | None:
        free = [x for x in work.labels if x not in taken]
        count = 1 if rng.random() < 0.5 else int(rng.integers(1, max(2, len(work.labels) // 2)))
        labels = tuple(sorted(rng.choice(free, min(count, len(free)), replace=False).tolist()))
        if not labels:
            return None
        edit = choice(name, editor(work, labels[0]), rng)
        if not all(edit(editor(work, label)) for label in labels):
            return None
        size = 10 ** rng.uniform(-3, -0.5) if code == "mixed-settings" else 1e-4
        off = np.eye(3) * rng.normal() * size
        for label in labels:
            part = rng.normal(size=(3, 3)) * size / 10
            change_stress(work, label, lambda s, part=part: s + off + (part + part.T) / 2)
        whole = 3 * len(labels) > len(work.labels)
        note = f"{len(labels)} jobs, stress off by {abs(off[0, 0]):.2g} GPa"
        return Injected(labels, frozenset((code, "mixed-settings")), note, whole)


for _name, _code in SETTINGS.items():
    _settings(_name, _code)
