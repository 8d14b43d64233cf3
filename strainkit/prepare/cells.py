"""Which cell files a campaign is made of: files, folders, patterns and lists of files, each with a name of its own."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from glob import glob, has_magic
from pathlib import Path

from strainkit.crystal.read import crystal_name, is_always_called, is_called_a_cell
from strainkit.errors import InputError
from strainkit.run.campaign import CAMPAIGN, Refusal
from strainkit.run.plan import MANIFEST

__all__ = ["find_cells", "is_one_cell", "names_of", "natural", "not_taken"]


def is_one_cell(arguments: Sequence[str]) -> bool:
    """Is this a single structure file (or the name of one that is not there)?"""
    return len(arguments) == 1 and not (
        arguments[0].startswith("@")
        or Path(arguments[0]).is_dir()
        or (has_magic(arguments[0]) and not Path(arguments[0]).exists())
    )


def natural(path: Path) -> list[tuple[int, str]]:
    """Sort key in which cell10 follows cell9."""
    return [(int(part), "") if part.isdigit() else (-1, part) for part in re.split(r"(\d+)", str(path))]


def find_cells(arguments: Iterable[str]) -> tuple[list[Path], list[Refusal]]:
    """Cell files, each once, in the order given; and what of the arguments leads nowhere.

    Parameters
    ----------
    arguments : iterable of str
        Structure files; folders, searched with their sub-folders for names and endings of structure files; patterns with
        ``*``, ``?``, ``[]`` or ``**``; ``@FILE``, a list of files with one path a line (``#`` begins a comment).

    Raises
    ------
    InputError
        A list that cannot be read.
    """
    found: dict[Path, Path] = {}
    refused = []
    for argument in arguments:
        paths = _expand(argument)
        if any((Path(argument) / name).is_file() for name in (MANIFEST, CAMPAIGN)):
            remedy = "Give structure files; to add jobs to a run use --extend."
            raise InputError("a folder that strainkit prepared, not one of reference cells", argument, remedy)
        if not paths:
            what = "no structure files in it" if Path(argument).is_dir() else "no such file"
            refused.append(Refusal(argument, what))
        for path in paths:
            found.setdefault(path.resolve(), path)
    return list(found.values()), refused


def _expand(argument: str) -> list[Path]:
    path = Path(argument)
    if argument.startswith("@"):
        return [cell for line in _lines(Path(argument[1:])) for cell in (_expand(line) or [Path(line)])]
    if path.is_dir():
        return sorted(filter(is_called_a_cell, _files(path)), key=natural)
    if path.exists():
        return [path]
    if has_magic(argument):
        return sorted((Path(p) for p in glob(argument, recursive=True) if Path(p).is_file()), key=natural)
    return []


def _files(folder: Path) -> list[Path]:
    """Everything in a folder and its sub-folders that is not hidden."""
    inside = (p for p in folder.rglob("*") if not any(part.startswith(".") for part in p.relative_to(folder).parts))
    return [p for p in inside if p.is_file()]


def not_taken(arguments: Iterable[str]) -> list[Path]:
    """Files of the folders among the arguments that their names do not show to be structures; see `find_cells`."""
    found: dict[Path, None] = {}
    for argument in arguments:
        for place in _lines(Path(argument[1:])) if argument.startswith("@") else [argument]:
            if Path(place).is_dir():
                found |= dict.fromkeys(sorted((p for p in _files(Path(place)) if not is_called_a_cell(p)), key=natural))
    return list(found)


def _lines(path: Path) -> list[str]:
    try:
        text = path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        reason = error.strerror if isinstance(error, OSError) else "not a text file"
        raise InputError(f"the list of cells cannot be read ({reason})", path) from None
    lines = (line.partition("#")[0].strip() for line in text.splitlines())
    return [line for line in lines if line and not line.startswith("@")]


def names_of(paths: Sequence[Path], taken: Iterable[str] = ()) -> list[str]:
    """A folder name for each cell, after its file, with a number where another cell has the name already."""
    used = set(taken)
    names = []
    for path in paths:
        stem = plain_name(path)
        name, number = stem, 1
        while name.lower() in used:
            number += 1
            name = f"{stem}-{number}"
        used.add(name.lower())
        names.append(name)
    return names


def plain_name(path: Path) -> str:
    """Folder name after a cell's file, or after its folder where every file is called the same."""
    text = path.name.removesuffix(path.suffix)
    if is_always_called(path) or crystal_name(path) == path.name:
        text = crystal_name(path)
    return re.sub(r"[^A-Za-z0-9._-]+", "_", text).strip("._")[:80] or "crystal"
