"""Making a campaign: many cells planned and written in parallel, bad ones told apart, safe to stop and to run again."""

from __future__ import annotations

import pickle
import shutil
import tempfile
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from functools import partial
from pathlib import Path
from typing import IO, Literal

from strainkit.crystal.read import read_crystal
from strainkit.crystal.symmetry import DEFAULT_SYMPREC
from strainkit.design.strainset import Wish
from strainkit.errors import DiskError, StrainkitError
from strainkit.prepare.calculation import Calculation, jobs_calculation
from strainkit.prepare.decks import load_deck
from strainkit.prepare.runfolder import files_of, plan_run, write_run
from strainkit.prepare.settings import Settings
from strainkit.prepare.writers import default_formats
from strainkit.run.campaign import Campaign, Member, Refusal, run_place
from strainkit.run.files import checksum, dump_json
from strainkit.run.plan import AtomMoves, Ions, Plan
from strainkit.run.pool import Died, over_processes

__all__ = ["Planned", "Recipe", "Spool", "placed", "plan_cells", "write_members"]

#: what a file system gives to a file at least, bytes
_BLOCK = 4096


@dataclass(frozen=True)
class Recipe:
    """The options that every crystal of a campaign is prepared with."""

    wish: Wish
    ions: Ions = "relaxed"
    symprec: float = DEFAULT_SYMPREC
    atoms: AtomMoves | Literal["auto"] = "auto"
    symmetrize: bool = False
    displaced: bool = False
    formats: tuple[str, ...] | None = None
    deck: str | None = None
    settings: Settings = field(default_factory=Settings)
    kspacing: float | None = None
    scheduler: str | None = None
    read_as: str | None = None

    def digest(self) -> str:
        """Checksum of everything in it, templates of the deck included."""
        text = repr(replace(self, settings=replace(self.settings, source="")))
        if self.deck is not None:
            deck = load_deck(self.deck, self.settings.deck, self.settings.source)
            paths = [*deck.templates.values(), *([deck.steps] if deck.steps else [])]
            text += "".join(checksum(path.read_bytes()) for path in paths)
        return checksum(text.encode())

    def calculation(self, plan: Plan) -> Calculation | None:
        """How the jobs of a plan are computed."""
        if self.deck is None:
            return None
        return jobs_calculation(self.deck, plan, self.settings, self.kspacing, self.symprec)


@dataclass(frozen=True)
class Planned:
    """A crystal that can be computed.

    Attributes
    ----------
    member : Member
        Its run folder is not fixed yet.
    files, bytes : int
        How many files its run folder will hold, and about how much of a disk they take.
    labels : tuple of str
    where : (int, int)
        Place of the pickled plan in the spool.
    findings : tuple of str
        Codes of its warnings and errors.
    """

    member: Member
    files: int
    bytes: int
    where: tuple[int, int]
    findings: tuple[str, ...] = ()


class Spool:
    """Plans on disk between planning and writing, so that memory does not grow with their number."""

    def __init__(self) -> None:
        self._file: IO[bytes] = tempfile.TemporaryFile()  # noqa: SIM115 (as long-lived as this object)

    def __enter__(self) -> Spool:
        return self

    def __exit__(self, *error: object) -> None:
        self._file.close()

    def keep(self, data: bytes) -> tuple[int, int]:
        """Append some bytes and say where."""
        try:
            start = self._file.seek(0, 2)
            self._file.write(data)
            self._file.flush()
        except OSError as error:
            raise DiskError(f"cannot be written ({error.strerror})", tempfile.gettempdir(), "Set TMPDIR.") from None
        return start, len(data)

    def get(self, where: tuple[int, int]) -> bytes:
        """The bytes that were kept there."""
        self._file.seek(where[0])
        return self._file.read(where[1])


def plan_cells(
    cells: Sequence[tuple[Path, str]], recipe: Recipe, spool: Spool, workers: int, report: Callable[[int, int, str], None]
) -> tuple[list[Planned], list[Refusal]]:
    """Plan every cell (file, name); what cannot be computed is refused with its reason and never stops the others.

    Returns
    -------
    planned, refused
        In the order of the cells.
    """
    found: dict[Path, Planned | str] = {}
    for (path, _), result in over_processes(partial(_plan, recipe), cells, workers):
        if isinstance(result, Died):
            found[path] = "the process that read it ended unexpectedly"
        elif isinstance(result, str):
            found[path] = result
        else:
            member, files, size, codes, data = result
            found[path] = Planned(member, files, size, spool.keep(data), codes)
        report(len(found), len(cells), path.name)
    planned, refused = [], []
    for path, _ in cells:
        outcome = found[path]
        if isinstance(outcome, str):
            refused.append(Refusal(str(path), outcome))
        else:
            planned.append(outcome)
    return planned, refused


