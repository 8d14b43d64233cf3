"""Every fault alone in four Laue classes, clean sets of all; a bench by another injector: tests/benchmarks/blind_bench.py.

What a fault must be named follows from the injector in support.faultbench; clean sets must stay silent.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from support.crystals import conventional
from support.faultbench import FAULTS, Faulty, alarms, clean_set, collected, fitted, inject, verdict
from support.groups import LAUE_CLASSES

from strainkit.prepare.runfolder import plan_run

#: turned by less than a degree, or components that are alike: no harm, and not always to be seen
FAINT = ("order, one job", "order, all", "frame, one job", "frame, all")
PLANS = dict.fromkeys(LAUE_CLASSES)


def plan_of(laue):
    PLANS[laue] = PLANS[laue] or plan_run(conventional(laue), (0.005, 0.01) if laue in ("m-3", "m-3m") else (0.01,))
    return PLANS[laue]


@pytest.mark.parametrize("laue", LAUE_CLASSES)
@pytest.mark.parametrize("residual", [0.0, 1.0, 10.0])
def test_clean_sets_raise_no_alarm(laue, residual):
    rng = np.random.default_rng(LAUE_CLASSES.index(laue))
    for noise in (0.0, 0.003, 0.03):
        for energies in (True, False):
            assert alarms(clean_set(laue, rng, (0.01,), noise, residual, energies, plan_of(laue))) == []


@pytest.mark.parametrize("name", [name for name in FAULTS if name not in FAINT])
def test_each_fault_alone_is_named(name):
    rng = np.random.default_rng(list(FAULTS).index(name))
    for laue in ("2/m", "mmm", "-3m", "m-3m"):
        clean = clean_set(laue, rng, (0.01,), 0.003, 1.0, plan=plan_of(laue))
        word = verdict(clean, inject(clean, [name], rng))[0]
        expected = {"stress of an earlier step": ("outlier",), "ions not converged": ("named", "outlier")}.get(name, ("named",))
        assert word in expected, laue


@pytest.mark.parametrize("name", FAINT)
def test_a_fault_that_is_not_named_moves_no_constant_by_two_percent(name):
    rng = np.random.default_rng(FAINT.index(name))
    for laue in ("-1", "2/m", "mmm", "-3m", "m-3m"):
        clean = clean_set(laue, rng, (0.01,), 0.003, 0.0, plan=plan_of(laue))
        case = inject(clean, [name], rng)
        if verdict(clean, case)[0] in ("missed", "harmless"):
            fit, truth = fitted(clean.plan, collected(case)), fitted(clean.plan, collected(inject(clean, [], rng)))
            change = np.abs(fit.regression.values - truth.regression.values).max()
            assert change < 0.02 * np.abs(truth.regression.values).max(), laue


@pytest.mark.parametrize(("factor", "word"), [(10.0, "10"), (1 / 160.2176634, "160.2"), (1000.0, "1000")])
def test_a_common_factor_is_seen_through_the_energies_alone(factor, word):
    """Without energies it cannot be seen, and nothing is said."""
    rng = np.random.default_rng(3)
    for energies in (True, False):
        clean = clean_set("mmm", rng, noise=0.01, energies=energies, plan=plan_of("mmm"))
        case = Faulty(clean.plan, {k: replace(v, stress=factor * v.stress) for k, v in clean.outputs.items()}, clean.clamped)
        table = collected(case)
        if not energies:
            assert len(table.usable) == len(table.records)
            assert not table.findings
            continue
        assert [f.code for f in table.findings] == ["stress-unit"]
        assert "the energies of the same jobs" in table.findings[0].message
        assert not table.usable


def test_a_pulay_stress_is_no_fault_of_sign_or_unit():
    """As urea in Quantum ESPRESSO at 30 Ry: an offset some twenty times the signal, and energies that know nothing of it."""
    rng = np.random.default_rng(4)
    clean = clean_set("4/mmm", rng, noise=0.003, plan=plan_of("4/mmm"))
    offset = -20 * max(np.abs(v.stress).max() for v in clean.outputs.values()) * np.eye(3)
    volume = clean.plan.crystal.volume
    outputs = {
        k: replace(v, stress=v.stress + offset * volume / abs(np.linalg.det(v.lattice))) for k, v in clean.outputs.items()
    }
    table = collected(Faulty(clean.plan, outputs, clean.clamped))
    assert not [f for f in table.findings if f.severity == "error"]
    assert len(table.usable) == len(table.records)
