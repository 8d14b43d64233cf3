"""One periodic crystal structure, as it was given."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from strainkit.errors import InputError
from strainkit.findings import Finding
from strainkit.tensors.arrays import FloatArray, IntArray

if TYPE_CHECKING:
    from ase import Atoms

__all__ = ["Crystal", "formula_of", "lengths_angles"]


def formula_of(symbols: list[str]) -> str:
    """Hill-order formula: carbon, hydrogen, then the alphabet."""
    counts = Counter(symbols)
    first = [s for s in ("C", "H") if s in counts] if "C" in counts else []
    order = first + sorted(s for s in counts if s not in first)
    return "".join(f"{s}{counts[s] if counts[s] > 1 else ''}" for s in order)


def lengths_angles(lattice: FloatArray) -> tuple[float, ...]:
    """a, b, c in angstrom and alpha, beta, gamma in degrees of a lattice (3, 3) with vectors as rows."""
    lengths = np.linalg.norm(lattice, axis=1)
    cosines = [lattice[i] @ lattice[j] / lengths[i] / lengths[j] for i, j in ((1, 2), (0, 2), (0, 1))]
    return (*map(float, lengths), *map(float, np.degrees(np.arccos(cosines))))


def _refuse_flat(lattice: FloatArray, atoms: int, where: str) -> None:
    volume = abs(float(np.linalg.det(lattice)))
    if not volume > 1e-3 * atoms:
        raise InputError(
            f"the cell has a volume of {volume:.3g} A^3 for {atoms} atoms",
            where,
            "Check the lattice vectors: a crystal needs three that are not in one plane.",
        )


@dataclass(frozen=True)
class Crystal:
    """A relaxed cell.

    Attributes
    ----------
    lattice : (3, 3)
        Lattice vectors as rows, angstrom, in the Cartesian frame of the file.
    positions : (n, 3)
        Fractional coordinates, in the order of the file.
    numbers : (n,)
        Atomic numbers.
    labels : tuple of str
        Site labels of the file; element symbols where the file has none.
    name : str
        Short name for reports and folders.
    source : str
        File it came from, empty for one made in Python.
    magnetic_moments : (n,) or None
        Collinear moments in Bohr magnetons.
    remarks : tuple of Finding
        What the reader had to say.
    """

    lattice: FloatArray
    positions: FloatArray
    numbers: IntArray
    labels: tuple[str, ...] = ()
    name: str = "crystal"
    source: str = ""
    magnetic_moments: FloatArray | None = None
    remarks: tuple[Finding, ...] = ()

    def __post_init__(self) -> None:
        where = self.source or self.name
        lattice = np.array(self.lattice, dtype=float)
        positions = np.array(self.positions, dtype=float).reshape(-1, 3)
        numbers = np.array(self.numbers, dtype=np.int64)
        if lattice.shape != (3, 3) or not np.isfinite(lattice).all():
            raise InputError("the cell needs three finite lattice vectors", where)
        if len(numbers) == 0 or len(numbers) != len(positions):
            raise InputError(f"{len(numbers)} elements for {len(positions)} positions", where)
        if not np.isfinite(positions).all():
            raise InputError("some coordinates are not finite numbers", where)
        _refuse_flat(lattice, len(numbers), where)
        object.__setattr__(self, "lattice", lattice)
        object.__setattr__(self, "positions", positions)
        object.__setattr__(self, "numbers", numbers)
        for field in ("name", "source"):  # names of files may hold bytes that are no text
            object.__setattr__(self, field, getattr(self, field).encode("utf-8", "backslashreplace").decode())
        if not self.labels:
            object.__setattr__(self, "labels", tuple(self.symbols))

    @property
    def symbols(self) -> list[str]:
        """Chemical symbols, one an atom."""
        from ase.data import chemical_symbols

        return [chemical_symbols[number] for number in self.numbers]

    def sites(self, atoms: Iterable[int], most: int = 6) -> str:
        """Names of some atoms for messages: site labels where the file has them, else element and number in the file."""
        symbols = self.symbols
        names = [f"{symbols[i]} (atom {i + 1})" if self.labels[i] == symbols[i] else self.labels[i] for i in atoms]
        distinct = list(dict.fromkeys(names))
        rest = f" and {len(distinct) - most} more" if len(distinct) > most else ""
        return ", ".join(distinct[:most]) + rest

    @property
    def formula(self) -> str:
        """Formula of the whole cell in Hill order."""
        return formula_of(self.symbols)

    @property
    def volume(self) -> float:
        """Cell volume, A^3."""
        return float(abs(np.linalg.det(self.lattice)))

    @property
    def density(self) -> float:
        """Density, kg/m^3, with standard atomic masses."""
        from ase.data import atomic_masses

        from strainkit.units import AMU_PER_A3_IN_KG_M3

        return float(atomic_masses[self.numbers].sum() / self.volume * AMU_PER_A3_IN_KG_M3)

    @property
    def cell_lengths_angles(self) -> tuple[float, ...]:
        """a, b, c in angstrom and alpha, beta, gamma in degrees."""
        return lengths_angles(self.lattice)

    def deformed(self, gradient: FloatArray) -> Crystal:
        """The same atoms, moved affinely, in the lattice L F^T for a deformation gradient F (3, 3)."""
        return replace(self, lattice=self.lattice @ np.asarray(gradient, dtype=float).T)

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready: what `from_dict` needs to make the crystal again, but for its name."""
        return {
            "source": self.source,
            "lattice_A": self.lattice,
            "fractional_positions": self.positions,
            "atomic_numbers": self.numbers,
            "labels": list(self.labels),
            "magnetic_moments": self.magnetic_moments,
        }

    @classmethod
    def from_dict(cls, data: dict[str, Any], name: str) -> Crystal:
        """The inverse of `to_dict`."""
        moments = data["magnetic_moments"]
        return cls(
            lattice=np.array(data["lattice_A"]),
            positions=np.array(data["fractional_positions"]),
            numbers=np.array(data["atomic_numbers"]),
            labels=tuple(data["labels"]),
            name=name,
            source=data["source"],
            magnetic_moments=None if moments is None else np.array(moments),
        )

    def to_atoms(self) -> Atoms:
        """ASE atoms with the same order, cell and orientation."""
        from ase import Atoms

        return Atoms(
            numbers=self.numbers,
            scaled_positions=self.positions,
            cell=self.lattice,
            pbc=True,
            magmoms=self.magnetic_moments,
        )

    @classmethod
    def from_atoms(cls, atoms: Atoms, name: str = "crystal", source: str = "") -> Crystal:
        """Crystal of periodic ASE atoms; constraints and partial occupancies are refused, not dropped."""
        where = source or name
        if not bool(np.all(atoms.pbc)):
            raise InputError("the structure is not periodic in all three directions", where)
        _refuse_flat(atoms.cell.array, len(atoms), where)
        if atoms.constraints:
            raise InputError("some atoms carry constraints", where, "Remove them: every atom must be free to follow a strain.")
        shares = [s for site in dict(atoms.info.get("occupancy") or {}).values() for s in dict(site).values()]
        if any(share < 1.0 for share in shares):
            raise InputError("some sites are partly occupied", where, "Give one ordered model of the crystal.")
        moments = atoms.get_initial_magnetic_moments()
        if moments.ndim > 1:
            raise InputError("non-collinear magnetic moments are not supported", where)
        return cls(
            lattice=atoms.cell.array,
            positions=atoms.get_scaled_positions(wrap=False),
            numbers=atoms.numbers,
            name=name,
            source=source,
            magnetic_moments=moments if np.any(moments) else None,
        )
