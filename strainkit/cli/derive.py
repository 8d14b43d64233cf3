"""strainkit derive RUN, a campaign, or derive --tensor FILE."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Literal

import typer

from strainkit.cli.fit import LastDrop, LastNoise, LastOrder, LastReading
from strainkit.cli.options import Json, Quiet, ReadAs, Symprec, Workers, deliver

if TYPE_CHECKING:
    from strainkit.derive.elastic import ElasticCrystal

Run = Annotated[
    Path | None,
    typer.Argument(
        help="Run folder made by strainkit prepare, or none with --tensor; of a campaign the screening table is made."
    ),
]
Planes = Annotated[list[str] | None, typer.Option("--plane", help="Plane h,k,l to look at, as 0,1,-2; repeatable.")]
Directions = Annotated[list[str] | None, typer.Option("--direction", help="Direction u,v,w to look at; repeatable.")]
Tensor = Annotated[Path | None, typer.Option(help="Derive from this typed tensor: a 6x6 matrix or lines such as C11 165.8.")]
TensorCell = Annotated[Path | None, typer.Option("--cell", help="Structure of the crystal whose tensor is typed.")]
Density = Annotated[float | None, typer.Option(help="Density for a typed tensor, kg/m^3; the cell's if not given.")]
Frame = Annotated[str, typer.Option(help="Printed axes: given, ieee, crystal (x||a, z||c*), or nine numbers.")]
Indices = Annotated[
    Literal["conventional", "given"], typer.Option(help="Cell that planes and directions refer to.", show_default=True)
]
ForceConstants = Annotated[
    Path | None,
    typer.Option(help="phonopy.yaml with force constants of the same cell: compare its sound speeds with the stiffness."),
]


def derive(
    run: Run = None,
    plane: Planes = None,
    direction: Directions = None,
    tensor: Tensor = None,
    cell: TensorCell = None,
    density: Density = None,
    read_as: ReadAs = None,
    symprec: Symprec = 1e-3,
    indices: Indices = "conventional",
    order: LastOrder = None,
    noise: LastNoise = None,
    drop: LastDrop = None,
    reference_stress: LastReading = None,
    force_constants: ForceConstants = None,
    frame: Frame = "ieee",
    workers: Workers = None,
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """What the tensor means: moduli, planes, directions, waves, each with its error."""
    from strainkit.cli.load import fitted, given_options, one_run_drops
    from strainkit.crystal.lattice import parse_indices
    from strainkit.derive.derived import derive_properties
    from strainkit.derive.elastic import from_fit
    from strainkit.errors import UsageError
    from strainkit.present.derived import derived_text
    from strainkit.present.terminal import BLIND_SPOT
    from strainkit.run.campaign import is_campaign

    options = given_options(order, noise, drop, reference_stress)
    if run is not None and is_campaign(run):
        from strainkit.cli.campaign import derive_campaign

        if plane or direction or tensor is not None or force_constants is not None or frame != "ieee":
            raise UsageError(
                "the screening table has no planes, directions, force constants or other frames",
                "derive",
                "Derive one run folder.",
            )
        one_run_drops(options)
        derive_campaign(run, options, workers, json, quiet)
        return
    if (run is None) == (tensor is None):
        raise UsageError("one tensor is needed", "derive", "Give either a run folder or a file with --tensor.")
    if tensor is not None:
        if options:
            raise UsageError("--order, --noise, --drop and --reference-stress are for run folders", "--tensor")
        elastic, blind = _typed(tensor, cell, density, read_as, symprec, frame, indices == "given"), ""
    else:
        assert run is not None
        if cell is not None or density is not None:
            raise UsageError("--cell and --density belong to --tensor: a run folder has its own", "derive")
        elastic = from_fit(fitted(run, options, force_constants), frame, indices == "given")
        blind = BLIND_SPOT
    planes = [parse_indices(text, "--plane", True, elastic.axes) for text in plane or []]
    directions = [parse_indices(text, "--direction", False, elastic.axes) for text in direction or []]
    study = None
    if force_constants is not None:
        from strainkit.dynamics.phonons import load_phonopy

        study = load_phonopy(force_constants)
    derived = derive_properties(elastic, planes, directions, study)
    deliver(derived.to_dict, lambda: derived_text(derived, blind), json)
    if not derived.stability.stable:
        raise typer.Exit(5)


def _typed(
    tensor: Path, cell: Path | None, density: float | None, read_as: str | None, symprec: float, frame: str, given: bool
) -> ElasticCrystal:
    from strainkit.crystal.read import read_crystal
    from strainkit.crystal.symmetry import find_symmetry
    from strainkit.derive.elastic import from_tensor_file
    from strainkit.errors import UsageError
    from strainkit.tensors.textfile import read_tensor

    if density is not None and not density > 0:
        raise UsageError(f"a density of {density:g} kg/m^3 is not possible", "--density")
    file = read_tensor(tensor)
    if cell is None:
        return from_tensor_file(file, frame="given" if frame == "ieee" else frame, density=density)
    crystal = read_crystal(cell, read_as)
    return from_tensor_file(file, crystal, find_symmetry(crystal, symprec), frame, density, given)
