"""The command line: parse, call the library, print. One module per command."""

import sys

import typer

from .frame import run

app = typer.Typer(
    name="nodeline",
    help="Calibrated OIFITS nights of close binary stars: companions, orbits, masses.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
)


def main() -> None:
    """Run the command line on the arguments of this process and exit."""
    sys.exit(run(app))
