"""The columns of a catalogue of orbits, one row per solution, and what their values may be."""

from pathlib import Path

import astropy.units as u
import numpy as np
from astropy.table import Table

from ..errors import InputError
from ..tables import Column, require, require_finite

TEXTS = (
    "system",
    "solution",
    "aliases",
    "preferred",
    "ascending",
    "date",
    "data",
    "source",
    "remark",
    "positions",
    "samples",
)
"""In the order of the file. `aliases` are separated by semicolons; `preferred` and `ascending` are
true or false; `positions` and `samples` name files, relative to the catalogue."""

NUMBERS: dict[str, u.UnitBase | None] = {
    "ra": u.deg,
    "dec": u.deg,
    "equinox": None,
    "period": u.day,
    "periastron": u.day,
    "eccentricity": None,
    "semimajor_axis": u.mas,
    "inclination": u.deg,
    "node": u.deg,
    "argument": u.deg,
    "k1": u.km / u.s,
    "k2": u.km / u.s,
    "gamma": u.km / u.s,
    "parallax": u.mas,
    "total_mass": u.solMass,
    "primary_mass": u.solMass,
    "companion_mass": u.solMass,
}
"""Units that the numbers are kept in. `ra` and `dec` are ICRS; `equinox` is the year of the equinox
that the node refers to (2000 where it is not given); `periastron` is MJD TDB; `argument` belongs to
the companion's relative orbit."""

ELEMENTS = tuple(NUMBERS)[3:10]
"""What makes an orbit; every row has them all."""

WITH_ERRORS = tuple(NUMBERS)[3:]
"""Each of these may have a column of one-sigma errors, with the ending ``_error``."""

COLUMNS = (
    *(Column(name, text=True) for name in TEXTS),
    *(
        Column(name + ending, unit)
        for name, unit in NUMBERS.items()
        for ending in (("", "_error") if name in WITH_ERRORS else ("",))
    ),
)

_POSITIVE = (0.0, np.inf, False)
_RANGES: dict[str, tuple[float, float, bool]] = {
    "ra": (0.0, 360.0, True),
    "dec": (-90.0, 90.0, True),
    "equinox": (1500.0, 2500.0, True),
    "period": _POSITIVE,
    "semimajor_axis": _POSITIVE,
    "inclination": (0.0, 180.0, True),
    "k1": _POSITIVE,
    "k2": _POSITIVE,
    "parallax": _POSITIVE,
    "total_mass": _POSITIVE,
    "primary_mass": _POSITIVE,
    "companion_mass": _POSITIVE,
}
"""Lowest and highest value, and whether these two are allowed themselves."""


def check(path: Path, table: Table) -> None:
    """Refuse a table that is no catalogue of orbits.

    Raises
    ------
    InputError
        Naming file, row and column: if a column is missing, a name is empty, a solution occurs
        twice, two solutions of a system are preferred, or a value is outside its range.
    """
    require(path, table, "system", "solution", *ELEMENTS)
    for name in ("system", "solution"):
        for row, text in enumerate(table[name]):
            if not text.strip() or "/" in text:
                raise InputError(f"{path}: row {row + 1}, column {name}: {text!r} is not a name")
    require_finite(path, table, *ELEMENTS)
    _check_eccentricity(path, table)
    for name, (low, high, inclusive) in _RANGES.items():
        if name in table.colnames:
            values = np.asarray(table[name])
            inside = (
                (values >= low) & (values <= high)
                if inclusive
                else (values > low) & (values < high)
            )
            words = f"within {low:g} to {high:g}" if inclusive else "above 0"
            _refuse(path, table, name, ~(inside | np.isnan(values)), words)
    for name in WITH_ERRORS:
        if f"{name}_error" in table.colnames:
            _refuse(
                path,
                table,
                f"{name}_error",
                np.asarray(table[f"{name}_error"]) < 0,
                "0 or more",
            )
    _check_keys(path, table)


def truth(path: Path, table: Table, name: str) -> np.ndarray:
    """(n,) bool of the column `name`, false where it is empty or missing."""
    if name not in table.colnames:
        return np.zeros(len(table), dtype=bool)
    words = {"true": True, "yes": True, "false": False, "no": False, "": False}
    values = [words.get(text.strip().casefold()) for text in table[name]]
    if None in values:
        row = values.index(None)
        raise InputError(
            f"{path}: row {row + 1}, column {name}: {table[name][row]!r} is not true or false"
        )
    return np.array(values, dtype=bool)


def same(name: str) -> str:
    """The form in which names are compared: without spaces, and in either case of letters."""
    return "".join(name.split()).casefold()


def _check_eccentricity(path: Path, table: Table) -> None:
    values = np.asarray(table["eccentricity"])
    _refuse(path, table, "eccentricity", ~((values >= 0) & (values < 1)), "at least 0 and below 1")


def _refuse(path: Path, table: Table, name: str, bad: np.ndarray, words: str) -> None:
    if bad.any():
        row = int(np.argmax(bad))
        label = f"{table['system'][row]}/{table['solution'][row]}"
        raise InputError(
            f"{path}: row {row + 1} ({label}), column {name}: {table[name][row]} must be {words}"
        )


def _check_keys(path: Path, table: Table) -> None:
    first: dict[tuple[str, str], int] = {}
    favourite: dict[str, int] = {}
    preferred = truth(path, table, "preferred")
    truth(path, table, "ascending")
    for row, (system, solution) in enumerate(zip(table["system"], table["solution"], strict=True)):
        key = same(system), same(solution)
        if key in first:
            raise InputError(
                f"{path}: row {row + 1}, columns system and solution: {system}/{solution} "
                f"stands in row {first[key] + 1} already"
            )
        first[key] = row
        if preferred[row]:
            if key[0] in favourite:
                raise InputError(
                    f"{path}: row {row + 1}, column preferred: row {favourite[key[0]] + 1} is the "
                    f"preferred solution of {system} already"
                )
            favourite[key[0]] = row
