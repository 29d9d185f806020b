"""nodeline predict: where the companion will be, and when what happens."""

from collections.abc import Callable
from dataclasses import fields, replace
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from ..errors import InputError
from .frame import CatalogueName, Force, Json, Seed, emit, say

if TYPE_CHECKING:
    import numpy as np

    from ..bundle import Bundle
    from ..ephemeris import Ephemeris, Event

_UNITS = {"mjd": "d", "separation": "mas", "position_angle": "deg", "east": "mas", "north": "mas"}

All = Annotated[bool, typer.Option("--all", help="Every entry of the catalogue.")]


def predict(
    name: Annotated[
        str | None,
        typer.Argument(help="Entry of a catalogue (SYSTEM or SYSTEM/SOLUTION), or a system file."),
    ] = None,
    at: Annotated[list[str] | None, typer.Option("--at", help="Date; may be repeated.")] = None,
    start: Annotated[str | None, typer.Option("--from", help="First date of a range.")] = None,
    end: Annotated[str | None, typer.Option("--to", help="Last date of the range.")] = None,
    every: Annotated[str, typer.Option(help="Step of the range, such as '6 h' or '1 yr'.")] = "1 d",
    catalogue: CatalogueName = None,
    all_entries: All = False,
    equinox: Annotated[
        str, typer.Option(help="Of the position angles: a year, or date for that of each date.")
    ] = "2000",
    output: Annotated[
        Path | None, typer.Option(help="Also write the table, to a file .ecsv or .csv.")
    ] = None,
    force: Force = False,
    json: Json = False,
    seed: Seed = 1,
) -> None:
    """Separation, position angle, offsets and velocities at dates, with their errors.

    Dates are like 2026-12-01, 2026-12-01T22:30, 2026.92, B1980.0, MJD 61375.5 or JD 2461376.0. For
    a single orbit the events of the period that follows the first date are listed as well.
    """
    import numpy as np

    from ..ephemeris import events
    from ..ephemeris import predict as predict_bundle
    from ..files import refuse_existing

    if (name is None) != all_entries:
        raise typer.BadParameter("give the name of an entry or system, or --all, not both")
    if output is not None:
        if output.suffix not in (".ecsv", ".csv"):
            raise InputError(f"{output}: a table is written as .ecsv or .csv")
        refuse_existing(output, force=force)
    mjd = _dates(at or [], start, end, every)
    rng = np.random.default_rng(seed)
    if all_entries:
        tables, accounts = _of_all(catalogue, mjd, equinox, rng)
        happenings: list[Event] = []
    else:
        bundle, turn = _orbit(name, catalogue, equinox, rng)
        table = predict_bundle(bundle, mjd, turn=turn(mjd))
        tables = {bundle.name: table}
        accounts = {bundle.name: _account(bundle)}
        happenings = [
            replace(event, position_angle=float(event.position_angle + turn(event.mjd)) % 360.0)
            for event in events(bundle, mjd[0], mjd[0] + bundle.best.period[0])
        ]
        if not json:
            _say_one(bundle, table, happenings, equinox)
    if all_entries and not json:
        _say_all(tables, accounts)
    if output is not None:
        _write(output, tables, accounts, equinox, force=force)
        say(f"\nwritten to {output}", json=json)
    if json:
        emit(_json(tables, accounts, happenings, equinox))


def _dates(at: list[str], start: str | None, end: str | None, every: str) -> "np.ndarray":
    import numpy as np

    from ..dates import dates_between, read_date

    if (start is None) != (end is None) or bool(at) == (start is not None):
        raise typer.BadParameter("give --at DATE, or --from DATE and --to DATE")
    if at:
        return np.array([read_date(text) for text in at])
    return dates_between(read_date(start), read_date(end), every)


def _equinoxes(equinox: str, mjd: "np.ndarray") -> "np.ndarray | float":
    if equinox == "date":
        return 2000.0 + (mjd - 51544.5) / 365.25
    try:
        return float(equinox)
    except ValueError:
        raise InputError(f"--equinox {equinox!r} is neither a year nor the word date") from None


