"""A scenario carried out on disk: nights, velocities, and the system file that binds them."""

from pathlib import Path

import numpy as np

from ..files import refuse_existing, whole_file
from ..progress import SILENT
from ..times import date_of_utc
from ..velocities import write_velocities
from .export import night_file
from .programme import nights, velocities
from .scenario import Scenario


def simulate(
    scenario: Scenario,
    folder: Path,
    *,
    rng: np.random.Generator,
    force: bool = False,
    progress=SILENT,
) -> Path:
    """Write the nights (OIFITS), the velocities and a system file; returns the path of the latter.

    Raises
    ------
    InputError
        If one of the outputs exists and `force` is false; nothing is written then.
    """
    stem = "-".join(scenario.name.lower().split())
    system, table = folder / f"{stem}.toml", folder / "velocities.ecsv"
    files = [
        folder / "nights" / f"{number:02d}-{date_of_utc(date)}.fits"
        for number, date in enumerate(scenario.nights.dates, start=1)
    ]
    taken = [table] if scenario.velocities else []
    refuse_existing(system, *taken, *files, force=force)
    star = scenario.star
    with progress.task("simulating nights", total=len(files)) as step:
        for path, night in zip(files, nights(scenario, rng), strict=True):
            file = night_file(night, scenario.array, scenario.spectrum, ra=star.ra, dec=star.dec)
            file.write(path, force=force)
            step()
    text = f'name = "{scenario.name}"\n\n[nights]\nfiles = ["nights/*.fits"]\n'
    if scenario.velocities:
        write_velocities(table, velocities(scenario, rng), force=force)
        text += f'\n[velocities]\ntables = ["{table.name}"]\n'
    with whole_file(system, force=force) as temporary:
        temporary.write_text(text, encoding="utf-8")
    return system
