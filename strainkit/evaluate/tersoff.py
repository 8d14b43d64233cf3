"""The Tersoff potential with its published silicon parameters as the default."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

__all__ = ["SILICON", "tersoff_silicon"]

#: silicon, T3 set: J. Tersoff, Phys. Rev. B 38, 9902 (1988) and 39, 5566 (1989); energies eV, lengths A
SILICON: dict[str, float] = {
    "m": 3,
    "gamma": 1.0,
    "lambda3": 1.7322,
    "c": 1.0039e5,
    "d": 16.217,
    "h": -0.59825,
    "n": 0.78734,
    "beta": 1.1e-6,
    "lambda2": 1.7322,
    "B": 471.18,
    "R": 2.85,
    "D": 0.15,
    "lambda1": 2.4799,
    "A": 1830.8,
}


def tersoff_silicon(parameters: Mapping[tuple[str, str, str], Mapping[str, float]] | None = None) -> Any:
    """ASE Tersoff calculator; `parameters` maps element triples to the fourteen numbers, silicon when left out."""
    from ase.calculators.tersoff import Tersoff, TersoffParameters

    table = parameters or {("Si", "Si", "Si"): SILICON}
    return Tersoff({triple: TersoffParameters(**numbers) for triple, numbers in table.items()})