def _orbit(name, catalogue, equinox, rng) -> "tuple[Bundle, Callable]":
    """An orbit, and a function of MJD: what to add to its angles for the equinox asked for."""
    if name.endswith(".toml"):
        if equinox != "2000":
            raise InputError(f"{name}: a system file has no place on the sky; use --equinox 2000")
        from ..bundle import Bundle
        from ..fitting.solution import Solution
        from ..system import read_system

        results = read_system(Path(name)).results
        return Bundle.of_solution(Solution.read(results)), lambda mjd: 0.0
    from ..catalogue import find_entry

    entry = find_entry(name, catalogue)
    return entry.bundle(rng), lambda mjd: entry.turn(_equinoxes(equinox, mjd))


def _account(bundle: "Bundle") -> dict[str, object]:
    """What must be known of an orbit to trust its ephemeris."""
    return {
        "errors": bundle.spread or "unknown",
        "errors_too_large": bundle.errors_too_large,
        "node": "ascending" if bundle.ascending else "either one",
    }


def _of_all(catalogue, mjd, equinox, rng) -> "tuple[dict[str, Ephemeris], dict[str, dict]]":
    """The ephemeris of every entry, and the account of each."""
    from ..catalogue import Catalogue, catalogue_file
    from ..ephemeris import predict as predict_bundle
    from ..progress import Bar

    years = _equinoxes(equinox, mjd)
    entries = [entry for file in catalogue_file(catalogue) for entry in Catalogue.read(file)]
    tables, accounts = {}, {}
    with Bar().task("predicting", total=len(entries)) as step:
        for entry in entries:
            bundle = entry.bundle(rng)
            tables[entry.key] = predict_bundle(bundle, mjd, turn=entry.turn(years))
            accounts[entry.key] = _account(bundle)
            step()
    return tables, accounts


def _say_one(bundle: "Bundle", table: "Ephemeris", happenings: "list[Event]", equinox: str) -> None:
    import numpy as np

    from ..dates import show_date

    north = "of date" if equinox == "date" else f"of {equinox}"
    print(f"{bundle.name}: companion seen from the primary, position angles {north}")
    if bundle.spread == "posterior":
        errors = "errors: half of the 68.3 per cent interval of the posterior"
    elif bundle.spread:
        errors = "errors: what those of the elements make, as if they were independent"
    else:
        errors = "nothing is known of the errors"
    print(f"{errors}{'' if bundle.ascending else '; the node may be either one'}")
    loose = bundle.errors_too_large
    if loose:
        print(
            "(in brackets: too large. So near a circle the errors of time and argument of "
            "periastron all but cancel; by how much, the entry does not say)"
        )
    print()
    names = ("separation", "position_angle", "east", "north")
    titles = ("separation/mas", "angle/deg", "East/mas", "North/mas")
    velocities = ("primary_velocity", "companion_velocity")
    if any(np.isfinite(getattr(table, name)).any() for name in velocities):
        names, titles = names + velocities, (*titles, "V1/(km/s)", "V2/(km/s)")
    print(f"{'date (UTC)':<17}" + "".join(f"{title:>20}" for title in titles))
    for row in range(len(table)):
        cells = (_cell(table, name, row, loose=loose) for name in names)
        when = show_date(table.mjd[row], minutes=True)
        print(f"{when:<17}" + "".join(f"{cell:>20}" for cell in cells))
    print("\nin the period that follows")
    for event in happenings:
        when = show_date(event.mjd, minutes=bundle.best.period[0] < 1000)
        error = "" if np.isnan(event.error) else f"± {float(f'{event.error:.2g}'):g} d"
        # The time of periastron itself is as uncertain as it is said to be.
        error = f"({error})" if error and loose and event.kind != "periastron" else error
        print(
            f"{event.kind:<20} {when:<17} {error:<12} at {event.separation:.5g} mas, "
            f"{event.position_angle:.2f} deg"
        )


