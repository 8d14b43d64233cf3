"""Entry point: registers the commands and turns every strainkit error into one message and its exit code."""

from __future__ import annotations

import os
import sys
from importlib import import_module
from typing import Annotated, Any

# the matrices here are small: threads of the linear algebra library only get in each other's way
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import typer
from typer.core import TyperGroup

from strainkit import __version__

__all__ = ["app", "main"]

#: command -> what it is for; it is the function of that name in the module of that name, imported when it is called
COMMANDS = {
    "inspect": "What is this cell: symmetry, constants, jobs needed, problems.",
    "relax": "Bring a reference cell to zero stress.",
    "prepare": "Strained cells for one relaxed crystal, or for many.",
    "evaluate": "Run the set on this machine with a local engine.",
    "progress": "Which jobs are done, running, missing or broken, and why.",
    "collect": "Read what came back into the stress table.",
    "fit": "Stiffness with error bars and findings.",
    "converge": "Is the strain magnitude right?",
    "derive": "What the tensor means: moduli, planes, directions, waves.",
    "report": "One self-contained HTML file.",
    "compare": "Crystals side by side, with what the error bars allow.",
    "demo": "The whole path on a sample cell, here and now.",
}


class Commands(TyperGroup):
    """Commands that are built one at a time: typer takes longer over the options of all of them than over starting."""

    def __init__(self, **attributes: Any) -> None:
        super().__init__(**attributes)
        self.commands = dict.fromkeys(COMMANDS)  # type: ignore[assignment] # the names, for typer's suggestions

    def list_commands(self, ctx: Any) -> list[str]:
        """Names in the order of the work."""
        return list(COMMANDS)

    def get_command(self, ctx: Any, cmd_name: str) -> Any:
        """The command of a name, or None."""
        if cmd_name not in COMMANDS:
            return None
        alone = typer.Typer(rich_markup_mode=None, pretty_exceptions_enable=False, add_completion=False)
        alone.command(cmd_name)(getattr(import_module(f"strainkit.cli.{cmd_name}"), cmd_name))
        return typer.main.get_command(alone)

    def format_commands(self, ctx: Any, formatter: Any) -> None:
        """The list in the help text."""
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))


app = typer.Typer(
    name="strainkit",
    cls=Commands,
    help="From one relaxed crystal to the fewest strained cells, and from their stresses to a stiffness tensor.",
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    add_completion=False,
)


def _print_version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"strainkit {__version__}")
        raise typer.Exit


@app.callback()
def _options(
    version: Annotated[bool, typer.Option("--version", callback=_print_version, is_eager=True, help="Print version.")] = False,
) -> None:
    """From one relaxed crystal to the fewest strained cells, and from their stresses to a stiffness tensor."""


def main() -> None:
    """Run the command line; exit codes are in README."""
    from strainkit.errors import StrainkitError
    from strainkit.present.text import printable

    try:
        app()
    except StrainkitError as error:
        typer.echo(printable(f"strainkit: {error}"), err=True)
        sys.exit(error.exit_code)
    except Exception as error:
        if "STRAINKIT_DEBUG" in os.environ:
            raise
        typer.echo(
            printable(f"strainkit: unexpected {type(error).__name__}: {error}\n")
            + "This is a fault of strainkit. Set STRAINKIT_DEBUG=1 for the traceback and report it.",
            err=True,
        )
        sys.exit(1)
