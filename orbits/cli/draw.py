"""nodeline draw: pictures of an orbit, of several compared, or of a whole catalogue."""

import re
from collections.abc import Callable
from enum import Enum, StrEnum
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from ..errors import InputError
from ..plots.style import FORMATS
from .catalogue import Match, Near, Period
from .frame import CatalogueName, Force, Json, Seed, emit, say

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from ..bundle import Bundle
    from ..plots.sky import Mark


class Kind(StrEnum):
    """What a picture shows."""

    sky = "sky"
    plane = "plane"
    velocity = "velocity"
    motion = "motion"
    residuals = "residuals"


Form = Enum("Form", {form: form for form in FORMATS}, type=str)


def draw(
    names: Annotated[
        list[str] | None,
        typer.Argument(help="Entries of a catalogue, or system files; several are compared."),
    ] = None,
    catalogue: CatalogueName = None,
    kind: Annotated[list[Kind] | None, typer.Option(help="What to draw; repeatable.")] = None,
    positions: Annotated[
        Path | None, typer.Option(help="Table of positions to lay over the orbit.")
    ] = None,
    mark: Annotated[list[str] | None, typer.Option(help="Date to mark; repeatable.")] = None,
    start: Annotated[str | None, typer.Option("--from", help="First date of motion.")] = None,
    end: Annotated[str | None, typer.Option("--to", help="Last date of motion.")] = None,
    columns: Annotated[int, typer.Option(min=1, max=2, help="Width, in columns of a journal.")] = 1,
    form: Annotated[Form, typer.Option("--format")] = Form.png,
    output: Annotated[
        Path | None, typer.Option(help="Folder of the pictures, or file of a single one.")
    ] = None,
    all_entries: Annotated[bool, typer.Option("--all", help="A catalogue at a glance.")] = False,
    match: Match = None,
    near: Near = None,
    period: Period = None,
    force: Force = False,
    json: Json = False,
    seed: Seed = 1,
) -> None:
    """Draw orbits: on the sky, in their plane, velocities, motion in time, residuals.

    Without --kind it is the sky for entries of a catalogue, and for a fitted system all that its
    data give; its pictures go to the folder of its results.
    """
    import numpy as np

    from ..files import refuse_existing
    from ..plots.style import save
    from ..progress import Bar

    if bool(names) == all_entries:
        raise typer.BadParameter("give the names of entries or systems, or --all, not both")
    for_sheets = {"--match": match, "--near": near, "--period": period}
    for_names = {"--kind": kind, "--positions": positions, "--mark": mark}
    for_names |= {"--from": start, "--to": end}
    _refuse_idle(for_names if all_entries else for_sheets, all_entries=all_entries)
    rng = np.random.default_rng(seed)
    if all_entries:
        pictures = _sheets(catalogue, rng, match=match, near=near, period=period)
        folder = Path()
    else:
        bundles, folder = _bundles(names, catalogue, positions, rng)
        kinds = [Kind(k) for k in kind or []] or _possible(bundles, names)
        if Kind.motion not in kinds and (start or end):
            raise typer.BadParameter("--from and --to go with --kind motion")
        if Kind.sky not in kinds and mark:
            raise typer.BadParameter("--mark goes with --kind sky")
        pictures = _pictures(bundles, kinds, columns, _marks(mark or []), _stretch(start, end))
    paths = _paths(list(pictures), output or folder, form.value)
    refuse_existing(*paths.values(), force=force)
    with Bar().task("drawing", total=len(paths)) as step:
        for name, path in paths.items():
            save(pictures[name](), path, force=force)
            step()
    for path in paths.values():
        say(f"drawn: {path}", json=json)
    if json:
        emit({"pictures": [str(path) for path in paths.values()]})


def _refuse_idle(options: dict[str, object], *, all_entries: bool) -> None:
    """Refuse the options that would do nothing."""
    for name, value in options.items():
        if value:
            reason = "does not go with --all" if all_entries else "goes with --all only"
            raise typer.BadParameter(f"{name} {reason}")


def _bundles(names, catalogue, positions, rng) -> "tuple[list[Bundle], Path]":
    """What to draw, and the folder that its pictures go to unless another is given."""
    from dataclasses import replace

    bundles, folder = [], Path()
    for name in names:
        if name.endswith(".toml"):
            from ..bundle import Bundle
            from ..fitting.solution import Solution
            from ..system import read_system

            results = read_system(Path(name)).results
            bundles.append(Bundle.of_solution(Solution.read(results)))
            folder = results if len(names) == 1 else folder
        else:
            from ..catalogue import find_entry

            entry = find_entry(name, catalogue)
            bundle = entry.bundle(rng)
            bundles.append(replace(bundle, name=entry.key) if len(names) > 1 else bundle)
    if positions is not None:
        from ..positions import read_positions

        bundles[0] = replace(bundles[0], positions=read_positions(positions))
    return bundles, folder


