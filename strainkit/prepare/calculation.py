"""How the jobs of a set are computed: one deck, one k-mesh, one grid, one choice of pseudopotentials for all of them."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from itertools import groupby
from typing import Any, Literal

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.symmetry import translation_denominators
from strainkit.errors import InputError
from strainkit.findings import Finding, finding
from strainkit.prepare.decks import Deck, load_deck, render
from strainkit.prepare.geometry import atom_kinds
from strainkit.prepare.mesh import DEFAULT_KSPACING, fixed_grid, k_mesh
from strainkit.prepare.pseudopotentials import chosen_pseudopotentials
from strainkit.prepare.settings import Settings
from strainkit.prepare.writers import FORMATS, refuse_left_handed
from strainkit.run.plan import Plan
from strainkit.tensors.arrays import FloatArray

__all__ = ["Calculation", "Task", "jobs_calculation", "plan_calculation", "recorded_calculation"]

#: what a job does: relax cell and ions, relax the ions at fixed cell, or neither
Task = Literal["cell", "ions", "single"]
#: room for the cell to grow in a variable-cell run
_GROWTH = 1.05


@dataclass
class Calculation:
    """Everything that the input files of a set share.

    Attributes
    ----------
    deck : Deck
    task : "cell", "ions" or "single"
    reference : Crystal
    kmesh : (3,)
    pseudopotentials : dict
        Element -> name.
    settings : Settings
    lattices : sequence of (3, 3)
        Every cell of the set: the real-space grid holds the largest.
    multiples : (3,)
        What the numbers of grid points are multiples of.
    grids : list of (3,)
        Real-space grids that the deck asked for, filled while it is rendered.
    """

    deck: Deck
    task: Task
    reference: Crystal
    kmesh: tuple[int, int, int]
    kspacing: float | None
    pseudopotentials: dict[str, str]
    settings: Settings
    lattices: Sequence[FloatArray]
    multiples: tuple[int, int, int]
    grids: list[tuple[int, int, int]] = field(default_factory=list)

    def files(self, cell: Crystal, title: str) -> dict[str, str]:
        """Name -> text of the input files of one job."""
        fields = self.fields(cell, title)
        return {name.removesuffix(".j2"): render(path, fields).rstrip() + "\n" for name, path in self.deck.templates.items()}

    def fields(self, cell: Crystal, title: str) -> dict[str, Any]:
        """What a template may use; README lists it."""
        from ase import units

        kinds, index = atom_kinds(cell)
        title = re.sub(r"[^\w .,+()=-]", "_", " ".join(title.split()))  # it ends up in comments of scripts
        moments = [0.0] * len(index) if cell.magnetic_moments is None else [float(m) for m in cell.magnetic_moments]
        names = self.pseudopotentials
        geometry = FORMATS[self.deck.program["geometry"]]
        return {
            "title": title,
            "task": self.task,
            "geometry": geometry.write(cell, title).rstrip("\n"),
            "lattice": cell.lattice.tolist(),
            "reference_lattice": self.reference.lattice.tolist(),
            "atoms": [
                {
                    "symbol": kinds[k].symbol,
                    "kind": kinds[k].name,
                    "fractional": cell.positions[i].tolist(),
                    "cartesian": (cell.positions[i] @ cell.lattice).tolist(),
                    "moment": moments[i],
                }
                for i, k in enumerate(index)
            ],
            "kinds": [{**vars(kind), "pseudopotential": names.get(kind.symbol, "")} for kind in kinds],
            "species": [{"symbol": symbol, "pseudopotential": names.get(symbol, "")} for symbol in dict.fromkeys(cell.symbols)],
            "species_runs": [
                {"symbol": symbol, "count": len(list(run)), "pseudopotential": names.get(symbol, "")}
                for symbol, run in groupby(cell.symbols)
            ],
            "pseudopotentials": names,
            "pseudopotential_folder": self.settings.folder.rstrip("/"),
            "magnetic": cell.magnetic_moments is not None,
            "kmesh": list(self.kmesh),
            "grid": self._grid,
            "deck": self.deck.values,
            "bohr": units.Bohr,
            "rydberg": units.Rydberg,
            "hartree": units.Hartree,
            "gpa_in_hartree_per_bohr3": units.GPa * units.Bohr**3 / units.Hartree,
        }

    def _grid(self, largest: float) -> list[int]:
        """Grid that holds every wave vector up to `largest` (1/A) in every cell of the set."""
        points = fixed_grid(self.lattices, float(largest), self.multiples)
        if points not in self.grids:
            self.grids.append(points)
        return list(points)

    def record(self) -> dict[str, Any]:
        """What the manifest keeps of it."""
        return {
            "deck": self.deck.name,
            "program": self.deck.program["name"],
            "task": self.task,
            "settings": {key: value for key, value in self.deck.values.items() if key != "kmesh"},
            "pseudopotentials": self.pseudopotentials,
            "pseudopotential_folder": self.settings.folder,
            "kspacing_per_A": self.kspacing,
            "kmesh": list(self.kmesh),
            "grids": [list(points) for points in self.grids],
        }

    def findings(self) -> list[Finding]:
        """Doubts about the choice of method."""
        organic = {"C", "H"} <= set(self.reference.symbols)
        if organic and self.deck.values.get("dispersion") == "none":
            return [
                finding(
                    "no-dispersion",
                    f"deck {self.deck.name}",
                    "the cell holds C and H, and [deck] dispersion is none: molecular crystals need a dispersion correction",
                )
            ]
        return []


def plan_calculation(
    deck: str,
    crystal: Crystal,
    task: Task,
    settings: Settings,
    kspacing: float | None = None,
    lattices: Sequence[FloatArray] = (),
    symprec: float = 1e-3,
) -> Calculation:
    """Choose deck, mesh and pseudopotentials for a crystal.

    Parameters
    ----------
    deck : str
        Shipped name, folder or file.
    crystal : Crystal
        The reference cell.
    task : "cell", "ions" or "single"
    settings : Settings
    kspacing : float, optional
        1/A, 2 pi included; a kmesh under [deck] in the settings wins when this is left out.
    lattices : sequence of (3, 3)
        The cells of the strained jobs, angstrom.
    symprec : float
        Tolerance of the symmetry that the grid respects, angstrom.
    """
    chosen = load_deck(deck, settings.deck, settings.source)
    if chosen.program.get("right_handed"):
        refuse_left_handed(crystal, chosen.program["name"])
    if chosen.program["geometry"] not in FORMATS:
        raise InputError(f"[program] geometry {chosen.program['geometry']!r} is no cell format", chosen.name)
    if crystal.magnetic_moments is not None:
        _refuse_unless_magnetic(chosen, crystal)
    given = settings.deck.get("kmesh")
    if given is not None and not (
        isinstance(given, list) and len(given) == 3 and all(type(n) is int and 0 < n < 1000 for n in given)
    ):
        raise InputError(f"[deck] kmesh = {given!r} must be three whole numbers", settings.source)
    spacing = kspacing if kspacing is not None else None if given else DEFAULT_KSPACING
    mesh = k_mesh(crystal, spacing, bool(chosen.program.get("kmesh_odd"))) if spacing is not None else given or (1, 1, 1)
    cells = [crystal.lattice, *lattices] if task != "cell" else [_GROWTH * crystal.lattice]
    return Calculation(
        deck=chosen,
        task=task,
        reference=crystal,
        kmesh=(mesh[0], mesh[1], mesh[2]),
        kspacing=spacing,
        pseudopotentials=chosen_pseudopotentials(
            crystal, settings, chosen.program.get("pseudopotentials", "optional"), chosen.name
        ),
        settings=settings,
        lattices=cells,
        multiples=translation_denominators(crystal, symprec),
    )


def jobs_calculation(
    deck: str, plan: Plan, settings: Settings, kspacing: float | None = None, symprec: float = 1e-3
) -> Calculation:
    """`plan_calculation` for the jobs of a plan."""
    task: Task = "ions" if plan.ions == "relaxed" else "single"
    lattices = [plan.crystal.lattice @ job.gradient.T for job in plan.jobs]
    return plan_calculation(deck, plan.crystal, task, settings, kspacing, lattices, symprec)


def recorded_calculation(
    record: Mapping[str, Any], crystal: Crystal, ions: str, lattices: Sequence[FloatArray], symprec: float
) -> Calculation:
    """The calculation that a manifest keeps, for further jobs of the same run.

    Parameters
    ----------
    record : mapping
        What `Calculation.record` made.
    crystal : Crystal
    ions : str
        "relaxed" or "clamped".
    lattices : sequence of (3, 3)
        The cells of all jobs, angstrom.
    symprec : float
        angstrom.
    """
    settings = Settings(
        deck={**record["settings"], "kmesh": list(record["kmesh"])},
        pseudopotentials=dict(record["pseudopotentials"]),
        folder=record["pseudopotential_folder"],
        source="the manifest",
    )
    task: Task = "ions" if ions == "relaxed" else "single"
    return plan_calculation(record["deck"], crystal, task, settings, None, lattices, symprec)


def _refuse_unless_magnetic(deck: Deck, crystal: Crystal) -> None:
    """Magnetic moments are kept or refused, never dropped."""
    texts = [path.read_text(encoding="utf-8", errors="replace") for path in deck.templates.values()]
    if not FORMATS[deck.program["geometry"]].keeps_moments and not any("moment" in text for text in texts):
        raise InputError(
            f"the deck {deck.name} says nothing about magnetic moments, and this crystal has some",
            crystal.source or crystal.name,
            "Use kind.moment or atom.moment in a deck of your own.",
        )
