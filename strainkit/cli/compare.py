"""strainkit compare RUN RUN ..."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from strainkit.cli.options import Json, Quiet, ReadAs, Symprec, deliver, note

if TYPE_CHECKING:
    from strainkit.derive.member import Member

Crystals = Annotated[
    list[str] | None,
    typer.Argument(metavar="RUN...", help="Run or campaign folders, and typed tensors: FILE, or FILE:CELL with its structure."),
]
By = Annotated[
    str | None,
    typer.Option(
        help="Rank by young, shear, bulk, poisson, pugh, anisotropy, young-least, young-most, shear-least, or a constant. "
        "[default: young]"
    ),
]
Baseline = Annotated[str | None, typer.Option(help="Hold the others against this one: its name, folder or file.")]
Csv = Annotated[Path | None, typer.Option(help="Write values and differences to this file.")]
Html = Annotated[Path | None, typer.Option(help="Write one self-contained page to this file.")]


def compare(
    crystals: Crystals = None,
    by: By = None,
    baseline: Baseline = None,
    csv: Csv = None,
    html: Html = None,
    read_as: ReadAs = None,
    symprec: Symprec = 1e-3,
    force: Annotated[bool, typer.Option("--force", help="Replace files that strainkit did not write.")] = False,
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """Crystals side by side: what differs beyond the error bars, which ranking is right, what forms from what."""
    from strainkit.derive.comparison import MOST, compare_crystals
    from strainkit.errors import UsageError
    from strainkit.present.comparison import comparison_text
    from strainkit.present.comparison_csv import save_csv

    places = [(place, place != text) for text in crystals or [] for place in _places(text)]
    if len(places) < 2:
        raise UsageError("a comparison needs at least two crystals", "compare", "Give two or more run folders or files.")
    if len(places) > MOST:
        raise UsageError(f"{len(places)} crystals are too many to set side by side", "compare", f"Choose at most {MOST}.")
    members, left_out = _members(places, read_as, symprec)
    result = compare_crystals(members, by, baseline, left_out)
    if csv is not None:
        save_csv(result, csv, force)
        note(f"wrote {csv}", quiet)
    if html is not None:
        from strainkit.present.comparison_page import comparison_page
        from strainkit.present.report import save_own
        from strainkit.present.report_page import render

        save_own(html, render(comparison_page(result)).encode(), force)
        note(f"wrote {html}", quiet)
    deliver(result.to_dict, lambda: comparison_text(result), json)
    if any(m.moduli is None for m in result.members):
        raise typer.Exit(5)
    if left_out:
        raise typer.Exit(4)


def _members(places: list[tuple[str, bool]], read_as: str | None, symprec: float) -> tuple[list[Member], dict[str, str]]:
    """What can be compared, and why the others cannot; a place that was typed must at least be what it should be.

    Raises
    ------
    IncompleteError
        Fewer than two crystals can be compared.
    """
    from strainkit.errors import IncompleteError, NoTensorError, StrainkitError

    members: list[Member] = []
    left_out: dict[str, str] = {}
    for place, of_campaign in places:
        try:
            members.append(_member(place, read_as, symprec))
        except StrainkitError as error:
            if not (of_campaign or isinstance(error, NoTensorError | IncompleteError)):
                raise
            left_out[place] = error.what
    if len(members) < 2:
        why = "; ".join(f"{place}: {reason}" for place, reason in left_out.items())
        what = f"a comparison needs two crystals, and {len(members)} of {len(places)} have all their constants"
        raise IncompleteError(what, "compare", why)
    return members, left_out


def _places(text: str) -> list[str]:
    """The run folders of a campaign, or the one place."""
    from strainkit.run.campaign import is_campaign, load_campaign

    if not is_campaign(Path(text)):
        return [text]
    return [str(Path(text) / member.run) for member in load_campaign(Path(text)).members]


def _member(text: str, read_as: str | None, symprec: float) -> Member:
    """A run folder, a tensor file, or FILE:CELL."""
    from strainkit.cli.load import fitted
    from strainkit.collect.table import load_table
    from strainkit.crystal.read import read_crystal
    from strainkit.crystal.symmetry import find_symmetry
    from strainkit.derive.member import member_of_file, member_of_fit
    from strainkit.tensors.textfile import read_tensor

    path = Path(text)
    if path.is_file():
        return member_of_file(read_tensor(path))
    file, separator, cell = text.rpartition(":")
    if separator and not path.exists() and Path(file).is_file():
        crystal = read_crystal(Path(cell), read_as)
        return member_of_file(read_tensor(file), crystal, find_symmetry(crystal, symprec))
    return member_of_fit(fitted(path, {}), load_table(path), path)
