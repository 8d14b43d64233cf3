"""strainkit inspect CELL."""

from __future__ import annotations

from strainkit.cli.options import Cell, Json, Quiet, ReadAs, Symprec, deliver


def inspect(cell: Cell, read_as: ReadAs = None, symprec: Symprec = 1e-3, json: Json = False, quiet: Quiet = False) -> None:
    """What is this cell: symmetry over tolerances, constants, jobs needed, problems."""
    from strainkit.crystal.read import read_crystal
    from strainkit.crystal.symmetry import tolerance_ladder
    from strainkit.prepare.runfolder import plan_run
    from strainkit.present.terminal import plan_text
    from strainkit.present.text import columns

    crystal = read_crystal(cell, read_as)
    plan = plan_run(crystal, symprec=symprec)
    rungs, _ = tolerance_ladder(crystal, symprec)
    ladder = [{"tolerance_A": t, "space_group": group, "laue_class": laue} for t, group, laue in rungs]
    text = columns([[f"{t:g} A", group, laue] for t, group, laue in rungs], ["tolerance", "space group", "Laue class"], 3)
    deliver(
        lambda: plan.to_dict() | {"schema": "strainkit/inspection/1", "tolerances": ladder},
        lambda: f"{plan_text(plan, jobs=False)}\n\n{text}",
        json,
    )
