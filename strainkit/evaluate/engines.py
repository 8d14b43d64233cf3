"""Engines: a table of ASE calculators by short name, and any other one by module:Class."""

from __future__ import annotations

import ast
import importlib
import inspect
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from strainkit.errors import InputError, UsageError

__all__ = ["ENGINES", "Engine", "parse_settings"]

#: short name -> (module, class, settings it starts from, what to install when the module is missing)
ENGINES: dict[str, tuple[str, str, dict[str, Any], str]] = {
    "emt": ("ase.calculators.emt", "EMT", {}, "ase"),
    "lj": ("ase.calculators.lj", "LennardJones", {}, "ase"),
    "morse": ("ase.calculators.morse", "MorsePotential", {}, "ase"),
    "tersoff": ("strainkit.evaluate.tersoff", "tersoff_silicon", {}, "ase"),
    "gfn1-xtb": ("tblite.ase", "TBLite", {"method": "GFN1-xTB", "verbosity": 0}, "strainkit[xtb]"),
    "gfn2-xtb": ("tblite.ase", "TBLite", {"method": "GFN2-xTB", "verbosity": 0}, "strainkit[xtb]"),
}


def parse_settings(pairs: Sequence[str]) -> dict[str, Any]:
    """Keyword arguments from "key=value" texts; values are Python literals, anything else is text."""
    settings: dict[str, Any] = {}
    for pair in pairs:
        key, separator, text = pair.partition("=")
        if not separator or not key.strip().isidentifier():
            raise UsageError(f"{pair!r} is not key=value", "--set")
        try:
            settings[key.strip()] = ast.literal_eval(text.strip())
        except (ValueError, SyntaxError):
            settings[key.strip()] = text.strip()
    return settings


@dataclass(frozen=True)
class Engine:
    """An ASE calculator by name with its keyword arguments; made afresh in every process.

    Attributes
    ----------
    name : str
        A key of `ENGINES` or "module:Class".
    settings : mapping
        Keyword arguments, on top of the table's.
    """

    name: str
    settings: Mapping[str, Any] = field(default_factory=dict)

    def __post_init__(self) -> None:
        if self.name not in ENGINES and not all(self.name.partition(":")[::2]):
            known = ", ".join(ENGINES)
            raise UsageError(
                f"unknown engine {self.name!r}", "--engine", f"Use one of {known}, or module:Class of an ASE calculator."
            )

    @property
    def description(self) -> str:
        """Name and settings on one line."""
        return " ".join([self.name, *(f"{k}={v!r}" for k, v in sorted(self.settings.items()))])

    def calculator(self) -> Any:
        """A new calculator.

        Raises
        ------
        InputError
            When the module, class or a setting does not exist.
        """
        module, name, start, package = ENGINES.get(self.name, (*self.name.partition(":")[::2], {}, ""))
        try:
            factory = getattr(importlib.import_module(module), name)
        except ModuleNotFoundError:
            remedy = f"Install it: pip install '{package}'" if package else "Check the import path and the environment."
            raise InputError(f"the engine {self.name} is not installed (no module {module})", "--engine", remedy) from None
        except (ImportError, AttributeError) as error:
            raise InputError(f"the engine {self.name} cannot be loaded ({error})", "--engine") from None
        try:
            calculator = factory(**{**start, **self.settings})
        except Exception as error:  # whatever the calculator thinks of its arguments
            raise InputError(f"the engine {self.name} refuses its settings ({error})", "--set") from None
        self._refuse_unknown(factory, calculator)
        missing = {"energy", "forces", "stress"} - set(getattr(calculator, "implemented_properties", ()))
        if missing:
            raise InputError(f"the engine {self.name} gives no {', '.join(sorted(missing))}", "--engine")
        return calculator

    def _refuse_unknown(self, factory: Any, calculator: Any) -> None:
        """Many calculators swallow a misspelt setting: compare with their defaults and their signature."""
        defaults = getattr(calculator, "default_parameters", None)
        if not defaults:
            return
        known = {*defaults, *inspect.signature(factory).parameters}
        unknown = sorted(set(self.settings) - known)
        if unknown:
            raise InputError(
                f"the engine {self.name} has no setting {unknown[0]!r}", "--set", f"It knows {', '.join(sorted(defaults))}."
            )