def _possible(bundles: "list[Bundle]", names: list[str]) -> list[Kind]:
    """The sky; of a single fitted system also what else its data give."""
    import numpy as np

    if len(bundles) > 1 or not names[0].endswith(".toml"):
        return [Kind.sky]
    first = bundles[0]
    kinds = [Kind.sky, Kind.motion] if first.on_the_sky else []
    if first.positions is not None:
        kinds.append(Kind.residuals)
    if np.isfinite([first.best.k1[0], first.best.k2[0]]).any():
        kinds.append(Kind.velocity)
    return kinds


def _pictures(bundles, kinds, columns, marks, stretch) -> "dict[str, Callable[[], Figure]]":
    """How to draw each picture, by the stem of its file."""
    from ..plots.motion import draw_motion, draw_residuals
    from ..plots.plane import draw_plane
    from ..plots.sky import draw_sky
    from ..plots.velocity import draw_velocities

    first = bundles[0]
    if len(bundles) > 1 and kinds != [Kind.sky]:
        raise InputError("several orbits can be compared on the sky only: --kind sky")
    if set(kinds) - {Kind.velocity} and not all(bundle.on_the_sky for bundle in bundles):
        raise InputError(f"{first.name}: without positions only --kind velocity can be drawn")
    if Kind.velocity in kinds and not (first.best.k1[0] > 0 or first.best.k2[0] > 0):
        raise InputError(f"{first.name}: no velocity amplitude is known, so no curve can be drawn")
    if Kind.residuals in kinds and first.positions is None:
        raise InputError(f"{first.name}: no positions are known; give a table with --positions")
    ways = {
        Kind.sky: lambda: draw_sky(bundles, columns=columns, marks=marks),
        Kind.plane: lambda: draw_plane(first, columns=columns),
        Kind.velocity: lambda: draw_velocities(first, columns=columns),
        Kind.motion: lambda: draw_motion(first, start=stretch[0], end=stretch[1], columns=columns),
        Kind.residuals: lambda: draw_residuals(first, columns=columns),
    }
    stem = _slug(" and ".join(bundle.name for bundle in bundles))
    return {f"{stem}-{kind.value}": ways[kind] for kind in kinds}


def _sheets(catalogue, rng, **conditions) -> "dict[str, Callable[[], Figure]]":
    """How to draw each sheet of all the entries that fulfil the conditions."""
    from dataclasses import replace

    from ..catalogue import Catalogue, catalogue_file
    from ..plots.sheet import PAGE, draw_sheet

    entries = [
        entry
        for file in catalogue_file(catalogue)
        for entry in Catalogue.read(file).select(**conditions)
    ]
    if not entries:
        raise InputError("no entry fulfils the conditions; nothing was drawn")

    def sheet(first: int) -> "Figure":
        page = entries[first : first + PAGE]
        return draw_sheet([replace(entry.bundle(rng), name=entry.key) for entry in page])

    digits = len(str(-(-len(entries) // PAGE)))
    return {
        f"sheet-{first // PAGE + 1:0{digits}d}": partial(sheet, first)
        for first in range(0, len(entries), PAGE)
    }


def _marks(dates: list[str]) -> "list[Mark]":
    from ..dates import read_date
    from ..plots.sky import Mark

    return [Mark(mjd=read_date(date), label=date) for date in dates]


def _stretch(start: str | None, end: str | None) -> tuple[float | None, float | None]:
    from ..dates import read_date

    first, last = (None if date is None else read_date(date) for date in (start, end))
    if first is not None and last is not None and not last > first:
        raise InputError(f"--to {end} must come after --from {start}")
    return first, last


def _paths(stems: list[str], place: Path, form: str) -> dict[str, Path]:
    """The file of each picture: in a folder, or the one that was named."""
    if place.suffix[1:].lower() in FORMATS and place.suffix:
        if len(stems) > 1:
            raise InputError(f"{place} is one file, but there are {len(stems)} pictures to draw")
        return {stems[0]: place}
    return {stem: place / f"{stem}.{form}" for stem in stems}


def _slug(name: str) -> str:
    """`name` as part of a file name."""
    return re.sub(r"[^a-z0-9.+]+", "-", name.casefold()).strip("-")
