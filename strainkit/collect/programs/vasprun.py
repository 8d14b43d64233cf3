"""VASP, vasprun.xml: eV and angstrom, stress in kbar and positive in compression; only what is needed is kept in memory."""

from __future__ import annotations

import re
from dataclasses import dataclass, field
from io import BytesIO
from xml.etree import ElementTree

import numpy as np

from strainkit.collect.returned import Geometry, Problems, Settings, Stress
from strainkit.collect.source import Source
from strainkit.collect.text import elements, names, number, symmetric
from strainkit.tensors.arrays import FloatArray
from strainkit.units import EV_PER_A3_IN_GPA

__all__ = [
    "BAD_MARKS",
    "END_MARK",
    "doubts",
    "energy",
    "forces",
    "geometry",
    "load",
    "recognises",
    "settings",
    "stress",
    "version",
]

END_MARK = re.compile(r"</modeling>\s*\Z")
BAD_MARKS: tuple[tuple[re.Pattern[str], str, str], ...] = ()
#: elements of a calculation that are large and not needed
_DROPPED = {"eigenvalues", "dos", "projected", "dielectricfunction", "dynmat"}


@dataclass
class Document:
    """Parameters by name, symbols, and the last ionic step with the energies of all of them."""

    parameters: dict[str, str] = field(default_factory=dict)
    incar: dict[str, str] = field(default_factory=dict)
    version: str = ""
    symbols: list[str] = field(default_factory=list)
    pseudopotentials: str = ""
    divisions: str = ""
    kpoint_count: int = 0
    step: ElementTree.Element | None = None
    energies: list[float] = field(default_factory=list)
    complete: bool = True


def recognises(head: bytes) -> bool:
    return b"<modeling>" in head and b"vasp" in head


def load(source: Source) -> Document:
    """Read the document up to where it ends or is cut."""
    text = source.free_text  # magnetic moments stand on one line
    if "<!DOCTYPE" in text or "<!ENTITY" in text:
        raise ValueError("it declares XML entities, which no vasprun.xml does")
    document = Document()
    # as UTF-8 whatever the first line says
    body = re.sub(r"\A\s*<\?xml[^>]*\?>", "", text)
    try:
        for event, element in ElementTree.iterparse(BytesIO(body.encode()), events=("start", "end")):
            if event == "start":
                document.complete &= element.tag != "calculation"
            else:
                _take(document, element)
    except ElementTree.ParseError as error:
        if document.step is None:
            raise ValueError(f"no complete ionic step: {error}") from None
    return document


def _take(document: Document, element: ElementTree.Element) -> None:
    """Keep what a finished element says and drop the rest."""
    if element.tag == "calculation":
        document.step, document.complete = element, True
        document.energies.append(_item(element.find("energy"), "e_fr_energy"))
    elif element.tag in ("parameters", "incar"):
        kept = document.parameters if element.tag == "parameters" else document.incar
        kept |= {item.get("name", ""): (item.text or "").strip() for item in element.iter("i")}
        element.clear()
    elif element.tag == "generator":
        document.version = (element.findtext("i[@name='version']") or "").strip()
    elif element.tag == "atominfo":
        cells = element.findall("array[@name='atoms']/set/rc/c[1]")
        document.symbols = [(cell.text or "").strip() for cell in cells]
        kinds = element.findall("array[@name='atomtypes']/set/rc/c[5]")
        document.pseudopotentials = names(" ".join((cell.text or "").split()) for cell in kinds)
    elif element.tag == "kpoints":
        document.divisions = "x".join((element.findtext("generation/v[@name='divisions']") or "").split())
        document.kpoint_count = len(element.findall("varray[@name='kpointlist']/v"))
    elif element.tag in _DROPPED:
        element.clear()


def _item(parent: ElementTree.Element | None, name: str) -> float:
    text = None if parent is None else parent.findtext(f"i[@name='{name}']")
    if text is None:
        return float("nan")
    return number(text.strip())


def _step(document: Document) -> ElementTree.Element:
    if document.step is None:
        raise ValueError("no ionic step")
    return document.step


