"""Entry point: registers the commands and turns every strainkit error into one message and its exit code."""

from __future__ import annotations

import os
import sys
from typing import Annotated

# the matrices here are small: threads of the linear algebra library only get in each other's way
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import typer

from strainkit import __version__
from strainkit.cli.collect import collect
from strainkit.cli.compare import compare
from strainkit.cli.converge import converge
from strainkit.cli.demo import demo
from strainkit.cli.derive import derive
from strainkit.cli.evaluate import evaluate
from strainkit.cli.fit import fit
from strainkit.cli.inspect import inspect
from strainkit.cli.prepare import prepare
from strainkit.cli.progress import progress
from strainkit.cli.relax import relax

__all__ = ["app", "main"]

app = typer.Typer(
    name="strainkit",
    help="From one relaxed crystal to the fewest strained cells, and from their stresses to a stiffness tensor.",
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    add_completion=False,
)
for command in (inspect, relax, prepare, evaluate, progress, collect, fit, converge, derive, compare, demo):
    app.command()(command)


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

    try:
        app()
    except StrainkitError as error:
        typer.echo(f"strainkit: {error}", err=True)
        sys.exit(error.exit_code)
    except Exception as error:
        if "STRAINKIT_DEBUG" in os.environ:
            raise
        typer.echo(
            f"strainkit: unexpected {type(error).__name__}: {error}\n"
            "This is a fault of strainkit. Set STRAINKIT_DEBUG=1 for the traceback and report it.",
            err=True,
        )
        sys.exit(1)
