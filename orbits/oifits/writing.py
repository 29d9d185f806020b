"""Writing: an `OIFile` as a version 2 file that meets the standard to the letter."""

from datetime import UTC, datetime
from pathlib import Path

import numpy as np
from astropy.io import fits

from ..files import whole_file
from .blocks import BLOCK
from .model import Column, OIFile, Table, attribute, columns, keywords

_NUMPY = {"L": "S1", "I": ">i2", "J": ">i4", "E": ">f4", "D": ">f8", "C": ">c8"}


def write(file: OIFile, path: str | Path, *, force: bool = False) -> None:
    """Write `file` to `path` as OIFITS version 2.

    Columns of data are written in the types of the standard and read back bit for bit; TIME is
    written as 0, as version 2 demands. Unknown columns and extensions are written as they were
    read.

    Raises
    ------
    InputError
        If `path` exists and `force` is false.
    ValueError
        If an id does not fit the 16 bits of its column, or a text its width.
    """
    versions: dict[str, int] = {}
    with whole_file(Path(path), force=force) as temporary, open(temporary, "wb") as handle:
        handle.write(_sealed(primary_header(file), b""))
        for table in file.tables:
            versions[table.extname] = versions.get(table.extname, 0) + 1
            header, data = _encode(table, versions[table.extname])
            handle.write(_sealed(header, data))
            handle.write(data + b"\0" * (-len(data) % BLOCK))
        for other in file.others:
            handle.write(other.raw)


def primary_header(file: OIFile) -> fits.Header:
    """The primary header: what `file.primary` says, and what version 2 demands beside it."""
    header = fits.Header()
    header["SIMPLE"], header["BITPIX"], header["NAXIS"], header["EXTEND"] = True, 8, 0, True
    demanded = _demanded(file)
    for name, value in (demanded | _given(file.primary)).items():
        header[name] = value
    header["CONTENT"] = "OIFITS2"
    header["DATE"] = datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%S")
    for line in file.history:
        header.add_history(line)
    return header


def _given(primary: dict[str, object]) -> dict[str, object]:
    return {name: value for name, value in primary.items() if value not in ("", None)}


def _demanded(file: OIFile) -> dict[str, object]:
    """The compulsory keywords, from the tables themselves."""
    from astropy.time import Time

    times = np.concatenate([table.mjd for table in file.data])
    times = times[np.isfinite(times) & (times > 0)]
    start = Time(times.min(), format="mjd").isot if times.size else "1858-11-17T00:00:00"
    arrays = sorted({a.arrname for a in file.arrays})
    instruments = sorted({w.insname for w in file.wavelengths})
    return {
        "ORIGIN": "UNKNOWN",
        "DATE-OBS": start,
        "TELESCOP": _one(arrays),
        "INSTRUME": _one(instruments),
        "OBSERVER": "UNKNOWN",
        "OBJECT": _one(sorted(set(file.target.target.tolist()))),
        "INSMODE": _one(instruments),
    }


def _one(names: list[str]) -> str:
    names = [name for name in names if name]
    return names[0] if len(names) == 1 else "MULTI" if names else "UNKNOWN"


def _encode(table: Table, version: int) -> tuple[fits.Header, bytes]:
    """Header and data of a table."""
    known = [c for c in columns(type(table)) if getattr(table, attribute(c.name)) is not None]
    forms: list[tuple[str, object]] = []
    header = fits.Header()
    header["XTENSION"] = "BINTABLE"
    header["BITPIX"], header["NAXIS"], header["NAXIS1"] = 8, 2, 0
    header["NAXIS2"], header["PCOUNT"], header["GCOUNT"] = len(table), 0, 1
    header["TFIELDS"] = len(known) + len(table.extra)
    header["EXTNAME"], header["EXTVER"] = table.extname, version
    header["OI_REVN"] = table.revision
    for keyword in keywords(type(table)):
        value = getattr(table, attribute(keyword.name))
        if value is not None:
            header[keyword.name] = value
    for number, column in enumerate(known, start=1):
        values = getattr(table, attribute(column.name))
        forms.append((f"c{number}", *_form(column, values)))
        header[f"TTYPE{number}"] = column.name
        header[f"TFORM{number}"] = _tform(column, values)
        unit = table.units.get(column.name, "") if column.unit == "free" else column.unit
        if unit:
            header[f"TUNIT{number}"] = unit
        if len(column.shape) == 2:
            header[f"TDIM{number}"] = f"({values.shape[2]},{values.shape[1]})"
    for number, extra in enumerate(table.extra.values(), start=len(known) + 1):
        forms.append((f"c{number}", "u1", (extra.raw.shape[1],)))
        for stem, value in extra.cards.items():
            header[f"{stem}{number}"] = value
    records = np.zeros(len(table), dtype=forms)
    header["NAXIS1"] = records.dtype.itemsize
    for number, column in enumerate(known, start=1):
        records[f"c{number}"] = _stored(table, column)
    for number, extra in enumerate(table.extra.values(), start=len(known) + 1):
        records[f"c{number}"] = extra.raw
    for name, value, comment in table.cards:
        header.append((name, value, comment), end=True)
    return header, records.tobytes()


def _form(column: Column, values: np.ndarray) -> tuple[object, ...]:
    if column.code == "A":
        return (f"S{_width(column, values)}",)
    return _NUMPY[column.code], values.shape[1:]


def _tform(column: Column, values: np.ndarray) -> str:
    if column.code == "A":
        return f"{_width(column, values)}A"
    repeat = int(np.prod(values.shape[1:], dtype=int))
    return column.code if not column.shape else f"{repeat}{column.code}"


def _width(column: Column, values: np.ndarray) -> int:
    longest = max((len(v.encode("latin-1", "replace")) for v in values.tolist()), default=0)
    if longest > column.width and column.name != "INSNAME":  # whose width the standard leaves open
        value = max(values.tolist(), key=len)
        raise ValueError(f"column {column.name}: {value!r} is longer than {column.width} letters")
    return max(longest, column.width)


def _stored(table: Table, column: Column) -> np.ndarray:
    """The values as they go into the file."""
    values = getattr(table, attribute(column.name))
    if column.name == "TIME":
        return np.zeros_like(values)
    if column.code == "A":
        return np.array([v.encode("ascii", "replace") for v in values.tolist()], dtype="S")
    if column.code == "L":
        return np.where(values, b"T", b"F")
    if column.code == "I" and values.size and np.abs(values).max() > np.iinfo(np.int16).max:
        raise ValueError(
            f"{table.extname}: column {column.name} has ids beyond 32767, which do not fit the file"
        )
    return values


def _sealed(header: fits.Header, data: bytes) -> bytes:
    """The bytes of a header."""
    return header.tostring().encode("ascii", "replace")