def _array(parent: ElementTree.Element, path: str, count: int) -> FloatArray | None:
    block = parent.find(path)
    if block is None:
        return None
    values = np.array([[number(word) for word in (row.text or "").split()] for row in block.findall("v")], dtype=float)
    if values.shape != (count, 3):
        raise ValueError(f"{path} does not have {count} rows of three numbers")
    return values


def geometry(document: Document) -> Geometry:
    step = _step(document)
    lattice = _array(step, "structure/crystal/varray[@name='basis']", 3)
    positions = _array(step, "structure/varray[@name='positions']", len(document.symbols))
    if lattice is None or positions is None:
        raise ValueError("no structure in the last ionic step")
    return Geometry(lattice, positions, elements(document.symbols), 0.5e-8)


def stress(document: Document) -> Stress | None:
    values = _array(_step(document), "varray[@name='stress']", 3)
    return None if values is None else Stress(symmetric(-0.1 * values, 1e-6 * float(np.abs(values).max()) + 1e-8))


def energy(document: Document) -> float | None:
    """The free energy of the last ionic step; with PSTRESS (kbar), VASP writes the enthalpy, so that p V is taken off."""
    if not document.energies or not np.isfinite(document.energies[-1]):
        raise ValueError("no free energy in the last ionic step")
    volume = abs(float(np.linalg.det(geometry(document).lattice)))
    return document.energies[-1] - 0.1 * _parameter(document, "PSTRESS", 0.0) * volume / EV_PER_A3_IN_GPA


def forces(document: Document) -> FloatArray | None:
    return _array(_step(document), "varray[@name='forces']", len(document.symbols))


def _parameter(document: Document, name: str, default: float) -> float:
    word = document.parameters.get(name, "")
    return number(word) if word else default


def doubts(document: Document) -> Problems:
    """VASP writes no words of success here: its own criteria are applied to the numbers."""
    problems = []
    if not document.complete:
        problems.append(("unfinished", "the stress is of an earlier ionic step than the last one begun"))
    cycles = [_item(cycle.find("energy"), "e_fr_energy") for cycle in _step(document).findall("scstep")]
    limit, change = int(_parameter(document, "NELM", 60)), _parameter(document, "EDIFF", 1e-4)
    if len(cycles) >= limit and not (len(cycles) > 1 and abs(cycles[-1] - cycles[-2]) <= change):
        problems.append(("unconverged", "electronic steps did not converge"))
    steps, method = int(_parameter(document, "NSW", 0)), int(_parameter(document, "IBRION", -1))
    if steps > 0 and method == 0:
        problems.append(("unconverged", "ions moved by dynamics"))
    if steps > 0 and method in (1, 2, 3) and not _relaxed(document, _parameter(document, "EDIFFG", 10 * change)):
        problems.append(("unconverged", "ions not relaxed to EDIFFG"))
    return tuple(problems)


def _relaxed(document: Document, criterion: float) -> bool:
    """EDIFFG: of the energy when positive (conjugate gradients compare every second step), of the forces when negative."""
    if criterion > 0:
        return any(abs(document.energies[-1] - earlier) <= criterion for earlier in document.energies[-3:-1])
    pulls = forces(document)
    return pulls is None or float(np.linalg.norm(pulls, axis=1).max(initial=0.0)) <= -1.001 * criterion


def settings(document: Document) -> Settings:
    parameters = document.parameters
    result: dict[str, str | float | tuple[float, ...]] = {"kpoint_count": str(document.kpoint_count)}
    if "ENMAX" in parameters:
        result["cutoff_eV"] = _parameter(document, "ENMAX", 0.0)
    if document.divisions:
        result["kpoints"] = document.divisions
    named = parameters.get("METAGGA", "--")
    result["functional"] = parameters.get("GGA", "--") if named in ("", "--", "NONE") else named
    result["smearing"] = f"ISMEAR {parameters.get('ISMEAR', '1')}, {_parameter(document, 'SIGMA', 0.2):.4g} eV"
    result["dispersion"] = document.incar.get("IVDW", parameters.get("IVDW", "0"))
    result["pseudopotentials"] = document.pseudopotentials
    result["spin"] = "polarised" if parameters.get("ISPIN", "1") == "2" else "none"
    if result["dispersion"] == "0":
        result["dispersion"] = "none"
    return result


def version(document: Document) -> str:
    return document.version
