"""Whole strain sets as real programs returned them (tests/data/sets)."""

from __future__ import annotations

from pathlib import Path

from strainkit.run.plan import MANIFEST, Plan, job_folder, load_plan

SETS = Path(__file__).parent.parent / "data" / "sets"
NAMES = tuple(sorted(path.name for path in SETS.iterdir() if path.is_dir()))


def unpack(name: str, run: Path) -> Plan:
    """Make a run folder of a set, outputs packed as they are, and give its plan."""
    run.mkdir(parents=True, exist_ok=True)
    (run / MANIFEST).write_bytes((SETS / name / MANIFEST).read_bytes())
    for path in (SETS / name).glob("*.xz"):
        label, _, kind = path.name.removesuffix(".xz").rpartition(".")
        folder = run / job_folder(label)
        folder.mkdir(parents=True, exist_ok=True)
        (folder / f"output.{kind}.xz").write_bytes(path.read_bytes())
    return load_plan(run)
