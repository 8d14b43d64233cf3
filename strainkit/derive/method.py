"""How a run was computed, as far as its folder and outputs say: may its energies be subtracted from those of another run?"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from strainkit.collect.table import StressRecord
from strainkit.run.extxyz import RETURNED, recorded_engine
from strainkit.run.plan import Plan

__all__ = ["Method", "method_of"]

#: kinds of output that any program may have written, or several kinds of one program
_PROGRAMS: dict[str, str | None] = {
    "extended XYZ": None,
    "ASE trajectory": None,
    "ASE database": None,
    "ASE JSON": None,
    "VASP vasprun.xml": "VASP",
    "VASP OUTCAR": "VASP",
    "CASTEP geom": "CASTEP",
    "GPAW gpw": "GPAW",
    "GPAW text": "GPAW",
}
#: settings that say when and how an iteration ends, not what it converges to
_STEERING = {
    *("conv_thr", "tolvrs", "ediff", "elec_energy_tol", "eps_scf", "sc_accuracy_rho", "density", "energy"),
    *("nstep", "ntime", "nsw", "nelm", "steps", "maxiter", "max_iter", "max_scf", "max_scf_cycles", "geom_max_iter"),
    *("sc_iter_limit", "max_relaxation_steps", "electron_maxstep", "mixing_beta", "fmax", "pressure", "dilatmx"),
}


#: what an output says and another crystal's must say too; meshes and spin belong to the crystal
_PRINTED = ("cutoff_eV", "functional", "dispersion", "smearing")


@dataclass(frozen=True)
class Method:
    """Program and settings of a run.

    Attributes
    ----------
    program : str or None
        None when the outputs do not tell.
    engine : str or None
        A local engine with its settings.
    settings, pseudopotentials : dict
        Of the deck; empty without one.
    printed : mapping
        What the output of the reference says of its settings; see `strainkit.collect.table.StressRecord`.
    kspacing : float or None
        1/A, 2 pi included.
    kmesh : tuple of int
        Empty when unknown.
    """

    program: str | None = None
    engine: str | None = None
    settings: dict[str, Any] = field(default_factory=dict)
    pseudopotentials: dict[str, str] = field(default_factory=dict)
    kspacing: float | None = None
    kmesh: tuple[int, ...] = ()
    printed: Mapping[str, Any] = field(default_factory=dict)

    @property
    def recorded(self) -> bool:
        """Do folder or output say with which settings it was computed?"""
        return self.engine is not None or bool(self.settings) or {"cutoff_eV", "functional"} <= set(self.printed)

    @property
    def words(self) -> str:
        """Engine or program with what it says of its settings; empty when nothing is known."""
        if self.engine is not None:
            return self.engine
        said = [str(self.printed[key]) for key in ("functional", "dispersion") if self.printed.get(key, "none") != "none"]
        if "cutoff_eV" in self.printed:
            said.append(f"{self.printed['cutoff_eV']:.0f} eV")
        said += [mesh] if (mesh := self._mesh) else []
        return " ".join([self.program or "", *said]).strip()

    @property
    def _mesh(self) -> str:
        if self.kmesh:
            return "x".join(map(str, self.kmesh))
        count = self.printed.get("kpoint_count")
        return str(self.printed.get("kpoints") or (f"{count} k-points" if count else ""))

    @property
    def gamma_only(self) -> bool:
        """Is it an engine that samples the Gamma point of whatever cell it is given?"""
        return self.engine is not None and re.match(r"gfn\d-xtb\b", self.engine) is not None

    def differences(self, other: Method) -> list[str]:
        """What differs, in words, of what both record; elements that only one of them holds do not count.

        A program or engine differs from an unknown one: nothing says that they are the same.
        """
        words = []
        if (self.program, self.engine) != (other.program, other.engine):
            words.append(f"{self._made_by(other)} and {other._made_by(self)}")
        if self.kspacing is not None and other.kspacing is not None and self.kspacing != other.kspacing:
            words.append(f"k-point spacing {_text(self.kspacing)} and {_text(other.kspacing)}")
        if self.settings and other.settings and self.program == other.program:  # every program has names of its own
            words += _unlike(self.settings, other.settings)
        one, another = ({key: m.printed[key] for key in _PRINTED if key in m.printed} for m in (self, other))
        words += _unlike(one, another, shared=True)
        words += _unlike(self.pseudopotentials, other.pseudopotentials, "pseudopotential of ", shared=True)
        return words

    def _made_by(self, other: Method) -> str:
        """Engine or program, as it differs from that of another."""
        if self.engine is not None and self.engine != other.engine:
            return f"engine {self.engine}"
        return "an unknown program" if self.program is None else f"program {self.program}"

    def doubts(self, other: Method) -> list[str]:
        """What may differ, in words: settings or sampling that the folders do not let us compare."""
        if not (self.recorded and other.recorded):
            return ["the settings are not recorded: they must be the same"]
        if self.gamma_only:
            return ["the engine samples one k-point whatever the cell: cells of different size are sampled differently"]
        meshes = [m._mesh or "unknown" for m in (self, other)]
        if (self.kspacing is None or other.kspacing is None) and meshes != ["unknown"] * 2:
            return [f"k-meshes {' and '.join(meshes)} were chosen by hand: they must be alike in density"]
        return []

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready."""
        return {
            "program": self.program,
            "engine": self.engine,
            "settings": self.settings,
            "pseudopotentials": self.pseudopotentials,
            "kspacing_per_A": self.kspacing,
            "kmesh": list(self.kmesh),
            "printed": dict(self.printed),
        }


def method_of(plan: Plan, record: StressRecord | None, run: Path) -> Method:
    """How the reference of a run was computed.

    Parameters
    ----------
    plan : Plan
    record : StressRecord or None
        Of the reference; None when it did not come back.
    run : path
        Its folder.
    """
    deck = plan.calculation
    engine = None
    if record is not None and Path(record.file).name == RETURNED:
        engine = recorded_engine(run / record.file)
    kind = "" if record is None else record.program
    return Method(
        program=_PROGRAMS.get(kind, kind or None) or (deck["program"] if deck and engine is None else None),
        engine=None if engine is None else re.sub(r"( fmax=\S+| clamped)$", "", engine),
        settings={} if engine is not None else dict(deck.get("settings", {})),
        pseudopotentials={} if engine is not None else dict(deck.get("pseudopotentials", {})),
        kspacing=None if engine is not None else deck.get("kspacing_per_A"),
        kmesh=() if engine is not None else tuple(deck.get("kmesh", ())),
        printed={} if engine is not None or record is None else record.settings,
    )


def _unlike(mine: dict[str, Any], theirs: dict[str, Any], what: str = "", shared: bool = False) -> list[str]:
    words = []
    for key in sorted({*mine, *theirs} - _STEERING):
        if key in mine and key in theirs:
            if isinstance(mine[key], dict) and isinstance(theirs[key], dict):
                words += _unlike(mine[key], theirs[key], f"{what}{key} of ", shared=True)
            elif _differ(mine[key], theirs[key]):
                words.append(f"{what}{key} {_text(mine[key])} and {_text(theirs[key])}")
        elif not shared:
            words.append(f"{what}{key} in one of them only")
    return words


def _differ(one: object, other: object) -> bool:
    if isinstance(one, int | float) and isinstance(other, int | float):
        return abs(one - other) > 1e-6 * max(abs(one), abs(other))
    return one != other


def _text(value: object) -> str:
    return f"{value:g}" if isinstance(value, float) else str(value)
