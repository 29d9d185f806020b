"""nodeline measure: one position for each night of a system."""

from pathlib import Path
from typing import Annotated

import typer

from .frame import Force, Json, Seed, emit, say, warn


def measure(
    system: Annotated[Path, typer.Argument(help="System file (TOML).", metavar="SYSTEM")],
    seed: Seed = 0,
    force: Force = False,
    json: Json = False,
) -> None:
    """Search every night of a system and write one position a night, with its alternatives."""
    import numpy as np

    from ..files import refuse_existing
    from ..measuring import measure as measure_nights
    from ..measuring import positions
    from ..positions import write_positions
    from ..progress import Bar
    from ..provenance import record
    from ..system import read_system

    given = read_system(system)
    path = given.results / "positions.ecsv"
    refuse_existing(path, force=force)
    nights = measure_nights(given, rng=np.random.default_rng(seed), progress=Bar())
    warn(nights[0].observation.problems)
    say(_table(nights), json=json)
    found = positions(nights)
    write_positions(path, found, force=force)
    command = f"nodeline measure {given.path.name} --seed {seed}"
    record(given.results, "measure", command=command, seed=seed, inputs=(given.path, *given.nights))
    say(f"{len(set(found.night))} of {len(nights)} nights measured: {path}", json=json)
    if json:
        emit(
            {
                "name": given.name,
                "positions": str(path),
                "nights": [
                    {
                        "night": night.label,
                        "mjd": night.observation.mjd,
                        "detected": night.detected,
                        "reason": None if night.detected else _why_not(night),
                        "solutions": [one.to_json() for one in night.candidates],
                    }
                    for night in nights
                ],
            }
        )


def _table(nights) -> str:
    """One line a solution; the alternatives of a night follow its best solution."""
    lines = [
        "night (UTC)        separation / mas    pos. angle / deg        contrast  sigma"
        "  chi2/dof  weight"
    ]
    for night in nights:
        when = night.label.split()[0]
        if not night.detected:
            lines.append(f"{when}  no companion claimed: {_why_not(night)}")
            continue
        for one in night.candidates:
            lines.append(
                f"{when:<16}  {one.separation_mas:8.3f} ± {one.separation_error_mas:<7.3f}"
                f"  {one.position_angle_deg:8.3f} ± {one.position_angle_error_deg:<7.3f}"
                f"  {one.contrast:6.4f} ± {one.contrast_error:<6.4f}"
                f"  {one.significance_sigma:5.1f}  {one.chi2 / one.dof:8.2f}  {one.weight:6.3f}"
            )
            when = ""
    return "\n".join(lines)


def _why_not(night) -> str:
    if night.reason:
        return night.reason
    chance = night.candidates[0].false_alarm_probability
    return f"noise alone looks as good in {chance:.2g} of its searches"
