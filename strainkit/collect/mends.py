"""Ways in which a stress can be wrong although its job is right: what each would have to be changed by to be right again."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import permutations

import numpy as np

from strainkit.collect.table import StressRecord
from strainkit.tensors.arrays import FloatArray
from strainkit.tensors.rotations import rotation6
from strainkit.tensors.sixvectors import COMPONENTS
from strainkit.units import EV_PER_A3_IN_GPA, STRESS_UNITS_IN_GPA

__all__ = ["EXCHANGED", "FACTORS", "Mend", "mends", "order_words", "unit_words"]

#: ratios of the units that stresses come in (GPa, kbar, bar, MPa, eV/A^3, Ha/bohr^3, Ry/bohr^3), and of none of them
FACTORS = tuple(
    sorted(
        {10.0, 100.0, 1000.0, 10000.0, EV_PER_A3_IN_GPA, 10 * EV_PER_A3_IN_GPA}
        | {STRESS_UNITS_IN_GPA["Ha/bohr^3"], STRESS_UNITS_IN_GPA["Ry/bohr^3"]}
    )
)
#: orders in which programs and people write six components; the first is strainkit's own
ORDERS = (
    *((*COMPONENTS[:3], *shear) for shear in permutations(COMPONENTS[3:])),
    *((*normal, *COMPONENTS[3:]) for normal in list(permutations(COMPONENTS[:3]))[1:]),
    ("xx", "xy", "xz", "yy", "yz", "zz"),
    ("xx", "xy", "yy", "xz", "yz", "zz"),
)
_ROOT = np.array([1.0, 1.0, 1.0, 2.0**0.5, 2.0**0.5, 2.0**0.5])


@dataclass(frozen=True)
class Mend:
    """One change to a stress.

    Attributes
    ----------
    code : str
        The finding that it stands for.
    name : str
        What is wrong without it.
    matrices : (jobs, 6, 6)
        On the Cauchy stress (Mandel, given frame) of each job.
    order : tuple of str
        The order that the components really have; empty for other changes.
    factor : float
        By which the stress is multiplied.
    """

    code: str
    name: str
    matrices: FloatArray
    order: tuple[str, ...] = ()
    factor: float = 1.0


#: two lines of a table in each other's place; files carry their cells, so that theirs cannot be exchanged unseen
EXCHANGED = Mend("stress-exchanged", "the stresses are in each other's place", np.zeros((0, 6, 6)))


def mends(records: list[StressRecord], lattices: FloatArray) -> list[Mend]:
    """All changes that are tried.

    Parameters
    ----------
    records : list of StressRecord
    lattices : (jobs, 3, 3)
        Their planned lattices, rows, given frame.
    """
    count = len(records)

    def same(matrix: FloatArray) -> FloatArray:
        return np.broadcast_to(matrix, (count, 6, 6))

    found = [Mend("stress-sign", "the sign is reversed", same(-np.eye(6)), factor=-1.0)]
    for factor in FACTORS:
        for by, word in ((1 / factor, "large"), (factor, "small")):
            name = f"{factor:.4g} times too {word}{_mistaken(by)}"
            found.append(Mend("stress-unit", name, same(by * np.eye(6)), factor=by))
    for order in ORDERS[1:]:
        move = np.zeros((6, 6))
        for place, component in enumerate(order):
            move[COMPONENTS.index(component), place] = 1.0
        # what was put in place `place` belongs to `component`; root-two factors go with the places
        found.append(
            Mend(
                "stress-order", f"the components are in the order {' '.join(order)}", same(_ROOT[:, None] * move / _ROOT), order
            )
        )
    turned = np.array([np.eye(3) if r.rotation is None else r.rotation for r in records])
    frames = {
        "in the frame with a along x and b in the xy plane": np.swapaxes(_standard(lattices), 1, 2),
        "in the frame with c along z and a in the xz plane": np.swapaxes(_standard_c(lattices), 1, 2),
        "in the frame of the plan although the cell came back turned": turned,
        "turned the other way than its cell": turned @ turned,
    }
    for name, rotations in frames.items():
        if np.abs(rotations - np.eye(3)).max() > 1e-3:
            found.append(Mend("stress-frame", f"the stress is {name}", rotation6(rotations)))
    return found


def _mistaken(by: float) -> str:
    """The unit that GPa was taken for, or that was taken for GPa, if a stress must be multiplied by a factor."""
    for unit, size in STRESS_UNITS_IN_GPA.items():
        if unit != "GPa" and abs(by / size - 1) < 0.03:
            return f" ({unit} taken for GPa?)"
        if unit != "GPa" and abs(by * size - 1) < 0.03:
            return f" (GPa taken for {unit}?)"
    return ""


def _standard(lattices: FloatArray) -> FloatArray:
    """Rotations (n, 3, 3), v' = R v, into the frame with a along x and b in the xy plane."""
    a, b = lattices[:, 0], lattices[:, 1]
    return _axes(a, np.cross(a, b))


def _standard_c(lattices: FloatArray) -> FloatArray:
    """Rotations (n, 3, 3), v' = R v, into the frame with c along z and a in the xz plane."""
    a, c = lattices[:, 0], lattices[:, 2]
    y = np.cross(c, a)
    return _axes(np.cross(y, c), c)


def _axes(x: FloatArray, z: FloatArray) -> FloatArray:
    x = x / np.linalg.norm(x, axis=1, keepdims=True)
    z = z / np.linalg.norm(z, axis=1, keepdims=True)
    return np.stack([x, np.cross(z, x), z], axis=1)


def unit_words(record: StressRecord, factor: float) -> str:
    """The unit that a stress must have been in if it has to be multiplied by a factor, as the option that says so."""
    typed = record.settings.get("stress_unit")
    read_as = STRESS_UNITS_IN_GPA.get(
        str(typed), EV_PER_A3_IN_GPA if "XYZ" in record.program or "ASE" in record.program else 1.0
    )
    real = read_as * abs(factor)
    name = next((unit for unit, size in STRESS_UNITS_IN_GPA.items() if abs(size / real - 1) < 0.03), None)
    return f"--stress-unit {name}" if name else ""


def order_words(record: StressRecord, order: tuple[str, ...]) -> str:
    """The order that the columns of a record really have, given how they were read."""
    read_as = str(record.settings.get("stress_order", " ".join(COMPONENTS))).split()
    return " ".join(order[COMPONENTS.index(component)] for component in read_as)
