"""strainkit evaluate RUN."""

from __future__ import annotations

from typing import Annotated

import typer

from strainkit.cli.options import Json, Quiet, Run, deliver, progress

ENGINE_HELP = "emt, lj, morse, tersoff, gfn1-xtb, gfn2-xtb, or module:Class of an ASE calculator."
EngineName = Annotated[str, typer.Option(help=ENGINE_HELP)]
Settings = Annotated[list[str] | None, typer.Option("--set", help="Engine setting key=value; repeatable.")]
Fmax = Annotated[float, typer.Option(help="Largest force left on an ion, eV/A.", min=1e-12)]


def evaluate(
    run: Run,
    engine: EngineName,
    settings: Settings = None,
    fmax: Fmax = 2e-4,
    workers: Annotated[int | None, typer.Option(help="Processes. [default: all cores]", min=1)] = None,
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """Run the set on this machine with a local engine; finished jobs are kept."""
    from strainkit.evaluate.engines import Engine, parse_settings
    from strainkit.evaluate.runset import evaluate_run
    from strainkit.present.text import columns
    from strainkit.run.plan import load_plan

    plan = load_plan(run)
    chosen = Engine(engine, parse_settings(settings or []))
    with progress("evaluate", quiet) as report:
        outcome = evaluate_run(run, plan, chosen, fmax, workers, report)
    counts = {
        "done": list(outcome.done),
        "kept": list(outcome.kept),
        "unconverged": list(outcome.unconverged),
        "failed": outcome.failed,
    }

    def text() -> str:
        lines = [columns([[word, str(len(jobs))] for word, jobs in counts.items()])]
        lines += [f"  {label}: {reason}" for label, reason in outcome.failed.items()]
        lines += [f"  {label}: forces still above {fmax:g} eV/A; run again to go on" for label in outcome.unconverged]
        return "\n".join(lines)

    deliver(lambda: {"schema": "strainkit/evaluation/1", "engine": chosen.description, **counts}, text, json)
    if outcome.failed or outcome.unconverged:
        raise typer.Exit(4)
