"""A relaxed reference carries next to no stress: no unit error, however well a larger one would fit the even response.

Stresses and energies of silicon by ABINIT 9.6.2 (LDA, 12 Ha, 6x6x6; from tests/cluster), which once raised a false alarm.
"""

from __future__ import annotations

import numpy as np
import pytest
from ase.build import bulk
from support.returned import write_return

from strainkit.collect.gather import collect_run
from strainkit.crystal.crystal import Crystal
from strainkit.prepare.runfolder import plan_run, write_run
from strainkit.run.plan import job_folder
from strainkit.tensors.sixvectors import stress_from_voigt

SILICON = {
    "reference": ([-7.7587e-5, -7.7587e-5, -7.7587e-5, 0, 0, 0], -231.95359089),
    "s1-plus-1": ([0.099904778, 1.185135262, 1.487414776, -0.27971461, -0.580775375, -1.171254953], -231.94823022),
    "s1-minus-1": ([-0.164360012, -1.310108457, -1.56682961, 0.308469735, 0.594637039, 1.177560437], -231.94808183),
}


@pytest.fixture
def run(tmp_path):
    crystal = Crystal.from_atoms(bulk("Si", a=2 * 2.6983551407171555), name="silicon")
    plan, _ = write_run(plan_run(crystal), tmp_path / "run")
    assert plan.strain_set[1].gradient[0] == pytest.approx([0.9947116, -0.0076194, -0.0038097], abs=1e-6)
    for job in plan.strain_set:
        stress, energy = SILICON[job.label]
        cell = crystal.deformed(job.gradient)
        write_return(tmp_path / "run" / job_folder(job.label), cell, stress_from_voigt(np.array(stress)), energy=energy)
    return tmp_path / "run", plan


def test_no_alarm(run):
    table = collect_run(*run)
    assert [r.status for r in table.records] == ["done"] * 3
    assert not [f for r in table.records for f in r.findings]
