"""One table for a whole set: labels, stresses and, if there, energies, as a spreadsheet or a script leaves them.

A header names the columns: `label` (or `job`), six components `xx` ... `xy` in any order, each with or without a unit behind
it (`xx_kbar`), and, if there, `energy` (eV). Stresses are Cauchy stresses in the axes of the reference cell. Where the header
names no components, six columns `stress_1` ... `stress_6` (or `s1` ... `s6`) follow the order that the option gives.
"""

from __future__ import annotations

import csv
import io
import math
import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from strainkit.collect.table import TABLE_PROGRAM, StressRecord
from strainkit.errors import InputError, UsageError
from strainkit.findings import Finding, finding
from strainkit.run.files import checksum
from strainkit.run.plan import Plan
from strainkit.tensors.sixvectors import COMPONENTS
from strainkit.units import STRESS_UNITS_IN_GPA

__all__ = ["Convention", "read_csv", "unit_doubts"]

_UNITS = {name.lower().replace("^", ""): name for name in STRESS_UNITS_IN_GPA}
_SIGNS = {"tension": 1.0, "compression": -1.0}
#: a table of more bytes than this is not one of stresses
_LARGEST = 64 * 1024 * 1024


@dataclass(frozen=True)
class Convention:
    """What the numbers of a table mean, as far as the header does not say.

    Attributes
    ----------
    unit : str or None
        A key of `STRESS_UNITS_IN_GPA`; GPa when left out and the header is silent.
    sign : "tension" or "compression"
        Which of them is positive.
    order : tuple of str or None
        The components in the order of the columns.
    """

    unit: str | None = None
    sign: str = "tension"
    order: tuple[str, ...] | None = None

    @classmethod
    def of(cls, unit: str | None, sign: str | None, order: str | None) -> Convention:
        """From the options.

        Raises
        ------
        UsageError
            An unknown unit, sign or order.
        """
        if unit is not None and _unit(unit) is None:
            raise UsageError(f"unknown unit {unit!r}", "--stress-unit", f"Use one of {', '.join(STRESS_UNITS_IN_GPA)}.")
        if sign is not None and sign not in _SIGNS:
            raise UsageError(f"unknown sign {sign!r}", "--stress-sign", "Say which is positive: tension or compression.")
        names = None
        if order is not None:
            names = tuple(_COMPONENT.get(word.lower(), word) for word in re.split(r"[\s,]+", order.strip()))
            if sorted(names) != sorted(COMPONENTS):
                raise UsageError(
                    f"{order!r} does not name the six components once each", "--stress-order", 'Such as "xx yy zz xy yz xz".'
                )
        return cls(None if unit is None else _unit(unit), sign or "tension", names)


_COMPONENT = {name: name for name in COMPONENTS} | {name[::-1]: name for name in COMPONENTS[3:]}


def _unit(word: str) -> str | None:
    return _UNITS.get(word.lower().replace("^", "").replace("å", "a").strip("[]()"))


@dataclass(frozen=True)
class _Columns:
    label: int
    stress: dict[str, int]
    units: dict[str, str]
    energy: int | None
    assumed: tuple[str, ...]


def read_csv(path: Path, plan: Plan, convention: Convention) -> dict[str, StressRecord]:
    """Records by label from one table.

    Raises
    ------
    InputError
        Not such a table, labels that the plan has not or that come twice, cells that are no numbers: with line and column.
    """
    try:
        if path.stat().st_size > _LARGEST:
            raise InputError("too large for a table of stresses", path)
        content = path.read_bytes()
        text = content.decode("utf-8-sig")
    except OSError as error:
        raise InputError(error.strerror or "cannot be read", path) from None
    except UnicodeDecodeError as error:
        raise InputError(f"not UTF-8 text (byte {error.start})", path, "Save it as UTF-8.") from None
    rows = _rows(path, text)
    if not rows:
        raise InputError("an empty table", path, "The first line names the columns: label, xx, yy, zz, yz, xz, xy.")
    columns = _columns(path, *rows[0], convention)
    order = " ".join(columns.stress)
    said = {"stress_unit": columns.units["xx"], "stress_sign": convention.sign, "stress_order": order}
    if columns.assumed:
        said["stress_unit_assumed"] = " ".join(columns.assumed)
    digest = checksum(content)
    planned = {job.label for job in plan.jobs}
    found: dict[str, StressRecord] = {}
    lines: dict[str, int] = {}
    for line, row in rows[1:]:
        label = row[columns.label].strip() if columns.label < len(row) else ""
        if label not in planned:
            near = "Labels: " + ", ".join(job.label for job in plan.jobs[:6]) + (" ..." if len(plan.jobs) > 6 else "")
            raise InputError(f"line {line}: no job {label!r} in the plan", path, near)
        if label in lines:
            raise InputError(f"line {line}: {label} comes twice, first in line {lines[label]}", path, "Leave one of them.")
        lines[label] = line
        stress = [
            _number(path, line, row, columns.stress[c], c) * STRESS_UNITS_IN_GPA[columns.units[c]] * _SIGNS[convention.sign]
            for c in COMPONENTS
        ]
        energy = None
        if columns.energy is not None and columns.energy < len(row) and row[columns.energy].strip():
            energy = _number(path, line, row, columns.energy, "energy")
        found[label] = StressRecord(
            label=label,
            status="done",
            stress=np.array(stress),
            energy=energy,
            program=TABLE_PROGRAM,
            file=path.name,
            file_sha256=digest,
            settings=dict(said),
        )
    return found


