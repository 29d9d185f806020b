"""nodeline simulate: a star, an array and noise to OIFITS; a companion into data or out."""

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from .frame import Force, Json, Seed, emit, say

if TYPE_CHECKING:
    from ..companion.injection import Companion

Place = tuple[float, float, float]


def simulate(
    given: Annotated[
        Path,
        typer.Argument(
            help="Scenario file (TOML); for --inject and --remove an OIFITS file.",
            metavar="SCENARIO|FILE",
        ),
    ],
    output: Annotated[
        Path, typer.Option(help="Folder for nights, velocities and system file; or the new file.")
    ],
    inject: Annotated[
        Place | None, typer.Option(help="Separation (mas), position angle (deg), contrast.")
    ] = None,
    remove: Annotated[
        Place | None, typer.Option(help="The same, of a companion to take out of the data.")
    ] = None,
    diameter: Annotated[
        float | None, typer.Option(min=0, help="Of the primary, mas; else fitted to the data.")
    ] = None,
    companion_diameter: Annotated[float, typer.Option(min=0, help="Of the companion, mas.")] = 0.0,
    target: Annotated[str | None, typer.Option(help="Name, where the file holds several.")] = None,
    seed: Seed = 0,
    force: Force = False,
    json: Json = False,
) -> None:
    """Simulate the nights and velocities of a scenario, and a system file to analyse them with.

    With --inject or --remove: put a companion into observed data, or take one out, and keep the
    noise. Put in, its V2 and amplitudes are multiplied by the model's and its phases added.
    """
    if inject is not None and remove is not None:
        raise typer.BadParameter("choose one of --inject and --remove")
    if inject is not None or remove is not None:
        _exchange(given, output, inject, remove, diameter, companion_diameter, target, force, json)
        return
    for name, value in (("--diameter", diameter), ("--target", target)):
        if value is not None:
            raise typer.BadParameter(f"{name} is for --inject and --remove")
    import numpy as np

    from ..progress import Bar
    from ..simulation.outputs import simulate as carry_out
    from ..simulation.scenario import read_scenario

    plan = read_scenario(given)
    rng = np.random.default_rng(seed)
    system = carry_out(plan, output, rng=rng, force=force, progress=Bar())
    say(f"{plan.name}: {len(plan.nights.dates)} nights simulated; next: nodeline measure {system}",
        json=json)  # fmt: skip
    if json:
        emit({"name": plan.name, "system": str(system), "nights": len(plan.nights.dates)})


def _exchange(given, output, inject, remove, diameter, companion_diameter, target, force, json):
    """Put a companion into a file, or take one out."""
    import astropy.units as u

    from ..companion.injection import Companion
    from ..companion.injection_files import fitted_diameter, inject_file, remove_file
    from ..files import refuse_existing
    from ..oifits import load

    separation, angle, contrast = inject or remove
    try:
        companion = Companion.at(
            separation * u.mas, angle * u.deg, contrast,
            diameter=companion_diameter, primary_diameter=diameter or 0.0,
        )  # fmt: skip
    except ValueError as error:
        raise typer.BadParameter(str(error)) from error
    refuse_existing(output, force=force)
    file = load(given)
    if diameter is None:
        companion = fitted_diameter(file, companion, target=target, present=inject is None)
    change = remove_file if inject is None else inject_file
    change(file, companion, target=target).write(output, force=force)
    say(_told(companion, separation, angle, put_in=inject is not None) + f": {output}", json=json)
    if json:
        emit(
            {
                "file": str(output),
                "injected": inject is not None,
                "separation_mas": separation,
                "position_angle_deg": angle,
                "contrast": contrast,
                "companion_diameter_mas": companion.diameter,
                "primary_diameter_mas": companion.primary_diameter,
            }
        )


def _told(companion: "Companion", separation: float, angle: float, *, put_in: bool) -> str:
    done = "put in" if put_in else "taken out"
    return (
        f"companion at {separation:g} mas, PA {angle:g} deg, contrast {companion.contrast:g} "
        f"{done} (primary of {companion.primary_diameter:.3f} mas)"
    )
