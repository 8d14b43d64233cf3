"""From cell files to a campaign folder: what is there already is kept, what is missing is planned, shown, and written."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from contextlib import AbstractContextManager, suppress
from dataclasses import dataclass, field, replace
from pathlib import Path

from strainkit.errors import InputError
from strainkit.prepare.campaign import Planned, Recipe, Spool, placed, plan_cells, write_members
from strainkit.prepare.cells import find_cells, names_of, plain_name
from strainkit.prepare.folders import make_folder
from strainkit.prepare.lists import calculation_record, write_lists
from strainkit.prepare.scripts import LOGS
from strainkit.run.campaign import Campaign, Member, Refusal, at_work, is_campaign, load_campaign
from strainkit.run.files import checksum, load_json
from strainkit.run.plan import MANIFEST

__all__ = ["Estimate", "Made", "make_campaign"]

Stage = Callable[[str], AbstractContextManager[Callable[[int, int, str], None]]]
#: what lies in a campaign folder whose manifest was lost before its first run folder was written
_OURS = ("runs", LOGS, "joblist", "submit", ".")


@dataclass(frozen=True)
class Estimate:
    """What is about to be written: crystals, jobs, files, bytes of a disk (about), and what is kept or refused.

    `findings` holds the codes of the warnings and errors of every crystal, kept ones included, that has some; `same_files` the
    names of crystals, of the whole campaign, whose files have the same content.
    """

    crystals: int
    jobs: int
    files: int
    bytes: int
    kept: int
    refused: tuple[Refusal, ...]
    laue_classes: dict[str, int]
    findings: dict[str, tuple[str, ...]] = field(default_factory=dict)
    same_files: tuple[tuple[str, ...], ...] = ()


@dataclass(frozen=True)
class Made:
    """A campaign as it is on disk now.

    Attributes
    ----------
    campaign : Campaign or None
        None when nothing was written.
    estimate : Estimate
    refused : tuple of Refusal
        Of this call.
    submit : str
        What the user types inside the campaign folder; empty without a scheduler or when there is nothing new.
    added : int
        Crystals that are new in a campaign that was there before.
    """

    campaign: Campaign | None
    estimate: Estimate
    refused: tuple[Refusal, ...]
    submit: str = ""
    added: int = 0


def make_campaign(
    arguments: Sequence[str],
    out: Path | None,
    recipe: Recipe,
    workers: int,
    agree: Callable[[Estimate], None],
    stage: Stage,
    force: bool = False,
) -> Made:
    """Plan the cells, ask whether to go on, and write the campaign; with `out` None nothing is written.

    A campaign that was made with the same options is completed: run folders that are there are kept as they are, missing
    ones and those of further cells are added.

    Parameters
    ----------
    arguments : sequence of str
        See `find_cells`.
    out : path or None
    recipe : Recipe
    workers : int
        Processes.
    agree : callable
        Sees the estimate before anything is written, and raises to stop.
    stage : callable
        Opens a context for a title, which yields a call (finished, total, name) that shows how far it is.
    force : bool
        Move a campaign of other options aside, instead of refusing.

    Raises
    ------
    InputError
        A place that holds something else, no usable cell, a disk without room.
    """
    cells, refused = find_cells(arguments)
    digest = recipe.digest()
    old = None if out is None else _existing(out, digest, force)
    kept, todo, changed = _compare(cells, old, out)
    refused += changed
    with Spool() as spool:
        with stage("plan") as report:
            planned, bad = plan_cells(todo, recipe, spool, workers, report)
        refused += bad
        estimate = Estimate(
            crystals=len(planned),
            jobs=sum(p.member.jobs for p in planned),
            files=sum(p.files for p in planned),
            bytes=sum(p.bytes for p in planned),
            kept=len(kept),
            refused=tuple(refused),
            laue_classes=_counted([*kept, *(p.member for p in planned)]),
            findings=_doubts(kept, planned, out),
            same_files=_same_files([*(old.members if old else ()), *(p.member for p in planned)]),
        )
        if not planned and not kept:
            reasons = "; ".join(f"{r.source}: {r.reason}" for r in refused[:3])
            more = f"; and {len(refused) - 3} more" if len(refused) > 3 else ""
            raise InputError(f"no usable cell ({reasons}{more})" if refused else "no cells", "CELL")
        agree(estimate)
        if out is None:
            return Made(None, estimate, tuple(refused))
        return _write(out, old, planned, estimate, recipe, digest, spool, workers, stage, force)


def _existing(out: Path, digest: str, force: bool) -> Campaign | None:
    """The campaign that is there already, if it was made with the same options; refuses what must not be touched."""
    if is_campaign(out):
        old = load_campaign(out)
        if old.recipe == digest or force:
            return old if old.recipe == digest else None
        raise InputError(
            "this campaign was prepared with other options", out, "Choose another --out, or --force to move it aside."
        )
    if out.is_symlink() or (out.exists() and not out.is_dir()):
        raise InputError("exists already and is not a campaign", out, "Choose another --out; nothing was touched.")
    if out.is_dir() and not _was_campaign(out):
        raise InputError("exists already and is not a campaign", out, "Choose another --out; nothing was touched.")
    return None


def _was_campaign(out: Path) -> bool:
    """Run folders where a campaign has them, whatever exports, tables and notes lie beside; or nothing of others."""
    if next(out.glob(f"runs/[0-9][0-9][0-9]*/*/{MANIFEST}"), None) is not None:
        return True
    return all(entry.name.startswith(_OURS) for entry in out.iterdir())


def _compare(
    cells: Sequence[Path], old: Campaign | None, out: Path | None
) -> tuple[list[Member], list[tuple[Path, str]], list[Refusal]]:
    """Members that are there, cells to plan with the names of their runs, and cells that changed since."""
    members = () if old is None else old.members
    by_source = {member.source: member for member in members}
    by_content = {(plain_name(Path(m.source)), m.source_sha256): m for m in members}
    kept: list[Member] = []
    todo: list[tuple[Path, str]] = []
    changed: list[Refusal] = []
    fresh = []
    for path in cells:
        sha = _checksum(path) if members else ""
        member = by_content.get((plain_name(path), sha)) or by_source.get(str(path))
        if member is None:
            fresh.append(path)
        elif member.source_sha256 != sha:
            changed.append(Refusal(str(path), f"the file changed since {member.run} was made from it; give it another name"))
        elif out is not None and (out / member.run / MANIFEST).is_file():
            kept.append(member)
        else:
            todo.append((path, member.name))
    names = names_of(fresh, (member.name.lower() for member in members))
    return kept, [*todo, *zip(fresh, names, strict=True)], changed


def _checksum(path: Path) -> str:
    try:
        return checksum(path.read_bytes())
    except OSError:
        return ""


def _counted(members: Sequence[Member]) -> dict[str, int]:
    classes = [member.laue_class for member in members]
    return {name: classes.count(name) for name in sorted(set(classes))}


def _doubts(kept: Sequence[Member], planned: Sequence[Planned], out: Path | None) -> dict[str, tuple[str, ...]]:
    """Codes of warnings and errors of the crystals that have some: as planned now, or as their run folders say."""
    found = {p.member.name: p.findings for p in planned}
    for member in kept:
        assert out is not None
        with suppress(InputError, KeyError, TypeError):  # a damaged manifest is told about when the lists are made
            said = load_json(out / member.run / MANIFEST, "strainkit/strain-set")["findings"]
            found[member.name] = tuple(dict.fromkeys(f["code"] for f in said if f["severity"] != "info"))
    return {name: codes for name, codes in found.items() if codes}


def _same_files(members: Sequence[Member]) -> tuple[tuple[str, ...], ...]:
    """Names of members whose cells come from files of the same content."""
    names: dict[str, dict[str, None]] = {}
    for member in members:
        names.setdefault(member.source_sha256, {})[member.name] = None
    return tuple(tuple(group) for group in names.values() if len(group) > 1)


def _write(
    out: Path,
    old: Campaign | None,
    planned: Sequence[Planned],
    estimate: Estimate,
    recipe: Recipe,
    digest: str,
    spool: Spool,
    workers: int,
    stage: Stage,
    force: bool,
) -> Made:
    if old is None and force and is_campaign(out):
        number = 1
        while (aside := out.with_name(f"{out.name}.old-{number}")).exists():
            number += 1
        out.rename(aside)
    make_folder(out, estimate.bytes)
    known = {member.name: member for member in old.members} if old else {}
    todo = [(known[p.member.name], p.where) for p in planned if p.member.name in known]
    todo += placed(old, [p for p in planned if p.member.name not in known])
    members = [*known.values(), *(member for member, _ in todo if member.name not in known)]
    sources = {member.source for member in members} | {refusal.source for refusal in estimate.refused}
    earlier = [r for r in (old.refused if old else ()) if r.source not in sources]
    campaign = Campaign(tuple(members), (*earlier, *estimate.refused), digest, calculation_record(out, recipe, members, old))
    with at_work(out, "prepare"):
        campaign.save(out)
        with stage("write") as report:
            problems = write_members(out, todo, recipe, spool, workers, report)
        if problems:
            lost = [Refusal(m.source, problems[m.name]) for m in members if m.name in problems]
            left = tuple(m for m in members if m.name not in problems)
            campaign = replace(campaign, members=left, refused=(*campaign.refused, *lost))
            campaign.save(out)
        submit = write_lists(out, campaign, recipe)
    added = 0 if old is None else len(campaign.members) - len(old.members)
    return Made(campaign, estimate, campaign.refused[len(earlier) :], submit, added)
