"""Where a command may write the file that an output option names: one rule for all of them.

Never over what belongs to a run or campaign, whatever is asked; over another file only where it is of the kind that is to be
written, or with --force.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

from strainkit.errors import InputError
from strainkit.run.campaign import CAMPAIGN
from strainkit.run.plan import MANIFEST
from strainkit.run.state import COLLECTED

__all__ = ["check_output"]

#: what strainkit or a scheduler reads in a run or campaign folder, by the beginnings of names
_KEPT = (MANIFEST, CAMPAIGN, COLLECTED, "stresses.", "ions.json", "stiffness.json", "screening.", "joblist", "submit")
#: folders in a run or campaign folder whose files are those of the jobs
_OF_JOBS = ("jobs", "logs")


def check_output(path: Path, ours: Callable[[Path], bool] | None, kind: str, force: bool | None = None) -> None:
    """Refuse a place that must not be written to; nothing is touched.

    Parameters
    ----------
    path : Path
    ours : callable or None
        Whether an existing file is one that the command may replace; None: it replaces none.
    kind : str
        What such a file is called: "a page".
    force : bool, optional
        Replace files of other kinds too; None for a command without --force.

    Raises
    ------
    InputError
        A folder, a device, a file of another kind, or a place that belongs to a run or campaign (`force` does not lift that).
    """
    if path.is_dir():
        raise InputError("is a folder", path, "Name a file.")
    place = path.parent.resolve() / path.name  # a link is replaced itself, its target stays
    for folder in place.parents:
        if not ((folder / MANIFEST).exists() or (folder / CAMPAIGN).exists()):
            continue
        first, *rest = place.relative_to(folder).parts
        if (rest and first in _OF_JOBS) or (not rest and first.startswith(_KEPT)):
            raise InputError(f"belongs to the run or campaign in {folder}; left as it is", path, "Choose another place.")
    if force or not (path.exists() or path.is_symlink()):
        return
    if path.is_file() and ours is not None and ours(path):
        return
    what = "exists already" if ours is None else f"exists and was not written by strainkit as {kind}"
    remedy = "Choose another place." if force is None else "Choose another place, or --force to replace it."
    raise InputError(f"{what}; left as it is", path, remedy)
