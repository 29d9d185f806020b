"""nodeline simulate: a star, an array and noise to OIFITS; a companion into data or out."""

from pathlib import Path
from typing import Annotated

import typer

from ..errors import InputError
from .frame import Force, Json, Seed, emit, say
from .night import checked

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
    noise. V2 and amplitudes are multiplied by the model's, and its phases are added. What a night
    shows besides, its star and a companion that can be claimed, is found first.
    """
    if inject is not None and remove is not None:
        raise typer.BadParameter("choose one of --inject and --remove")
    if inject is not None or remove is not None:
        _exchange(
            given, output, inject, remove, diameter, companion_diameter, target, seed, force, json
        )
        return
    for name, value in (("--diameter", diameter), ("--target", target)):
        if value is not None:
            raise typer.BadParameter(f"{name} is for --inject and --remove")
    import numpy as np

    from ..progress import Bar
    from ..simulation.outputs import simulate as carry_out
    from ..simulation.scenario import read_scenario

    _refuse_data(given)
    plan = read_scenario(given)
    rng = np.random.default_rng(seed)
    system = carry_out(plan, output, rng=rng, force=force, progress=Bar())
    say(f"{plan.name}: {len(plan.nights.dates)} nights simulated; next: nodeline measure {system}",
        json=json)  # fmt: skip
    if json:
        emit({"name": plan.name, "system": str(system), "nights": len(plan.nights.dates)})


def _refuse_data(given: Path) -> None:
    """Say what to do with data, or with the system file of data, given for a scenario."""
    import tomllib

    if not given.is_file():
        return
    content = given.read_bytes()
    if content.startswith((b"SIMPLE  =", b"\x1f\x8b")):  # FITS, plain or gzipped
        raise InputError(
            f"{given}: FITS data, not a scenario; to put a companion into them or take one out, "
            "add --inject or --remove with its separation, position angle and contrast"
        )
    try:
        tree = tomllib.loads(content.decode())
    except (tomllib.TOMLDecodeError, UnicodeDecodeError):
        return  # the reader of scenarios says where
    sections = [part for part in tree.values() if isinstance(part, dict)]
    if "star" not in tree and any(part.keys() & {"files", "tables"} for part in sections):
        raise InputError(
            f"{given}: a system file, which names data, not a scenario, which describes a star, "
            f"its orbit and an array; to analyse its data: nodeline measure {given}"
        )


def _exchange(
    given, output, inject, remove, diameter, companion_diameter, target, seed, force, json
):
    """Put a companion into a file, or take one out."""
    import astropy.units as u
    import numpy as np

    from ..companion.injection import Companion
    from ..companion.injection_files import (
        beside,
        inject_file,
        primary_diameter,
        remove_file,
        shown,
    )
    from ..files import refuse_existing
    from ..oifits import load
    from ..progress import Bar

    separation, angle, contrast = inject or remove
    companion = checked(
        Companion.at, separation * u.mas, angle * u.deg, contrast, diameter=companion_diameter
    )
    refuse_existing(output, force=force)
    file = load(given)
    options = {
        "target": target,
        "diameter": None if diameter is None else diameter * u.mas,
        "rng": np.random.default_rng(seed),
        "progress": Bar(),
    }
    if inject is None:
        nights = beside(file, companion, **options)
        changed = remove_file(file, companion, nights, target=target)
    else:
        nights = shown(file, **options)
        changed = inject_file(file, companion, nights, target=target)
    changed.write(output, force=force)
    others = sum(view.scene.companions for _, view in nights)
    done = "put in" if remove is None else "taken out"
    say(
        f"companion at {separation:g} mas, PA {angle:g} deg, contrast {contrast:g} {done} "
        f"(primary of {primary_diameter(nights):.3f} mas"
        + (f", and its companion in {others} of {len(nights)} nights): " if others else "): ")
        + str(output),
        json=json,
    )
    if json:
        emit(
            {
                "file": str(output),
                "injected": inject is not None,
                "separation_mas": separation,
                "position_angle_deg": angle,
                "contrast": contrast,
                "companion_diameter_mas": companion.diameter,
                "primary_diameter_mas": primary_diameter(nights),
                "nights": len(nights),
                "nights_with_another_companion": others,
            }
        )
