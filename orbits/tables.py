"""Tables that people write: ECSV with units, or CSV with the units in the column names.

A table is read against a list of columns; whatever does not fit is refused with the file, the
column and the row.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import astropy.units as u
import numpy as np
from astropy.table import Table

from .errors import InputError

CSV_UNITS = {
    "mas": u.mas,
    "arcsec": u.arcsec,
    "deg": u.deg,
    "kms": u.km / u.s,
    "d": u.day,
    "msun": u.solMass,
}


@dataclass(frozen=True)
class Column:
    """A column that a table may have; `unit` is the one its values are returned in."""

    name: str
    unit: u.UnitBase | None = None
    text: bool = False


def read_table(path: Path, columns: Sequence[Column]) -> Table:
    """Read `path`, keeping the known columns, as float64 in their units or as text.

    Missing cells become NaN or "". Units are dropped from the result since `columns` states them.

    Raises
    ------
    InputError
        If the file is missing or not a table, a column is unknown or lacks its unit, a unit
        cannot be converted, or a cell is not a number.
    """
    path = Path(path)
    known = {column.name: column for column in columns}
    raw = _parse(path)
    if len(raw) == 0:
        raise InputError(f"{path}: the table has no rows")
    result = Table(meta=dict(raw.meta))
    for name in raw.colnames:
        column, unit = _identify(path, name, raw[name].unit, known)
        result[column.name] = (
            _text(raw[name]) if column.text else _number(path, raw[name], unit, column)
        )
    return result


def csv_name(name: str, unit: u.UnitBase | None) -> str:
    """What a column is called in CSV, where it carries its unit in its name."""
    ending = next((ending for ending, known in CSV_UNITS.items() if known == unit), None)
    return name if ending is None else f"{name}_{ending}"


def require(path: Path, table: Table, *names: str) -> None:
    """Raise InputError unless `table` has every one of the columns `names`."""
    missing = [name for name in names if name not in table.colnames]
    if missing:
        raise InputError(f"{path}: no column {' or '.join(missing)}; it is needed")


def require_finite(path: Path, table: Table, *names: str, positive: bool = False) -> None:
    """Raise InputError naming the first row where a column is not finite (or not above 0)."""
    for name in names:
        values = np.asarray(table[name])
        bad = ~np.isfinite(values) | (positive & ~(values > 0))
        if bad.any():
            row = int(np.argmax(bad))
            wanted = "a positive number" if positive else "a number"
            what = f"{values[row]} is not" if values[row] == values[row] else "empty or not"
            raise InputError(f"{path}: row {row + 1}, column {name}: {what} {wanted}")


def _parse(path: Path) -> Table:
    if not path.is_file():
        raise InputError(f"{path}: no such file")
    form = "ascii.ecsv" if path.suffix == ".ecsv" else "ascii.csv"
    try:
        return Table.read(path, format=form)
    except (ValueError, TypeError, KeyError, IndexError, OSError) as error:
        reason = str(error).strip().splitlines()[0] if str(error).strip() else "nothing in it"
        raise InputError(f"{path}: not a readable {form[6:].upper()} table: {reason}") from error


def _identify(path, name, unit, known) -> tuple[Column, u.UnitBase | None]:
    """The column that `name` stands for, and the unit it was written in."""
    column = known.get(name)
    if column is None:
        stem, _, suffix = name.rpartition("_")
        if stem in known and suffix in CSV_UNITS and unit is None:
            column, unit = known[stem], CSV_UNITS[suffix]
    if column is None:
        raise InputError(f"{path}: unknown column {name!r}; known are {', '.join(known)}")
    if column.unit is not None:
        if unit is None:
            raise InputError(
                f"{path}: column {name!r} has no unit; give one in the ECSV header, "
                f"or as the ending of a CSV column's name ({name}_mas, {name}_deg ...)"
            )
        if not unit.is_equivalent(column.unit):
            raise InputError(f"{path}: column {name!r} is in {unit}, which is no {column.unit}")
    elif unit is not None and unit not in (u.dimensionless_unscaled, u.year):
        # A date in years may say so.
        raise InputError(f"{path}: column {name!r} is in {unit}, but it must have no unit")
    return column, unit


def _number(path, raw, unit, column: Column) -> np.ndarray:
    values = np.ma.asarray(raw)
    try:
        values = np.ma.filled(values.astype(np.float64), np.nan)
    except ValueError:
        for row, cell in enumerate(raw):
            try:
                float(cell)
            except (TypeError, ValueError):
                raise InputError(
                    f"{path}: row {row + 1}, column {raw.name}: {str(cell)!r} is not a number"
                ) from None
    return values if column.unit is None else (values * unit).to_value(column.unit)


def _text(raw) -> np.ndarray:
    return np.array(["" if cell is np.ma.masked else str(cell) for cell in raw], dtype=object)
