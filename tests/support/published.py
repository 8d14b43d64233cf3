"""Published stiffness tensors (tests/data/published_stiffness.json, each entry with its source and provenance)."""

from __future__ import annotations

import json
from functools import cache
from pathlib import Path

import numpy as np

from strainkit.tensors.sixvectors import stiffness_from_voigt

DATA = Path(__file__).parent.parent / "data"

#: one entry a Laue class, with the axes that the rotations in `support.groups` assume
BY_LAUE_CLASS = {
    "-1": "albite_An0_Brown2016",
    "2/m": "diopside_Sang2011_1",
    "mmm": "aragonite_Liu2005",
    "4/m": "SrMoO4_1972",
    "4/mmm": "iceVI_Tulk",
    "-3": "dolomite_Chen2006",
    "-3m": "quartz_McSkimin1965_298K",
    "6/m": "oxyapatite_6m",
    "6/mmm": "iceIh_Gammon_257K",
    "m-3": "CO_alpha",
    "m-3m": "Si_CRC",
}


@cache
def entries() -> dict[str, dict]:
    """All entries by id."""
    return {entry["id"]: entry for entry in json.loads((DATA / "published_stiffness.json").read_text())["entries"]}


def mandel(entry_id: str) -> np.ndarray:
    """Mandel stiffness (6, 6), GPa, in the entry's axes; dependent constants filled in by the Laue class's relations."""
    entry = entries()[entry_id]
    c = dict(entry["stiffness_GPa"])
    laue = entry["laue_class"]
    if laue not in ("-1", "2/m", "mmm"):
        c.setdefault("C22", c["C11"])
        c.setdefault("C55", c["C44"])
        c.setdefault("C23", c["C12"] if laue.startswith("m-3") else c["C13"])
    if laue.startswith("m-3"):
        c |= {"C13": c["C12"], "C33": c["C11"], "C66": c["C44"]}
    if laue in ("-3", "-3m", "6/m", "6/mmm"):
        c["C66"] = 0.5 * (c["C11"] - c["C12"])
    if laue in ("-3", "-3m"):
        c |= {"C24": -c["C14"], "C56": c["C14"]}
        c |= {"C25": -c.get("C15", 0.0), "C46": -c.get("C15", 0.0)}
    if laue == "4/m":
        c["C26"] = -c["C16"]
    voigt = np.zeros((6, 6))
    for name, value in c.items():
        i, j = int(name[1]) - 1, int(name[2]) - 1
        voigt[i, j] = voigt[j, i] = value
    return stiffness_from_voigt(voigt)