def _plan(recipe: Recipe, cell: tuple[Path, str]) -> tuple[Member, int, int, tuple[str, ...], bytes] | str:
    """One cell, in a worker: its member, files, bytes, finding codes and pickled plan; or why not."""
    path, name = cell
    try:
        crystal = read_crystal(path, recipe.read_as)
        digest = checksum(path.read_bytes())
        plan = plan_run(
            crystal, recipe.wish, recipe.ions, recipe.symprec, recipe.atoms, recipe.symmetrize, displaced=recipe.displaced
        )
        calculation = recipe.calculation(plan)
        formats = default_formats(crystal) if recipe.formats is None else recipe.formats
        one = files_of(plan, plan.jobs[:1], formats, calculation)
    except StrainkitError as error:
        return f"{error.what} ({error.where})" if error.where and error.where != str(path) else error.what
    except Exception as error:
        return f"unexpected {type(error).__name__}: {error}"
    member = Member(name, "", str(path), digest, plan.symmetry.laue_class, len(plan.jobs))
    a_job = _BLOCK + sum(_on_disk(text) for text in one.values())
    size = len(plan.jobs) * a_job + _on_disk(dump_json(plan.to_dict())) + (6 if recipe.scheduler else 3) * _BLOCK
    files = len(plan.jobs) * len(one) + (3 if recipe.scheduler else 1)
    doubts = (*plan.findings, *(calculation.findings() if calculation is not None else ()))
    codes = tuple(dict.fromkeys(f.code for f in doubts if f.severity != "info"))
    return member, files, size, codes, pickle.dumps((plan, calculation))


def _on_disk(text: str) -> int:
    return -(-len(text) // _BLOCK) * _BLOCK


def write_members(
    folder: Path,
    todo: Sequence[tuple[Member, tuple[int, int]]],
    recipe: Recipe,
    spool: Spool,
    workers: int,
    report: Callable[[int, int, str], None],
) -> dict[str, str]:
    """Write the run folders of members whose plans are in the spool.

    Returns
    -------
    dict
        Name -> reason of those that could not be written because of something in their place.

    Raises
    ------
    DiskError
        A full disk or a read-only folder: what is written is whole, and the same command goes on from there.
    """

    def tasks() -> Iterator[tuple[Path, bytes]]:
        for member, where in todo:
            yield folder / member.run, spool.get(where)

    for shard in {(folder / member.run).parent for member, _ in todo}:
        for left in shard.glob(".*"):  # of a process that was killed
            shutil.rmtree(left, ignore_errors=True)
    problems: dict[str, str] = {}
    for done, ((place, _), result) in enumerate(over_processes(partial(_write, recipe), tasks(), workers), 1):
        if isinstance(result, DiskError):
            raise DiskError(
                f"{result.what}; {done - 1} of {len(todo)} run folders are written",
                result.where,
                "Make room or mend permissions, then give the same command again: it goes on from there.",
            )
        if result is not None:
            problems[place.name] = "the process that wrote it ended unexpectedly" if isinstance(result, Died) else result
        report(done, len(todo), place.name)
    return problems


def _write(recipe: Recipe, task: tuple[Path, bytes]) -> DiskError | str | None:
    """One run folder, in a worker: None, or why not."""
    place, data = task
    try:
        plan, calculation = pickle.loads(data)
        write_run(plan, place, recipe.formats, False, calculation, recipe.scheduler)
    except DiskError as error:
        return error
    except StrainkitError as error:
        return error.what
    except Exception as error:
        return f"unexpected {type(error).__name__}: {error}"
    return None


def placed(old: Campaign | None, planned: Sequence[Planned]) -> list[tuple[Member, tuple[int, int]]]:
    """Members with their run folders, counted on from those of the campaign."""
    first = len(old.members) if old else 0
    return [(replace(p.member, run=run_place(first + i, p.member.name)), p.where) for i, p in enumerate(planned)]
