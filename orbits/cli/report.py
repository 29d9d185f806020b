"""nodeline report: the account of a system on one page."""

from pathlib import Path
from typing import Annotated

import typer

from .frame import Force, Json, Seed, emit, say


def report(
    system: Annotated[Path, typer.Argument(help="System file (TOML).", metavar="SYSTEM")],
    output: Annotated[
        Path | None, typer.Option(help="File to write; by default report.html with the results.")
    ] = None,
    seed: Seed = 0,
    force: Force = False,
    json: Json = False,
) -> None:
    """Write one HTML page on a fitted system: data, maps, orbit, masses, how to repeat it."""
    from ..progress import Bar
    from ..report import write_report
    from ..system import read_system

    given = read_system(system)
    path = output or given.results / "report.html"
    content = write_report(given, path, seed=seed, force=force, progress=Bar())
    say(f"written: {path}", json=json)
    if json:
        emit(
            {
                "report": str(path),
                "headline": content.headline,
                "statements": content.statements,
                "positions": len(content.places),
                "velocities": len(content.speeds),
                "maps": len(content.maps),
            }
        )