def _cell(table: "Ephemeris", name: str, row: int, *, loose: bool) -> str:
    """A value with its error, in brackets if `loose`, or to six digits where it is not known."""
    from ..rounding import rounded

    value, error = getattr(table, name)[row], getattr(table, f"{name}_error")[row]
    if value != value:
        return "unknown"
    if not error > 0:
        return f"{value:.6g}"
    number, uncertainty = rounded(value, error)
    return f"{number} (± {uncertainty})" if loose else f"{number} ± {uncertainty}"


def _say_all(tables: "dict[str, Ephemeris]", accounts: "dict[str, dict]") -> None:
    from functools import cache

    from ..dates import show_date

    shown = cache(show_date)  # the dates are the same for all entries
    print(f"{'entry':<40} {'date (UTC)':<17}{'separation/mas':>20}{'angle/deg':>18}")
    lines = []
    for key, table in tables.items():
        loose = accounts[key]["errors_too_large"]
        for row in range(len(table)):
            separation, angle = (
                _cell(table, name, row, loose=loose) for name in ("separation", "position_angle")
            )
            when = shown(float(table.mjd[row]), minutes=True)
            lines.append(f"{key:<40} {when:<17}{separation:>20}{angle:>18}")
    print("\n".join(lines))
    if any(account["errors_too_large"] for account in accounts.values()):
        print("(in brackets: too large, of nearly circular orbits without posterior samples)")


def _write(path: Path, tables, accounts, equinox: str, *, force: bool) -> None:
    """ECSV with units and what goes with them, or CSV with the units in the names of columns."""
    import numpy as np
    from astropy.table import Table

    from ..files import whole_file
    from ..tables import csv_name
    from ..times import utc_of_tdb

    table = Table(
        meta={"times": "MJD UTC", "equinox of position angles": equinox, "orbits": accounts}
    )
    if len(tables) > 1:
        table["entry"] = [key for key, rows in tables.items() for _ in range(len(rows))]
    for name in _columns(tables):
        values = np.concatenate([getattr(rows, name) for rows in tables.values()])
        table[name] = utc_of_tdb(values) if name == "mjd" else values
        table[name].unit = _UNITS.get(name.removesuffix("_error"), "km/s")
    if path.suffix == ".csv":
        for name in table.colnames:
            if name != "mjd":
                table.rename_column(name, csv_name(name, table[name].unit))
    form = "ascii.ecsv" if path.suffix == ".ecsv" else "ascii.csv"
    with whole_file(path, force=force) as temporary:
        table.write(temporary, format=form, overwrite=True)


def _columns(tables: "dict[str, Ephemeris]") -> list[str]:
    """The columns in which something is known."""
    import numpy as np

    from ..ephemeris import Ephemeris

    names = [field.name for field in fields(Ephemeris)]
    return [n for n in names if any(np.isfinite(getattr(t, n)).any() for t in tables.values())]


def _json(tables, accounts, happenings, equinox: str) -> dict:
    from functools import cache

    import numpy as np

    from ..dates import show_date

    shown = cache(show_date)  # the dates are the same for all entries
    names = _columns(tables)
    endings = {**_UNITS, "mjd": "", "primary_velocity": "kms", "companion_velocity": "kms"}

    def row_of(table, row: int) -> dict:
        when = float(table.mjd[row])
        line = {"mjd_tdb": when, "date": shown(when, minutes=True)}
        for name in names:
            if name != "mjd" and np.isfinite(getattr(table, name)[row]):
                stem = name.removesuffix("_error")
                error = "_err" if name != stem else ""
                line[f"{stem}{error}_{endings[stem]}"] = getattr(table, name)[row]
        return line

    return {
        "equinox": equinox,
        "entries": [
            {
                "name": key,
                **accounts[key],
                "ephemeris": [row_of(table, row) for row in range(len(table))],
            }
            for key, table in tables.items()
        ],
        "events": [
            {
                "kind": event.kind,
                "mjd_tdb": event.mjd,
                "date": show_date(event.mjd, minutes=True),
                **({"err_d": event.error} if np.isfinite(event.error) else {}),
                "separation_mas": event.separation,
                "position_angle_deg": event.position_angle,
            }
            for event in happenings
        ],
    }
