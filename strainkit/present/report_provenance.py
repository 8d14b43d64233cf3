"""Sections of a report about where its numbers come from and what they are not."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Mapping
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from itertools import islice
from pathlib import Path
from typing import Any

from strainkit import __version__
from strainkit.collect.table import TABLE, StressTable
from strainkit.errors import counted
from strainkit.present.calculation import settings_text
from strainkit.present.report_page import Block, Cell, Facts, Paragraph, Row, Section, Table
from strainkit.present.terminal import molecules_text
from strainkit.run.files import checksum
from strainkit.run.plan import MANIFEST, Plan

__all__ = ["CAUTIONS", "cautions_section", "provenance_section"]

CAUTIONS = (
    "The numbers are static 0 K values of a perfect, infinite crystal, as good as the functional behind them.",
    "Values at room temperature are usually lower, for molecular crystals by roughly 10 to 40 % (from memory of the "
    "literature).",
    "Elastic constants indicate and do not decide how a powder compacts: they are not a tablet strength, not a milling or "
    "handling limit, not a pressure rating and not a safety case. Measurement, local codes and licensed practice decide.",
)

_PACKAGES = ("numpy", "scipy", "spglib", "ase", "phonopy", "matplotlib")


def cautions_section() -> Section:
    """What the numbers are not."""
    return Section("cautions", "Cautions", tuple(Paragraph(text) for text in CAUTIONS))


def provenance_section(plan: Plan, table: StressTable, run: Path | None) -> Section:
    """Crystal, program and settings, jobs with their files, versions and checksums."""
    crystal, symmetry = plan.crystal, plan.symmetry
    a, b, c, alpha, beta, gamma = crystal.cell_lengths_angles
    cell = f"{a:.4f} {b:.4f} {c:.4f} A, {alpha:.3f} {beta:.3f} {gamma:.3f} deg"
    group = f"Laue class {symmetry.laue_class}, within {symmetry.tolerance:g} A"
    facts = [
        ("Crystal", f"{crystal.name}: {crystal.formula}", f"{len(crystal.numbers)} atoms"),
        ("Cell", cell, f"{crystal.volume:.2f} A^3, {crystal.density:.0f} kg/m^3"),
        ("Space group", f"{symmetry.space_group} (No. {symmetry.number})", group),
    ]
    if plan.molecules is not None:
        facts.append(("Molecules", molecules_text(plan.molecules).removeprefix("molecules "), ""))
    jobs = f"{counted(len(plan.strain_set) - 1, 'strained job')} and the reference, ions {plan.ions}"
    facts.append(("Strain set", f"aim {plan.aim}", jobs))
    facts += _outputs(plan, table, run)
    facts += _calculation(plan.calculation)
    if run is not None:
        facts += _files(run)
    facts.append(("Versions", f"strainkit {__version__}", ", ".join(_versions())))
    blocks: list[Block] = [Facts(tuple(facts)), _jobs(table)]
    return Section("provenance", "Provenance", tuple(blocks))


def _outputs(plan: Plan, table: StressTable, run: Path | None) -> list[tuple[str, str, str]]:
    """Programs and versions that wrote the outputs of the strain set, and what these say of their settings."""
    members = {job.label for job in plan.strain_set}
    records = [r for r in table.records if r.label in members and r.program]
    programs = Counter(f"{r.program} {r.version}".strip() for r in records)
    facts = [
        (
            "Program",
            ", ".join(f"{name} ({count} of {len(members)} jobs)" for name, count in programs.items()) or "no output yet",
            "",
        )
    ]
    said: dict[str, dict[str, None]] = {}
    for record in records:
        for key, value in record.settings.items():
            said.setdefault(key, {})[f"{value:g}" if isinstance(value, float) else str(value)] = None
    engines = {} if run is None else {name: None for r in records if (name := _engine(run / r.file))}
    if engines:
        said["engine"] = engines
    if said:
        words = "; ".join(f"{key} {' or '.join(values)}" for key, values in said.items())
        facts.append(("Settings by the outputs", words, "in the program's own words"))
    return facts


def _engine(path: Path) -> str:
    """Local engine and its settings, from the second line of an extended XYZ file of strainkit's."""
    if path.suffix != ".extxyz" or not path.is_file():
        return ""
    with path.open(encoding="utf-8", errors="replace") as file:
        found = re.search(r' engine="([^"]*)"', "".join(islice(file, 2)))
    return found[1] if found else ""


def _calculation(calculation: Mapping[str, Any]) -> list[tuple[str, str, str]]:
    """Deck, mesh, grid and settings."""
    if not calculation:
        return [("Deck", "none of strainkit's", "")]
    mesh = "x".join(map(str, calculation["kmesh"]))
    grids = ", ".join("x".join(map(str, points)) for points in calculation["grids"])
    facts = [("Deck", str(calculation["program"]), f"k-mesh {mesh}, Gamma-centred" + (f"; grid {grids}" if grids else ""))]
    files = ", ".join(f"{symbol} = {name}" for symbol, name in calculation["pseudopotentials"].items())
    if files:
        facts.append(("Pseudopotentials", files, ""))
    return [*facts, ("Settings", settings_text(calculation["settings"]), "")]


def _files(run: Path) -> list[tuple[str, str, str]]:
    """Checksums of the plan and of the stress table, and when the latter was written."""
    facts = []
    for name in (MANIFEST, TABLE):
        path = run / name
        if path.is_file():
            day = datetime.fromtimestamp(path.stat().st_mtime, UTC).strftime("%Y-%m-%d")
            facts.append((name, f"SHA-256 {checksum(path.read_bytes())}", f"written {day}"))
    return facts


def _versions() -> list[str]:
    found = []
    for name in _PACKAGES:
        try:
            found.append(f"{name} {version(name)}")
        except PackageNotFoundError:
            continue
    return found


def _jobs(table: StressTable) -> Table:
    rows: list[Row] = []
    for record in table.records:
        force = "-" if record.max_force is None else Cell(f"{record.max_force:.2g}", record.max_force)
        energy = "-" if record.energy is None else Cell(f"{record.energy:.6f}", record.energy)
        digest = Cell(record.file_sha256[:16] or "-", whole=record.file_sha256)
        status = Cell(record.status, whole=record.meaning)
        rows.append([record.label, status, record.file or "-", digest, energy, force])
    caption = (
        "What came back: status, file, the first digits of its SHA-256 (all of them in stresses.json), free energy, largest "
        "force"
    )
    header = ["job", "status", "file", "SHA-256", "energy, eV", "force, eV/A"]
    return Table.of("jobs", caption, header, rows, left=4)
