"""Options that several commands share, and the one place where results and errors leave the program."""

from __future__ import annotations

import os
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Annotated, Any

import typer

__all__ = [
    "Again",
    "Cell",
    "Frame",
    "Json",
    "Quiet",
    "ReadAs",
    "Run",
    "RunOrCampaign",
    "Symprec",
    "Workers",
    "deliver",
    "note",
    "progress",
    "spelt",
    "typed",
]

Cell = Annotated[Path, typer.Argument(help="Structure file: CIF, POSCAR, extended XYZ, or any ASE format with --read-as.")]
Run = Annotated[Path, typer.Argument(help="Run folder made by strainkit prepare.")]
RunOrCampaign = Annotated[Path, typer.Argument(metavar="RUN", help="Run folder or campaign made by strainkit prepare.")]
ReadAs = Annotated[str | None, typer.Option(help="Format of CELL: cif, poscar, extxyz or an ASE format name.")]
Symprec = Annotated[float, typer.Option(help="Distance tolerance of the symmetry search, A.", min=1e-8, max=1.0)]
Workers = Annotated[int | None, typer.Option(help="Processes, for a campaign. [default: all cores]", min=1)]
Again = Annotated[bool, typer.Option("--again", help="For a campaign: do crystals anew whose inputs have not changed.")]
Frame = Annotated[str, typer.Option(help="Axes of printed tensors: given, ieee or crystal (x||a, z||c*).")]
Json = Annotated[bool, typer.Option("--json", help="Print one JSON object to standard output.")]
Quiet = Annotated[bool, typer.Option("--quiet", help="No notes and no progress bar; results are printed all the same.")]


def typed(context: typer.Context) -> list[str]:
    """Names of the parameters that stand on the command line, in its order."""
    sources = {name: context.get_parameter_source(name) for name in context.params}
    return [name for name, source in sources.items() if source is not None and source.name == "COMMANDLINE"]


def spelt(name: str) -> str:
    """A parameter as it is typed: --dry-run; the cells have no option."""
    return "CELL" if name == "cell" else "--" + name.replace("_", "-")


def deliver(data: Callable[[], dict[str, Any]], text: Callable[[], str], as_json: bool) -> None:
    """Print a result to standard output, as JSON or as text; a reader that closes the pipe early is no error."""
    from strainkit.present.text import printable
    from strainkit.run.files import dump_json

    try:
        sys.stdout.write(printable(dump_json(data()) if as_json else text() + "\n", as_json))
        sys.stdout.flush()
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        raise typer.Exit(0) from None


def note(text: str, quiet: bool) -> None:
    """A remark on standard error."""
    from strainkit.present.text import printable

    if not quiet:
        typer.echo(printable(text), err=True)


@contextmanager
def progress(title: str, quiet: bool) -> Iterator[Callable[[int, int, str], None]]:
    """A progress bar on standard error when that is a terminal; the yielded call takes (finished, total, label)."""
    if quiet or not sys.stderr.isatty():
        yield lambda finished, total, label: None
        return
    from rich.console import Console
    from rich.markup import escape
    from rich.progress import Progress

    from strainkit.present.text import printable

    with Progress(console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task(title, total=None)

        def update(finished: int, total: int, label: str) -> None:
            bar.update(task, completed=finished, total=total, description=escape(printable(f"{title} {label}")))

        yield update
