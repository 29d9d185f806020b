"""nodeline orbit: elements and masses of a system."""

import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from ..errors import InputError
from .frame import Force, Json, Seed, emit, say

if TYPE_CHECKING:
    from ..fitting.comparison import Hypothesis
    from ..fitting.model import Model
    from ..fitting.solution import Solution
    from ..positions import Positions
    from ..system import System
    from ..velocities import Velocities


def orbit(
    system: Annotated[Path, typer.Argument(help="System file (TOML).", metavar="SYSTEM")],
    compare: Annotated[
        str | None,
        typer.Option(help="Hypotheses to weigh: circular, drift, outliers, velocity-jitter ..."),
    ] = None,
    pictures: Annotated[
        bool, typer.Option("--pictures", help="Also draw the joint distribution and the scan.")
    ] = False,
    cores: Annotated[
        int, typer.Option(min=1, help="Cores to use; the result is the same for any number.")
    ] = 1,
    seed: Seed = 0,
    force: Force = False,
    json: Json = False,
) -> None:
    """Fit the orbit of a system to its positions, velocities and parallax.

    The same command continues a fit that was interrupted.
    """
    import numpy as np

    from ..files import refuse_existing
    from ..fitting.comparison import CHANGES
    from ..fitting.comparison import compare as weigh
    from ..fitting.engine import fit
    from ..fitting.pieces import Kept
    from ..fitting.solution import outputs
    from ..progress import Bar
    from ..provenance import record
    from ..system import read_system

    names = [name.strip() for name in compare.split(",")] if compare else []
    for name in names:
        if name not in CHANGES:
            raise typer.BadParameter(f"no hypothesis {name!r}; there are {', '.join(CHANGES)}")
    given = read_system(system)
    drawn = [given.results / name for name in ("joint.png", "periods.png")] if pictures else []
    refuse_existing(*outputs(given.results), *drawn, force=force)
    positions, velocities = read_data(given)
    model, priors = read_settings(given, positions, velocities)
    kept = Kept(given.results / "unfinished", lambda text: print(text, file=sys.stderr))

    def solve(model: "Model") -> "Solution":
        return fit(
            positions,
            velocities=velocities,
            parallax=given.parallax,
            model=model,
            priors=priors,
            live_points=given.live_points,
            name=given.name,
            cores=cores,
            rng=np.random.default_rng(seed),
            progress=Bar(),
            keep=kept,
        )

    try:
        solution = solve(model)
        hypotheses = weigh(names, model, solve, solution) if names else []
    except InputError as error:  # of a fit, which knows no files
        raise InputError(f"{given.path}: {error}") from error
    except KeyboardInterrupt:
        print("what is finished is kept; the same command continues from there", file=sys.stderr)
        raise
    solution.write(given.results, force=force)
    kept.clear()
    options = f" --compare {','.join(names)}" if names else ""
    tables = [given.results / "positions.ecsv"] if given.nights else []
    record(
        given.results,
        "orbit",
        command=f"nodeline orbit {given.path.name} --seed {seed}{options}",
        seed=seed,
        inputs=(given.path, *given.positions, *tables, *given.velocities),
    )
    if pictures:
        from ..plots.joint import draw_joint
        from ..plots.periods import draw_periods
        from ..plots.style import save

        for draw, path in zip((draw_joint, draw_periods), drawn, strict=True):
            save(draw(solution), path, force=force)
    say(table(solution), json=json)
    if hypotheses:
        say(comparison_table(hypotheses), json=json)
    say(f"Written to {given.results}", json=json)
    if json:
        weighed = {"comparison": [vars(one) for one in hypotheses]} if hypotheses else {}
        emit(solution.to_json() | weighed)


def read_data(system: "System") -> tuple["Positions | None", "Velocities | None"]:
    """The positions and velocities that a system file names, and those measured of its nights.

    Raises
    ------
    InputError
        If there are none, or the nights were not measured yet.
    """
    from ..positions import Positions, read_positions
    from ..velocities import Velocities, read_velocities

    paths = list(system.positions)
    if system.nights:
        measured = system.results / "positions.ecsv"
        if not measured.is_file():
            raise InputError(
                f"{system.path}: its nights are not measured yet; "
                f"run `nodeline measure {system.path.name}` first"
            )
        paths.append(measured)
    if not paths and not system.velocities:
        raise InputError(f"{system.path}: names no nights, positions or velocities to fit")
    positions = [read_positions(path) for path in paths]
    velocities = [read_velocities(path) for path in system.velocities]
    return (
        Positions.concatenate(positions) if positions else None,
        Velocities.concatenate(velocities) if velocities else None,
    )


