"""Faults that no one may overlook, injected by code that was written without knowledge of how `collect` judges.

The sets: real silicon of Quantum ESPRESSO (tests/data), and invented lawful ones. The bench: tests/benchmarks/blind_bench.py.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np
import pytest
import support.blind.cells
import support.blind.files  # noqa: F401  (both register their faults)
from support.blind.judge import CONSEQUENCES, Seen, inject, judge, look
from support.blind.sets import StrainSet, real_set, synthetic_set

SILICON = Path(__file__).parent.parent / "data" / "sets" / "silicon_qe"


@cache
def _clean(name: str) -> tuple[StrainSet, Seen]:
    laue, _, kind = name.partition(":")
    work = real_set(SILICON) if name == "silicon" else synthetic_set(laue, 5, kind)
    return work, look(work)


@pytest.mark.parametrize("name", ["silicon", "2/m:xyz", "6/mmm:xyz", "m-3m:table"])
def test_a_clean_set_raises_no_alarm(name):
    _, seen = _clean(name)
    assert not seen.trouble
    assert not {finding for finding in seen.findings if finding[0] not in CONSEQUENCES}


#: fault, set, seed of the job and size
UNMISTAKABLE = [
    ("sign, one", "silicon", 1),
    ("sign, one", "2/m:xyz", 2),
    ("unit, one", "silicon", 3),
    ("sign, all", "m-3m:table", 4),
    ("sign, all", "silicon", 5),
    ("not a number", "silicon", 6),
    ("not a number", "6/mmm:xyz", 7),
    ("reference missing", "silicon", 8),
    ("reference missing", "2/m:xyz", 9),
    ("another strain", "2/m:xyz", 10),
    ("another crystal", "6/mmm:xyz", 11),
    ("cell drifted", "silicon", 12),
    ("output truncated", "silicon", 13),
    ("output truncated", "2/m:xyz", 14),
    ("stress missing", "silicon", 15),
    ("stress missing", "6/mmm:xyz", 16),
    ("electronic steps not converged", "silicon", 17),
    ("ions not converged", "silicon", 18),
    ("output of another job", "silicon", 19),
    ("output of another job", "6/mmm:xyz", 20),
    ("set differs in k-points", "silicon", 21),
    ("set differs in cutoff", "silicon", 22),
    ("set differs in functional", "silicon", 23),
    ("set differs in dispersion", "silicon", 24),
    ("set differs in smearing", "silicon", 25),
    ("set differs in spin", "silicon", 26),
    ("set differs in version", "silicon", 27),
]


@pytest.mark.parametrize(("fault", "name", "seed"), UNMISTAKABLE)
def test_an_unmistakable_fault_is_named(fault, name, seed):
    work, clean = _clean(name)
    made = inject(work, (fault,), np.random.default_rng(seed))
    assert made is not None
    bad, (injected,) = made
    verdict = judge(bad, injected, look(bad), clean, clean, ())
    assert verdict.word == "named", f"{injected.labels}, {injected.note}: {verdict.said}"
    assert not verdict.blamed
