"""nodeline simulate: a star, an array and noise to OIFITS and velocities."""

from pathlib import Path
from typing import Annotated

import typer

from .frame import Force, Json, Seed, emit, say


def simulate(
    scenario: Annotated[Path, typer.Argument(help="Scenario file (TOML).", metavar="SCENARIO")],
    output: Annotated[Path, typer.Option(help="Folder for nights, velocities and system file.")],
    seed: Seed = 0,
    force: Force = False,
    json: Json = False,
) -> None:
    """Simulate the nights and velocities of a scenario, and a system file to analyse them with."""
    import numpy as np

    from ..progress import Bar
    from ..simulation.outputs import simulate as carry_out
    from ..simulation.scenario import read_scenario

    plan = read_scenario(scenario)
    rng = np.random.default_rng(seed)
    system = carry_out(plan, output, rng=rng, force=force, progress=Bar())
    say(f"{plan.name}: {len(plan.nights.dates)} nights simulated; next: nodeline measure {system}",
        json=json)  # fmt: skip
    if json:
        emit({"name": plan.name, "system": str(system), "nights": len(plan.nights.dates)})
