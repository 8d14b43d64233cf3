"""strainkit derive RUN."""

from __future__ import annotations

from strainkit.cli.fit import Drop, KnownNoise, Order, Reading
from strainkit.cli.options import Frame, Json, Quiet, Run, deliver


def derive(
    run: Run,
    order: Order = "linear",
    noise: KnownNoise = None,
    drop: Drop = None,
    reference_stress: Reading = "real",
    frame: Frame = "ieee",
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """Moduli with standard errors from the fitted stiffness."""
    from strainkit.cli.load import fitted
    from strainkit.derive.averages import averages
    from strainkit.present.terminal import BLIND_SPOT, averages_text
    from strainkit.present.text import heading, paragraph

    result = fitted(run, order, noise, drop, frame, reference_stress)
    found = averages(result.effective)
    deliver(
        lambda: {"schema": "strainkit/derived/1", "name": result.plan.crystal.name, **found.to_dict()},
        lambda: f"{heading(f'{result.plan.crystal.name}: moduli')}\n{averages_text(found)}\n{paragraph(BLIND_SPOT, '  ')}",
        json,
    )
