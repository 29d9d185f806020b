"""Reading: from the HDUs of a file to an `OIFile`, naming whatever departs from the standard."""

from collections.abc import Collection
from dataclasses import replace
from pathlib import Path

import numpy as np

from ..errors import InputError
from ..problems import Log
from . import amending, checksum, links
from .bintable import CARDS, BinTable, Field, Malformed
from .blocks import HDU, read_hdus
from .model import KINDS, Array, DataTable, OIFile, OtherHDU, Target
from .schema import (
    DTYPES,
    FLUX_ONLY,
    NWAVE,
    OPEN,
    Column,
    ExtraColumn,
    Keyword,
    Table,
    attribute,
    columns,
    keywords,
)
from .units import factor

STRUCTURAL = {
    "XTENSION", "SIMPLE", "BITPIX", "NAXIS", "NAXIS1", "NAXIS2", "PCOUNT", "GCOUNT", "TFIELDS",
    "THEAP", "EXTNAME", "EXTVER", "EXTEND", "OI_REVN", "CHECKSUM", "DATASUM", "END", "",
}  # fmt: skip
COMPATIBLE = {
    "L": "LBIJ", "I": "IJBK", "J": "IJBK", "E": "EDIJBK", "D": "EDIJBK", "C": "CM", "A": "A",
}  # fmt: skip
"""Which forms of the file can stand for a form of the standard."""
NO_ID = np.iinfo(np.int16).min
"""Stands for an id that is NULL: no target, station or datum has a number so low."""
NUMBERED = {Target: "TARGET_ID", Array: "STA_INDEX"}
"""Where ids are given to what others refer to."""
ALIASES = {"FLUX": "FLUXDATA"}
"""Columns that pipelines still write as drafts of version 2 called them."""


def load(path: str | Path) -> OIFile:
    """Read an OIFITS file, version 1 or 2, plain or gzipped.

    What departs from the standard is listed in `OIFile.problems`; what cannot be used is left
    out and listed too.

    Raises
    ------
    InputError
        If the file is missing, not FITS, cut short, or has no usable OIFITS data.
    """
    path = Path(path)
    log = Log(str(path))
    tables: list[Table] = []
    others: list[OtherHDU] = []
    primary: HDU | None = None
    foreign = True
    for hdu in read_hdus(path):
        _damage(hdu, log)
        if hdu.number == 0:
            primary = hdu
            if hdu.data:
                log.note("", "the primary HDU has data of its own", "they are ignored")
            continue
        kind = KINDS.get(hdu.name)
        if kind is None:
            others.append(OtherHDU(hdu.name, hdu.raw))
            continue
        foreign = False
        try:
            tables.append(_table(kind, hdu, log))
        except Malformed as fault:
            log.unusable(hdu.label, str(fault), "the table is left out")
    if primary is None or foreign:
        raise InputError(f"{path}: FITS, but not OIFITS: it has no OI_ table")
    file = links.assemble(path, primary.header, tables, others, log)
    amending.amend(file, log)
    return file


def _damage(hdu: HDU, log: Log) -> None:
    """Say what in an HDU does not look as it was written."""
    contradicted = checksum.verify(hdu)
    if contradicted:
        log.suspicious(
            hdu.label,
            f"keyword {contradicted} does not agree with the contents",
            "read all the same; the file was changed by hand or damaged",
        )
    garbled = hdu.header.illegible
    if garbled:
        log.note(hdu.label, f"{garbled} cards of the header cannot be read", "ignored")


def _table(kind: type[Table], hdu: HDU, log: Log) -> Table:
    """A table with the columns that the standard knows, and the others as they are."""
    label = hdu.label
    content = BinTable(hdu)
    found, extra = _sorted_out(kind, content, label, log)
    values: dict[str, object] = {}
    units: dict[str, str] = {}
    for column in columns(kind):
        if column.name not in found:
            _missing(column, label, log)
            continue
        if column.unit == FLUX_ONLY:
            flux = hdu.header.text("AMPTYP").lower() == "correlated flux"
            column = replace(column, unit=OPEN if flux else "")
        field = found[column.name]
        try:
            values[attribute(column.name)] = _values(content, field, column, label, log)
        except Malformed as fault:
            # Without its flags, a table would offer data that its author calls bad.
            if column.name == "FLAG" or (not column.optional and column.fill is None):
                raise
            log.unusable(label, str(fault), "the column is left out")
            continue
        if column.unit == OPEN:
            units[column.name] = field.unit
    values |= _keywords(kind, hdu, found, label, log)
    try:
        table = kind(
            **values,
            units=units,
            extra=extra,
            heap=content.heap,
            cards=_cards(kind, hdu),
            file=log.file,
            hdu=hdu.number,
            revn=_revision(hdu),
        )
    except ValueError as fault:
        raise Malformed(str(fault).removeprefix(f"{kind.extname}: ")) from fault
    return _with_ids(table, NUMBERED[kind], log) if kind in NUMBERED else table


