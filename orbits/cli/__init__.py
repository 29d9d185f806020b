"""The command line: parse, call the library, print. One module per command."""

import sys
from typing import Annotated

import typer

from . import (
    catalogue,
    demo,
    draw,
    inspect,
    limits,
    measure,
    orbit,
    posterior,
    predict,
    report,
    search,
    simulate,
    spectrum,
)
from .frame import run

app = typer.Typer(
    name="nodeline",
    no_args_is_help=True,
    invoke_without_command=True,
    add_completion=False,
    pretty_exceptions_enable=False,
)


@app.callback()
def nodeline(
    version: Annotated[bool, typer.Option("--version", help="Print the version and stop.")] = False,
) -> None:
    """Calibrated OIFITS nights of close binary stars: companions, orbits, masses."""
    if version:
        from importlib.metadata import version as installed

        print(f"nodeline {installed('nodeline')}")
        raise typer.Exit


app.add_typer(catalogue.app)
app.command()(demo.demo)
app.command()(draw.draw)
app.command()(inspect.inspect)
app.command()(limits.limits)
app.command()(measure.measure)
app.command()(orbit.orbit)
app.command()(posterior.posterior)
app.command()(predict.predict)
app.command()(report.report)
app.command()(search.search)
app.command()(simulate.simulate)
app.command()(spectrum.spectrum)


def main() -> None:
    """Run the command line on the arguments of this process and exit."""
    sys.exit(run(app))
