"""nodeline catalogue: list, show, add, import and export orbits."""

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from ..errors import InputError
from .frame import CatalogueName, Force, Json, emit, say

if TYPE_CHECKING:
    from ..catalogue import Catalogue, Entry

app = typer.Typer(name="catalogue", help="Keep, search and exchange orbits.", no_args_is_help=True)

Target = Annotated[Path, typer.Option("--catalogue", help="Catalogue file; made if missing.")]
Match = Annotated[str | None, typer.Option(help="Part of a name or alias.")]
Near = Annotated[
    tuple[float, float, float] | None, typer.Option(help="RA, Dec and radius of a circle, deg.")
]
Period = Annotated[tuple[float, float] | None, typer.Option(help="Shortest and longest, days.")]
Separation = Annotated[
    tuple[float, float] | None, typer.Option(help="Smallest and greatest, mas, at the date --at.")
]
At = Annotated[str | None, typer.Option("--at", help="Date for --separation.")]
Preferred = Annotated[bool, typer.Option("--preferred", help="One solution of each system.")]
Favourite = Annotated[bool, typer.Option("--preferred", help="Prefer it to the others.")]


@app.command(name="list")
def list_entries(
    catalogue: CatalogueName = None,
    match: Match = None,
    near: Near = None,
    period: Period = None,
    separation: Separation = None,
    at: At = None,
    preferred: Preferred = False,
    json: Json = False,
) -> None:
    """List entries; with several conditions those that fulfil all. An asterisk: preferred."""
    chosen = [
        part.select(**_conditions(match, near, period, separation, at, preferred))
        for part in _read(catalogue)
    ]
    if json:
        emit({"entries": [entry.to_json() for part in chosen for entry in part]})
        return
    print(f"{'entry':<44}{'period/d':>13}{'e':>8}{'a/mas':>10}{'i/deg':>8}  source")
    lines = [line for part in chosen for line in _lines(part)]
    print("\n".join([*lines, f"{len(lines)} orbits"]))


@app.command()
def show(
    name: Annotated[str, typer.Argument(help="SYSTEM, an alias, or SYSTEM/SOLUTION.")],
    catalogue: CatalogueName = None,
    json: Json = False,
) -> None:
    """Show all that is known of a system, its solutions side by side."""
    from ..catalogue import find_solutions

    entries = find_solutions(name, catalogue)
    if json:
        emit({"entries": [entry.to_json() for entry in entries]})
        return
    print("\n\n".join("\n".join(_account(entry)) for entry in entries))


@app.command()
def add(
    system: Annotated[Path, typer.Argument(help="A system file whose orbit has been fitted.")],
    catalogue: Target,
    solution: Annotated[str, typer.Option(help="Name of the solution, unique in its system.")],
    preferred: Favourite = False,
    source: Annotated[str, typer.Option(help="Who made it, or where it is published.")] = "",
    remark: Annotated[str, typer.Option(help="Anything else.")] = "",
    alias: Annotated[list[str] | None, typer.Option(help="Other name; repeatable.")] = None,
    place: Annotated[
        tuple[float, float] | None, typer.Option(help="RA and Dec of the star, deg.")
    ] = None,
    json: Json = False,
) -> None:
    """Add the result of nodeline orbit; the samples and positions stay where they are."""
    from ..catalogue import add_entries, entry_of_system
    from ..system import read_system

    entry = entry_of_system(
        read_system(system),
        solution=solution,
        aliases=tuple(alias or ()),
        place=place,
        preferred=preferred,
        source=source,
        remark=remark,
    )
    whole = add_entries(catalogue, [entry.moved_to(catalogue.parent)])
    say(f"{entry.key} added to {catalogue}, which has {len(whole)} orbits now", json=json)
    if json:
        emit({"added": entry.to_json(), "catalogue": str(catalogue), "orbits": len(whole)})


