"""What all commands share: options, exit codes, and where their words go."""

import json as json_format
import sys
from collections.abc import Sequence
from typing import TYPE_CHECKING, Annotated, Any

import typer

from ..errors import InputError, NothingFound

if TYPE_CHECKING:
    from ..problems import Problem

DONE, OUR_FAULT, WRONG_USAGE, UNUSABLE_INPUT, NOTHING_FOUND = range(5)
INTERRUPTED = 130

Json = Annotated[bool, typer.Option("--json", help="Print one JSON object and nothing else.")]
Force = Annotated[bool, typer.Option("--force", help="Replace outputs that exist.")]
CatalogueName = Annotated[
    str | None,
    typer.Option("--catalogue", help="A file, or one that comes along: published, invented."),
]
Seed = Annotated[int, typer.Option("--seed", help="Seed of the random numbers.")]


def run(app: typer.Typer) -> int:
    """Run `app`; returns the exit code, having said on stderr why it is not 0."""
    try:
        code = app(standalone_mode=False)
    except InputError as error:
        return _stop(error, UNUSABLE_INPUT)
    except NothingFound as error:
        return _stop(error, NOTHING_FOUND)
    except (KeyboardInterrupt, typer.Abort):
        code = INTERRUPTED
    except Exception as error:
        # Typer's own errors of usage know how to show themselves, whichever click they come from.
        if hasattr(error, "show") and hasattr(error, "exit_code"):
            error.show()
            return error.exit_code
        import traceback

        traceback.print_exc()
        return _stop("this is a fault of nodeline; the lines above say where", OUR_FAULT)
    if code == INTERRUPTED:  # Typer may have turned Ctrl-C into this
        return _stop("stopped; no file was left half written", INTERRUPTED)
    return code if isinstance(code, int) else DONE


def say(text: str, *, json: bool = False) -> None:
    """Print words for people: to stdout, or to stderr when stdout belongs to JSON."""
    print(text, file=sys.stderr if json else sys.stdout)


def warn(problems: "Sequence[Problem]") -> None:
    """Say on stderr, a line a file, what is more than a note among the problems of files read."""
    from ..problems import Severity

    serious = [problem for problem in problems if problem.severity > Severity.NOTE]
    for file in dict.fromkeys(problem.file for problem in serious):
        mine = [problem for problem in serious if problem.file == file]
        worst = max(mine, key=lambda problem: problem.severity)
        more = f" (and {len(mine) - 1} more: nodeline inspect tells all)" if len(mine) > 1 else ""
        print(f"nodeline: {worst.severity}: {file}: {worst}{more}", file=sys.stderr)


def emit(result: dict[str, Any]) -> None:
    """Print the one JSON object of a command; numbers must be finite."""
    print(json_format.dumps(result, indent=2, allow_nan=False))


def _stop(reason: object, code: int) -> int:
    print(f"nodeline: {reason}", file=sys.stderr)
    return code
