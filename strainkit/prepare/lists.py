"""The job lists and scripts of a campaign, and what its manifest keeps of them."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

from strainkit.errors import InputError
from strainkit.prepare.campaign import Recipe
from strainkit.prepare.scripts import LOGS, arrays, job_name, kept_site, list_name, many_files, script_name, submit_command
from strainkit.run.campaign import Campaign, Member
from strainkit.run.files import atomic_write, checksum, load_json
from strainkit.run.plan import MANIFEST

__all__ = ["calculation_record", "write_lists"]


def calculation_record(out: Path, recipe: Recipe, members: Sequence[Member], old: Campaign | None) -> dict[str, Any]:
    """What the manifest keeps of scheduler and site: that of the campaign that is there, if there is one."""
    if old is not None:
        return old.calculation
    if recipe.scheduler is None:
        return {}
    tag = checksum("".join(m.source_sha256 for m in members).encode())[:6]
    return {
        "scheduler": recipe.scheduler,
        "site": kept_site(recipe.settings.site),
        "job_name": job_name(out.resolve().name, tag, 1),
    }


def write_lists(out: Path, campaign: Campaign, recipe: Recipe) -> str:
    """Lists, and scripts where there is a scheduler, for the jobs that are on no list yet; what to type, or nothing."""
    listed: set[str] = set()
    count = 1
    while (out / script_name(count)).exists():  # a list without its script was never submitted
        listed |= set((out / list_name(count)).read_text(encoding="utf-8").split())
        count += 1
    every = [folder for member in campaign.members for folder in _job_folders(out, member)]
    fresh = [folder for folder in every if folder not in listed]
    if not fresh:
        return ""
    if recipe.scheduler is None:
        path, text = out / list_name(1), "".join(f"{folder}\n" for folder in every)
        if not path.is_file() or path.read_text(encoding="utf-8") != text:
            atomic_write(path, text)
        return ""
    site = recipe.settings.site
    parts = arrays(fresh, recipe.scheduler, site)
    stem = str(campaign.calculation["job_name"]).rpartition("-")[0]
    for number, part in enumerate(parts, count):
        (out / LOGS / str(number)).mkdir(parents=True, exist_ok=True)
        title = f"campaign of {len(campaign.members)} crystals"
        for name, text in many_files(recipe.scheduler, site, title, part, f"{stem}-{number}", number).items():
            atomic_write(out / name, text)
    return submit_command(recipe.scheduler, count, len(parts))


def _job_folders(out: Path, member: Member) -> list[str]:
    """Job folders of a member relative to the campaign, in the order of its plan."""
    path = out / member.run / MANIFEST
    try:
        return [f"{member.run}/{job['folder']}" for job in load_json(path, "strainkit/strain-set")["jobs"]]
    except (InputError, KeyError, TypeError) as error:
        what = error.what if isinstance(error, InputError) else f"damaged manifest ({type(error).__name__}: {error})"
        remedy = f"Restore it, or move {out / member.run} away and give the same command again."
        raise InputError(what, path, remedy) from None
