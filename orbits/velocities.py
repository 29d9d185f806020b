"""Radial velocities of one or both stars."""

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import astropy.units as u
import numpy as np
from astropy.table import Table

from .errors import InputError
from .files import whole_file
from .rows import Rows
from .tables import Column, read_table, require, require_finite
from .times import tdb_of_utc, utc_of_tdb

COLUMNS = (
    Column("mjd", u.day),
    Column("velocity", u.km / u.s),
    Column("error", u.km / u.s),
    Column("star", text=True),
    Column("instrument", text=True),
    Column("source", text=True),
)

STARS = ("primary", "companion", "difference")
"""Whose velocity a row is; "difference" is the companion's less the primary's."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Velocities(Rows):
    """n radial velocities; positive is receding."""

    mjd: np.ndarray
    """(n,) TDB; the observer has applied any barycentric correction."""
    velocity: np.ndarray
    """(n,) km/s."""
    error: np.ndarray
    """(n,) km/s, > 0."""
    star: np.ndarray
    """(n,) int: 0 the primary, 1 the companion, 2 the companion less the primary."""
    instrument: np.ndarray
    """(n,) text: each has its own zero point."""
    source: np.ndarray
    """(n,) text."""


def read_velocities(path: Path) -> Velocities:
    """Read a table of velocities: mjd (UTC), velocity, error, star (see `STARS`).

    Raises
    ------
    InputError
        If a column is missing, unknown, without unit, or holds a value that cannot be used.
    """
    path = Path(path)
    table = read_table(path, COLUMNS)
    require(path, table, "mjd", "velocity", "error", "star")
    require_finite(path, table, "mjd", "velocity")
    require_finite(path, table, "error", positive=True)
    empty = np.full(len(table), "", dtype=object)
    return Velocities(
        mjd=tdb_of_utc(table["mjd"]),
        velocity=np.asarray(table["velocity"]),
        error=np.asarray(table["error"]),
        star=_stars(path, table["star"]),
        instrument=np.asarray(table["instrument"]) if "instrument" in table.colnames else empty,
        source=np.asarray(table["source"]) if "source" in table.colnames else empty,
    )


def write_velocities(path: Path, velocities: Velocities, *, force: bool = False) -> None:
    """Write `velocities` as ECSV with units, readable by `read_velocities`."""
    table = Table(
        {
            "mjd": utc_of_tdb(velocities.mjd) * u.day,
            "velocity": velocities.velocity * u.km / u.s,
            "error": velocities.error * u.km / u.s,
            "star": [STARS[star] for star in velocities.star],
            "instrument": velocities.instrument.astype(str),
            "source": velocities.source.astype(str),
        }
    )
    with whole_file(path, force=force) as temporary:
        table.write(temporary, format="ascii.ecsv", overwrite=True)


def _stars(path: Path, names: Sequence[str]) -> np.ndarray:
    for row, name in enumerate(names):
        if name not in STARS:
            raise InputError(
                f"{path}: row {row + 1}, column star: {name!r} is none of {', '.join(STARS)}"
            )
    return np.array([STARS.index(name) for name in names])