def unit_doubts(records: Sequence[StressRecord]) -> list[Finding]:
    """Say of each table in which columns the unit was not named anywhere, so that the default counts."""
    silent = {r.file: str(r.settings["stress_unit_assumed"]) for r in records if "stress_unit_assumed" in r.settings}
    return [
        finding("unit-assumed", name, f"neither its header nor --stress-unit names the unit of {columns}: read as GPa")
        for name, columns in silent.items()
    ]


def _rows(path: Path, text: str) -> list[tuple[int, list[str]]]:
    """Rows with their line numbers, separated by commas, semicolons, tabs or blanks; comments and empty lines left out."""
    lines = [(i, line) for i, line in enumerate(text.splitlines(), 1) if line.strip() and not line.lstrip().startswith("#")]
    if not lines:
        return []
    head = lines[0][1]
    separator = next((c for c in (",", ";", "\t") if c in head), None)
    if separator is None:
        return [(i, line.split()) for i, line in lines]
    try:
        return [(i, next(csv.reader(io.StringIO(line), delimiter=separator, strict=True))) for i, line in lines]
    except (csv.Error, StopIteration) as error:
        raise InputError(f"not a table ({error})", path) from None


def _columns(path: Path, line: int, head: Sequence[str], convention: Convention) -> _Columns:
    names = [name.strip() for name in head]
    lower = [name.lower() for name in names]
    label = next((i for i, name in enumerate(lower) if name in ("label", "job", "folder")), None)
    if label is None:
        raise InputError(f"line {line}: no column named label", path, "The first line names the columns: label, xx, yy, ...")
    energy = next((i for i, name in enumerate(lower) if re.fullmatch(r"(free_)?energy([_ ].*)?", name)), None)
    if energy is not None and re.search(r"[_ ](ry|ha|rydberg|hartree|kj.*|kcal.*)$", lower[energy]):
        raise InputError(
            f"line {line}, column {names[energy]}: energies are in eV", path, "Convert them, and name it energy_eV."
        )
    stress: dict[str, int] = {}
    units: dict[str, str] = {}
    silent: list[str] = []
    numbered: list[int] = []
    for i, name in enumerate(lower):
        match = re.fullmatch(r"(?:stress_|sigma_|s_)?([xyz]{2})(?:[_ (\[]+(.+?)[)\]]?)?", name)
        if match and match[1] in _COMPONENT:
            component = _COMPONENT[match[1]]
            if component in stress:
                raise InputError(f"line {line}: two columns for {component}", path)
            stress[component] = i
            units[component] = _unit_of(path, line, names[i], match[2], convention)
            silent += [names[i]] if match[2] is None else []
        elif re.fullmatch(r"(stress_|s)[1-6]", name):
            numbered.append(i)
            silent.append(names[i])
    if not stress and len(numbered) == 6 and convention.order is not None:
        stress = dict(zip(convention.order, numbered, strict=True))
        units = dict.fromkeys(stress, convention.unit or "GPa")
    elif convention.order is not None and len(stress) == 6:
        # the option is given where the header is wrong
        stress = dict(zip(convention.order, stress.values(), strict=True))
        units = {c: list(units.values())[i] for i, c in enumerate(stress)}
    missing = [c for c in COMPONENTS if c not in stress]
    if missing:
        raise InputError(f"line {line}: no column for {', '.join(missing)}", path, "Name six: xx, yy, zz, yz, xz, xy.")
    return _Columns(label, stress, units, energy, tuple(silent) if convention.unit is None else ())


def _unit_of(path: Path, line: int, name: str, word: str | None, convention: Convention) -> str:
    if word is None:
        return convention.unit or "GPa"
    unit = _unit(word)
    if unit is None:
        raise InputError(f"line {line}, column {name}: unknown unit {word!r}", path, f"Use {', '.join(STRESS_UNITS_IN_GPA)}.")
    if convention.unit is not None and convention.unit != unit:
        raise InputError(f"line {line}, column {name}: the header says {unit}, --stress-unit {convention.unit}", path)
    return unit


def _number(path: Path, line: int, row: Sequence[str], column: int, name: str) -> float:
    text = row[column].strip() if column < len(row) else ""
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        what = f"{text!r} is not a number" if text else "nothing there"
        raise InputError(f"line {line}, column {name}: {what}", path)
    return value