def read_settings(system: "System", positions, velocities):
    """The model and the priors that a system file asks for."""
    from ..fitting.model import Model
    from ..fitting.priors import Priors

    try:
        return Model(**system.model), Priors.for_data(positions, velocities, **system.priors)
    except ValueError as error:
        raise InputError(f"{system.path}: {error}") from error


def table(solution: "Solution") -> str:
    """Median and 68.3 per cent interval of every quantity, for a terminal."""
    account = solution.account
    lines = [f"{solution.name}: median and 68.3 per cent interval"]
    unknown = set(account["undetermined"])
    for name, (median, plus, minus) in solution.summary.items():
        digits = _digits(plus, minus)
        mark = "   only bounded" if name in unknown else ""
        lines.append(
            f"  {name:<28} {median:>16.{digits}f}  +{plus:.{digits}f}  -{minus:.{digits}f}{mark}"
        )
    seconds = f"; {account['seconds']:.1f} s" if "seconds" in account else ""
    lines.append(
        f"chi2 {account['chi2']:.1f} for {account['dof']} degrees of freedom; "
        f"ln evidence {account['log_evidence']:.2f} +- {account['log_evidence_err']:.2f}; "
        f"{account['effective_samples']:.0f} effective samples{seconds}"
    )
    sets = account["data"]
    if len(sets) > 1 or any("instruments" in one for one in sets.values()):
        lines += _data_sets(sets)
    lines += _solutions(account["solutions"])
    lines += _nights(account["nights"])
    return "\n".join(lines + list(account["notes"]))


def comparison_table(hypotheses: "list[Hypothesis]") -> str:
    """Evidence and odds of hypotheses, columns as wide as their widest entry."""
    rows = [("hypothesis", "ln evidence", "odds", "chi2", "dof")]
    for one in hypotheses:
        evidence = f"{one.log_evidence:.2f} +- {one.log_evidence_err:.2f}"
        rows.append((one.name, evidence, _odds(one), f"{one.chi2:.1f}", str(one.dof)))
    widths = [max(map(len, column)) for column in zip(*rows, strict=True)]
    lines = []
    for name, *numbers in rows:
        cells = [f"{cell:>{width}}" for cell, width in zip(numbers, widths[1:], strict=True)]
        lines.append("  ".join([f"{name:<{widths[0]}}", *cells]))
    return "\n".join(lines)


def _odds(hypothesis: "Hypothesis") -> str:
    from math import log

    if hypothesis.odds is None:
        return f"10^{hypothesis.log_odds / log(10):.0f}"
    return f"{hypothesis.odds:.4g}"


def _digits(plus: float, minus: float) -> int:
    """Decimals that show two digits of the smaller error."""
    from math import floor, log10

    smaller = min(plus, minus)
    return 3 if smaller <= 0 else min(max(1 - floor(log10(smaller)), 0), 9)


def _data_sets(sets: dict[str, dict]) -> list[str]:
    """Chi-square of each data set, and of its instruments where there are several."""
    lines = []
    for name, one in sets.items():
        parts = one.get("instruments", {"": one})
        lines += [
            f"  {f'{name} {label}'.strip():<28} chi2 {part['chi2']:.1f} of {part['data']} numbers"
            for label, part in parts.items()
        ]
    return lines


def _solutions(solutions: list[dict]) -> list[str]:
    if len(solutions) == 1:
        return []
    lines = [f"{len(solutions)} solutions fit; the table shows the first:"]
    for solution in solutions:
        elements = solution["elements"]
        lines.append(
            f"  probability {solution['weight']:.3f}: period {elements['period_d']['median']:.6g} d"
            f", eccentricity {elements['eccentricity']['median']:.3f}"
        )
    return lines


def _nights(nights: list[dict]) -> list[str]:
    """The nights whose place in the orbit was in question."""
    lines = []
    for night in nights:
        suspicion = night.get("outlier_probability", 0.0)
        if suspicion > 0.5:
            lines.append(f"  night {night['night']}: an outlier with probability {suspicion:.3f}")
            continue
        if "alternatives" in night:
            best = max(night["alternatives"], key=lambda a: a["probability"])
            lines.append(
                f"  night {night['night']}: {best['separation_mas']:.3f} mas at "
                f"{best['position_angle_deg']:.2f} deg with probability {best['probability']:.3f}"
            )
    return lines
