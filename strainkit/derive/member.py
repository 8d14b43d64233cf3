"""One of the crystals that are compared: a fitted run, or a tensor typed into a file."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from pathlib import Path
from typing import Any

from strainkit.collect.table import StressTable
from strainkit.crystal.crystal import Crystal
from strainkit.crystal.symmetry import Symmetry
from strainkit.derive.elastic import ElasticCrystal, from_fit, from_tensor_file
from strainkit.derive.method import Method, method_of
from strainkit.derive.quantities import Moduli, moduli_of
from strainkit.errors import UsageError
from strainkit.fit.result import Fit
from strainkit.tensors.textfile import TensorFile

__all__ = ["Member", "member_of_file", "member_of_fit", "named_apart"]


@dataclass(frozen=True)
class Member:
    """One of several crystals.

    Attributes
    ----------
    label : str
        Its name among the others; see `named_apart`.
    place : str
        Run folder or file, as it was given.
    elastic : ElasticCrystal
    symmetry : Symmetry or None
        None for a typed tensor without a cell.
    source : str
        Where a typed tensor comes from, in its own words.
    temperature : float or None
        K; None for computed (static) values, and where a file does not say.
    axes : str or None
        Axes that a tensor file names; "ieee" for a run.
    computed : bool
        A run, not a typed tensor.
    method, energy : Method or None, float or None
        Of a run: how it was computed, and the free energy of its reference cell, eV.
    clamped : bool
        A run whose ions did not move, and whose answer to strain is not known.
    """

    label: str
    place: str
    elastic: ElasticCrystal
    symmetry: Symmetry | None = None
    source: str = ""
    temperature: float | None = None
    axes: str | None = None
    computed: bool = False
    method: Method | None = None
    energy: float | None = None
    clamped: bool = False

    @property
    def crystal(self) -> Crystal | None:
        """The cell, where there is one."""
        return self.elastic.crystal

    @property
    def freedom(self) -> int | None:
        """Degrees of freedom behind its errors; None when these are known."""
        return self.elastic.moduli.degrees_of_freedom

    @cached_property
    def moduli(self) -> Moduli | None:
        """Its moduli; None when it is unstable."""
        return moduli_of(self.elastic)

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready: what it is and where it comes from."""
        return {
            "label": self.label,
            "name": self.elastic.name,
            "place": self.place,
            "computed": self.computed,
            "origin": self.elastic.origin,
            "source": self.source,
            "temperature_K": self.temperature,
            "formula": None if self.crystal is None else self.crystal.formula,
            "laue_class": self.elastic.laue_class,
            "space_group": None if self.symmetry is None else self.symmetry.space_group,
            "degrees_of_freedom": self.freedom,
            "stable": self.moduli is not None,
            "reference_energy_eV": self.energy,
            "clamped_ions": self.clamped,
            "method": None if self.method is None else self.method.to_dict(),
            "findings": [f.to_dict() for f in self.elastic.findings],
        }


def member_of_fit(fit: Fit, table: StressTable | None = None, run: Path | None = None) -> Member:
    """A fitted run.

    Parameters
    ----------
    fit : Fit
    table : StressTable, optional
        Its stress table, for the energy of the reference.
    run : path, optional
        Its folder; for how it was computed.
    """
    record = None if table is None else next((r for r in table.usable if r.label == fit.plan.jobs[0].label), None)
    return Member(
        label=fit.plan.crystal.name,
        place="" if run is None else str(run),
        elastic=from_fit(fit),
        symmetry=fit.plan.symmetry,
        axes="ieee",
        computed=True,
        method=None if run is None else method_of(fit.plan, record, run),
        energy=None if record is None else record.energy,
        clamped=fit.plan.ions == "clamped" and fit.relaxed is None,
    )


def member_of_file(file: TensorFile, crystal: Crystal | None = None, symmetry: Symmetry | None = None) -> Member:
    """A typed tensor, with the cell of its crystal or without."""
    return Member(
        label=file.name,
        place=file.where,
        elastic=from_tensor_file(file, crystal, symmetry, "given" if crystal is None else "ieee"),
        symmetry=symmetry,
        source=file.source,
        temperature=file.temperature,
        axes=file.axes,
    )


def named_apart(members: Sequence[Member]) -> list[Member]:
    """The same with different labels: crystal names, and folder or file names, or numbers, where these are the same.

    Raises
    ------
    UsageError
        One folder or file given twice.
    """
    places = [str(Path(m.place).resolve()) if m.place else f"number {i + 1}" for i, m in enumerate(members)]
    twice = [m.place for m, count in zip(members, map(Counter(places).get, places), strict=True) if count and count > 1]
    if twice:
        raise UsageError("given twice", twice[-1], "Give each run folder or file once.")
    labels = [m.elastic.name for m in members]
    for closer in (
        [Path(place).name for place in places],
        [m.place or at for m, at in zip(members, places, strict=True)],
        places,
    ):
        same = Counter(labels)
        labels = [label if same[label] == 1 else nearer for label, nearer in zip(labels, closer, strict=True)]
    plain = ["".join(c if c.isprintable() else "?" for c in label) for label in labels]  # names come from files
    return [replace(m, label=label) for m, label in zip(members, plain, strict=True)]
