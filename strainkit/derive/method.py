"""How a run was computed, as far as its folder says: may its energies be subtracted from those of another run?"""

from __future__ import annotations

import re
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
}
#: settings that say when and how an iteration ends, not what it converges to
_STEERING = {
    *("conv_thr", "tolvrs", "ediff", "elec_energy_tol", "eps_scf", "sc_accuracy_rho", "density", "energy"),
    *("nstep", "ntime", "nsw", "nelm", "steps", "maxiter", "max_iter", "max_scf", "max_scf_cycles", "geom_max_iter"),
    *("sc_iter_limit", "max_relaxation_steps", "electron_maxstep", "mixing_beta", "fmax", "pressure", "dilatmx"),
}


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

    @property
    def recorded(self) -> bool:
        """Does the folder say with which settings it was computed?"""
        return self.engine is not None or bool(self.settings)

    @property
    def gamma_only(self) -> bool:
        """Is it an engine that samples the Gamma point of whatever cell it is given?"""
        return self.engine is not None and re.match(r"gfn\d-xtb\b", self.engine) is not None

    def differences(self, other: Method) -> list[str]:
        """What differs, in words, of what both record; elements that only one of them holds do not count."""
        words = []
        for what, mine, theirs in (
            ("program", self.program, other.program),
            ("engine", self.engine, other.engine),
            ("k-point spacing", self.kspacing, other.kspacing),
        ):
            if mine is not None and theirs is not None and mine != theirs:
                words.append(f"{what} {_text(mine)} and {_text(theirs)}")
        if self.program is None and other.program is None and (self.engine is None) != (other.engine is None):
            words.append(f"engine {self.engine or other.engine} and an unknown one")
        if self.settings and other.settings:
            words += _unlike(self.settings, other.settings)
        words += _unlike(self.pseudopotentials, other.pseudopotentials, "pseudopotential of ", shared=True)
        return words

    def doubts(self, other: Method) -> list[str]:
        """What may differ, in words: settings or sampling that the folders do not let us compare."""
        if not (self.recorded and other.recorded):
            return ["the settings are not recorded: they must be the same"]
        if self.gamma_only:
            return ["the engine samples one k-point whatever the cell: cells of different size are sampled differently"]
        if (self.kspacing is None or other.kspacing is None) and (self.kmesh or other.kmesh):
            meshes = " and ".join("x".join(map(str, m.kmesh)) for m in (self, other))
            return [f"k-meshes {meshes} were given by hand: their density must be the same"]
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
    )


def _unlike(mine: dict[str, Any], theirs: dict[str, Any], what: str = "", shared: bool = False) -> list[str]:
    words = []
    for key in sorted({*mine, *theirs} - _STEERING):
        if key in mine and key in theirs:
            if isinstance(mine[key], dict) and isinstance(theirs[key], dict):
                words += _unlike(mine[key], theirs[key], f"{what}{key} of ", shared=True)
            elif mine[key] != theirs[key]:
                words.append(f"{what}{key} {_text(mine[key])} and {_text(theirs[key])}")
        elif not shared:
            words.append(f"{what}{key} in one of them only")
    return words


def _text(value: object) -> str:
    return f"{value:g}" if isinstance(value, float) else str(value)