def _with_ids(table: Table, column: str, log: Log) -> Table:
    """The rows of a table that its ids tell apart: those that have one."""
    none = table[column] == NO_ID
    if not none.any():
        return table
    what = f"column {column} is NULL in {np.count_nonzero(none)} rows"
    log.unusable(table.label, what, "these rows are left out")
    return table.select(~none)


def _sorted_out(
    kind: type[Table], content: BinTable, label: str, log: Log
) -> tuple[dict[str, Field], dict[str, ExtraColumn]]:
    """The columns of the standard by name, and copies of those that it does not know."""
    known = {column.name for column in columns(kind)}
    given = {field.name.upper() for field in content.fields}
    found: dict[str, Field] = {}
    extra: dict[str, ExtraColumn] = {}
    for field in content.fields:
        name = field.name.upper()
        meant = ALIASES.get(name)
        if meant in known and meant not in given:
            log.note(label, f"column {name} is not in the standard", f"taken as {meant}")
            name = meant
        if name in known and name not in found:
            found[name] = field
        else:
            name = field.name if field.name not in extra else f"{field.name} {len(extra)}"
            extra[name] = ExtraColumn(field.cards, np.array(content.raw(field)))
    return _with_units_of_errors(kind, found), extra


def _with_units_of_errors(kind: type[Table], found: dict[str, Field]) -> dict[str, Field]:
    """The same columns; errors that state no unit have that of what they are the errors of."""
    same = dict(found)
    fixed = {column.name for column in columns(kind) if column.unit != OPEN}
    for value, error, _ in kind.quantities if issubclass(kind, DataTable) else ():
        if error in found and value in found and error in fixed and not found[error].unit:
            same[error] = replace(found[error], unit=found[value].unit)
    return same


def _values(content: BinTable, field: Field, column: Column, label: str, log: Log) -> np.ndarray:
    """The values of a column in the type, shape and unit of the standard."""
    name = column.name
    if field.code not in COMPATIBLE[column.code]:
        raise Malformed(f"column {name} has the form {field.cards['TFORM']!r}, not {column.code}")
    values = content.values(field)
    if column.code == "A":
        return _texts(values)
    nulls = content.nulls(field)
    if column.code == "L":
        values = _logical(values, nulls, field, label, log)
    else:
        values = _without_nulls(values, nulls, column, label, log)
    values = _shaped(values, column)
    if column.code == "E" and field.code == "D":
        log.note(label, f"column {name} is in double precision", "rounded to single precision")
    with np.errstate(over="ignore"):
        values = values.astype(DTYPES[column.code], copy=column.code != "L")
    return _in_unit_of_standard(values, field.unit, column, label, log)


def _without_nulls(
    values: np.ndarray, nulls: np.ndarray | None, column: Column, label: str, log: Log
) -> np.ndarray:
    """Numbers, with NaN where the file has none, and `NO_ID` in columns of ids."""
    whole = column.code in "IJ"
    if nulls is not None:
        log.note(
            label,
            f"column {column.name}: {np.count_nonzero(nulls)} values are NULL",
            "taken as unknown ids" if whole else "taken as NaN: not measured",
        )
        real = not whole or values.dtype.kind == "f"  # ids that are scaled can be any numbers
        values = values.astype(np.float64 if real else np.int64)
        values[nulls] = NO_ID if whole else np.nan
    if whole and values.dtype.itemsize == 8 and values.size:
        limit = np.iinfo(np.int32)
        if not (values.min() >= limit.min and values.max() <= limit.max):  # NaN is neither
            raise Malformed(f"column {column.name} has numbers beyond 32 bits")
    return values