@app.command(name="import")
def import_orbits(
    lines: Annotated[Path, typer.Argument(help="Fixed-width lines of orbits of visual binaries.")],
    catalogue: Target,
    json: Json = False,
) -> None:
    """Import orbits of visual binaries; each line that cannot be used is listed with the reason."""
    from ..catalogue import add_entries
    from ..catalogue.visual import import_visual_orbits

    entries, refusals = import_visual_orbits(lines)
    if entries:
        add_entries(catalogue, entries)
    for refusal in refusals:
        say(f"line {refusal.line}, {refusal.name}: {refusal.reason}", json=json)
    say(f"{len(entries)} orbits added to {catalogue}, {len(refusals)} lines left out", json=json)
    if json:
        emit(
            {
                "imported": len(entries),
                "refused": [
                    {"line": refusal.line, "name": refusal.name, "reason": refusal.reason}
                    for refusal in refusals
                ],
                "catalogue": str(catalogue),
            }
        )


@app.command()
def export(
    output: Annotated[Path, typer.Argument(help="File to write: .ecsv, .csv, .vot or .tex.")],
    catalogue: CatalogueName = None,
    match: Match = None,
    near: Near = None,
    period: Period = None,
    separation: Separation = None,
    at: At = None,
    preferred: Preferred = False,
    force: Force = False,
    json: Json = False,
) -> None:
    """Export entries as ECSV, CSV, VOTable or a LaTeX table; conditions as for list."""
    from ..catalogue import Catalogue
    from ..catalogue.export import export as write

    conditions = _conditions(match, near, period, separation, at, preferred)
    chosen = [entry for part in _read(catalogue) for entry in part.select(**conditions)]
    entries = [entry.moved_to(output.parent) for entry in chosen]
    if not entries:
        raise InputError("no entry fulfils the conditions; nothing was written")
    write(Catalogue.of(entries), output, force=force)
    say(f"{len(entries)} orbits written to {output}", json=json)
    if json:
        emit({"orbits": len(entries), "output": str(output)})


def _read(name: str | None) -> "list[Catalogue]":
    from ..catalogue import Catalogue, catalogue_file

    return [Catalogue.read(file) for file in catalogue_file(name)]


def _conditions(match, near, period, separation, at, preferred) -> dict:
    from ..dates import read_date

    if (separation is None) != (at is None):
        raise typer.BadParameter("--separation and --at go together")
    return {
        "match": match,
        "near": near,
        "period": period,
        "separation": separation,
        "mjd": None if at is None else read_date(at),
        "preferred": preferred,
    }


def _lines(part: "Catalogue") -> list[str]:
    names = ("period", "eccentricity", "semimajor_axis", "inclination")
    columns = zip(
        part.column("system"),
        part.column("solution"),
        part.column("preferred"),
        *(part.column(name) for name in names),
        part.column("source"),
        strict=True,
    )
    lines = []
    for system, solution, preferred, period, e, a, i, source in columns:
        name = f"{system}/{solution}" + "*" * (preferred.casefold() in ("true", "yes"))
        lines.append(f"{name:<43} {period:>13.7g}{e:>8.4f}{a:>10.5g}{i:>8.2f}  {source}")
    return lines


def _account(entry: "Entry") -> list[str]:
    """What is known of one solution, line by line."""
    from ..catalogue.columns import NUMBERS
    from ..dates import show_date
    from ..rounding import plain

    lines = [entry.key + (" (preferred)" if entry.preferred else "")]
    texts = {"aliases": ", ".join(entry.aliases)}
    texts |= {name: getattr(entry, name) for name in ("date", "source", "data", "remark")}
    texts |= {name: getattr(entry, name) for name in ("positions", "samples")}
    lines += [f"  {name:<16} {text}" for name, text in texts.items() if text]
    for name, unit in NUMBERS.items():
        value = entry.number(name)
        if value != value:
            continue
        error = entry.number(f"{name}_error") if name not in ("ra", "dec", "equinox") else 0.0
        words = f"{plain(value, error)} {unit or ''}".rstrip()
        if name == "periastron":
            words = f"MJD {plain(value, error)} ({show_date(value)})"
        if name == "node":
            words += "" if entry.ascending else " (it and the argument may both be off by 180)"
        lines.append(f"  {name.replace('_', ' '):<16} {words}")
    return lines
