"""nodeline demo: the whole way, from invented nights to masses and pictures."""

from pathlib import Path
from typing import Annotated

import typer

from . import draw, measure, orbit
from .frame import Force, Seed, say


def demo(
    output: Annotated[Path, typer.Option(help="Folder for everything.")] = Path("demo-output"),
    seed: Seed = 7,
    force: Force = False,
) -> None:
    """Simulate an invented double star, then measure, fit, weigh and draw it."""
    import numpy as np

    from ..demo import compare, scenario
    from ..fitting.solution import Solution
    from ..progress import Bar
    from ..simulation.outputs import simulate
    from ..system import read_system

    say("Harrow 7 is an invented double-lined binary; its array and its nights are invented too.")
    truth = scenario()
    rng = np.random.default_rng(seed)
    system = simulate(truth, output, rng=rng, force=force, progress=Bar())
    say(f"\n{len(truth.nights.dates)} nights and the velocities are simulated: {output}")
    say(f"\n$ nodeline measure {system}")
    measure.measure(system, seed=seed, force=force)
    say(f"\n$ nodeline orbit {system}")
    orbit.orbit(system, seed=seed, force=force)
    say(f"\n$ nodeline draw {system}")
    draw.draw([str(system)], force=force)
    results = read_system(system).results
    say("\nWhat was put in, and what came out:\n")
    say(_table(compare(truth, Solution.read(results).samples)))
    say(f"\nPictures, positions and posterior samples: {results}")


def _table(rows) -> str:
    lines = [f"{'':<20}{'truth':>14}{'measured':>14}{'error':>12}{'off by':>12}"]
    for row in rows:
        digits = max(0, 1 - int(f"{row.error:e}".split("e")[1]))  # two digits of the error
        lines.append(
            f"{row.name:<20}{row.truth:>14.{digits}f}{row.measured:>14.{digits}f}"
            f"{row.error:>12.{digits}f}{row.deviation:>+7.1f} sigma"
        )
    return "\n".join(lines)