def _in_unit_of_standard(
    values: np.ndarray, unit: str, column: Column, label: str, log: Log
) -> np.ndarray:
    """`values`, which the file states in `unit`, in the unit of the standard."""
    name = column.name
    if column.unit == OPEN or (not column.unit and column.code not in "ED"):
        return values
    scale = factor(column.unit, unit)
    if scale is None and column.unit == "m" and column.fill is None:
        raise Malformed(f"column {name} has the unit {unit!r}, which is no length: convert it to m")
    if scale is None:
        meant = column.unit or "plain numbers"
        log.suspicious(
            label, f"column {name} has the unit {unit!r}", f"its numbers are taken as {meant}"
        )
    elif scale != 1.0:
        values *= values.dtype.type(scale)
        meant = column.unit or "plain numbers"
        log.note(label, f"column {name} is in {unit}", f"converted to {meant}")
    return values


def _logical(
    stored: np.ndarray, nulls: np.ndarray | None, field: Field, label: str, log: Log
) -> np.ndarray:
    """Truth of the bytes T and F; others are undefined, which in a FLAG means not to be used.

    In a column of numbers, as some write it, 0 stands for false.
    """
    name = field.name
    if field.code != "L":
        log.note(label, f"column {name} holds numbers", "0 taken as false, others as true")
        return (stored != 0) | (False if nulls is None else nulls)
    true = stored != ord("F")
    undefined = np.count_nonzero(true) - np.count_nonzero(stored == ord("T"))
    if undefined:
        what = f"column {name}: {undefined} values are undefined, neither true nor false"
        if name.upper() == "FLAG":
            log.unusable(label, what, "these data are left out")
        else:
            log.note(label, what, "taken as true")
    return true


def _shaped(values: np.ndarray, column: Column) -> np.ndarray:
    nrow, repeat = values.shape
    if NWAVE not in column.shape:
        wanted = int(np.prod(column.shape, dtype=int))
        if repeat != wanted:
            raise Malformed(f"column {column.name} has {repeat} values a row, not {wanted}")
        return values.reshape(nrow, *column.shape)
    if len(column.shape) == 2:
        side = round(repeat**0.5)
        if side * side != repeat:
            raise Malformed(f"column {column.name} has {repeat} values a row, which is no square")
        return values.reshape(nrow, side, side)
    return values


def _texts(values: np.ndarray) -> np.ndarray:
    """Text without the blanks and NULs that pad it."""
    cells = [v.split(b"\0")[0].decode("latin-1").strip() for v in values.tolist()]
    return np.array(cells, dtype=str) if cells else np.empty(0, dtype="U1")


def _missing(column: Column, label: str, log: Log) -> None:
    if column.optional or column.since == 2:
        return
    if column.fill is None:
        raise Malformed(f"column {column.name} is missing")
    log.suspicious(label, f"column {column.name} is missing", f"taken as {column.fill}")


def _keywords(
    kind: type[Table], hdu: HDU, given: Collection[str], label: str, log: Log
) -> dict[str, object]:
    values: dict[str, object] = {}
    for keyword in keywords(kind):
        value = _keyword(keyword, hdu, label, log)
        if value is not None:
            values[attribute(keyword.name)] = value
        elif keyword.compulsory and keyword.fill is None:
            if keyword.name == "DATE-OBS":
                log.note(label, "keyword DATE-OBS is missing", "not needed: MJD is used")
                values["date_obs"] = ""
            elif keyword.name == "CALSTAT":
                values["calstat"] = "U" if "STA_INDEX" in given else "C"
                log.note(
                    label,
                    "keyword CALSTAT is missing",
                    f"taken as {values['calstat']}, as there are "
                    f"{'' if values['calstat'] == 'U' else 'no '}stations",
                )
            else:
                raise Malformed(f"keyword {keyword.name} is missing")
    return values


def _keyword(keyword: Keyword, hdu: HDU, label: str, log: Log) -> object | None:
    value = hdu.header.get(keyword.name)
    if value is None:
        return None
    if keyword.kind is str:
        return hdu.header.text(keyword.name)
    if isinstance(value, bool) or not isinstance(value, int | float) or not np.isfinite(value):
        log.suspicious(label, f"keyword {keyword.name} is {value!r}, not a number", "ignored")
        return None
    return keyword.kind(value)


def _revision(hdu: HDU) -> int | None:
    value = hdu.header.get("OI_REVN")
    return value if isinstance(value, int) and not isinstance(value, bool) else None


def _cards(kind: type[Table], hdu: HDU) -> list[tuple[str, object, str]]:
    """Header cards that neither FITS nor the standard gives a meaning here."""
    skip = STRUCTURAL | {keyword.name for keyword in keywords(kind)}
    return [
        entry
        for entry in hdu.header.cards
        if entry[0] not in skip and entry[0].rstrip("0123456789") not in CARDS
    ]
