"""Writing: an `OIFile` as a version 2 file that meets the standard to the letter."""

from datetime import UTC, datetime
from pathlib import Path

import numpy as np
from astropy.io import fits

from ..errors import InputError
from ..files import whole_file
from .blocks import BLOCK
from .checksum import encode, ones_sum
from .model import OIFile
from .observables import timed
from .schema import FLUX_ONLY, OPEN, Column, Table, keywords
from .utc import iso

_NUMPY = {"L": "S1", "I": ">i2", "J": ">i4", "E": ">f4", "D": ">f8", "C": ">c8"}
_OPEN_WIDTH = {"INSNAME", "TARGET", "SPECTYP"}
"""Text columns for which a checker takes another width, at most with a warning."""


def write(file: OIFile, path: str | Path, *, force: bool = False) -> None:
    """Write `file` to `path` as OIFITS version 2.

    Columns of data are written in the types of the standard and read back bit for bit; TIME is
    written as 0, as version 2 demands. Unknown columns and extensions are written as they were
    read.

    Raises
    ------
    InputError
        If `path` exists and `force` is false, if `file` has no OI_ARRAY, if an id does not fit
        the 16 bits of its column, or a text its width.
    """
    if not file.arrays:
        raise InputError(f"{path}: a version 2 file must have an OI_ARRAY, and there is none")
    versions: dict[str, int] = {}
    with whole_file(Path(path), force=force) as temporary, open(temporary, "wb") as handle:
        handle.write(_sealed(primary_header(file), b""))
        for table in file.tables:
            versions[table.extname] = versions.get(table.extname, 0) + 1
            header, records = _encode(table, versions[table.extname])
            data = records.view(np.uint8) if records.size else np.empty(0, np.uint8)
            if table.heap:
                data = np.concatenate([data, np.frombuffer(table.heap, dtype=np.uint8)])
            handle.write(_sealed(header, data))
            handle.write(data)
            handle.write(b"\0" * (-data.size % BLOCK))
        for other in file.others:
            handle.write(other.raw)


def primary_header(file: OIFile) -> fits.Header:
    """The primary header: what `file.primary` says, and what version 2 demands beside it."""
    header = fits.Header()
    header["SIMPLE"], header["BITPIX"], header["NAXIS"], header["EXTEND"] = True, 8, 0, True
    for name, value in (_demanded(file) | _given(file.primary)).items():
        header[name] = value
    header["CONTENT"] = "OIFITS2"
    header["DATE"] = datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%S")
    for line in file.comments:
        header.add_comment(line)
    for line in file.history:
        header.add_history(line)
    return header


def _given(primary: dict[str, object]) -> dict[str, object]:
    return {name: value for name, value in primary.items() if value not in ("", None)}


def _demanded(file: OIFile) -> dict[str, object]:
    """The compulsory keywords, from the tables themselves."""
    times = np.concatenate([table.mjd[timed(table)] for table in file.data])
    start = iso(times.min() if times.size else 0.0)
    instruments = [w.insname for w in file.wavelengths]
    return {
        "ORIGIN": "UNKNOWN",
        "DATE-OBS": start,
        "TELESCOP": _one(a.arrname for a in file.arrays),
        "INSTRUME": _one(instruments),
        "OBSERVER": "UNKNOWN",
        "OBJECT": _one(file.target.target.tolist()),
        "INSMODE": _one(instruments),
    }


def _one(names) -> str:
    """The one name, or the standard's word for several."""
    distinct = {name for name in names if name}
    return distinct.pop() if len(distinct) == 1 else "MULTI" if distinct else "UNKNOWN"


def _encode(table: Table, version: int) -> tuple[fits.Header, np.ndarray]:
    """Header and rows of a table."""
    present, extra = table.present, list(table.extra.values())
    forms = [(f"c{n}", *_form(c, table[c.name])) for n, c in enumerate(present)]
    forms += [(f"x{n}", "u1", e.raw.shape[1:]) for n, e in enumerate(extra)]
    records = np.zeros(len(table), dtype=forms)
    for number, known in enumerate(present):
        records[f"c{number}"] = _stored(table, known)
    for number, foreign in enumerate(extra):
        records[f"x{number}"] = foreign.raw

    header = fits.Header()
    header["XTENSION"], header["BITPIX"], header["NAXIS"] = "BINTABLE", 8, 2
    header["NAXIS1"], header["NAXIS2"] = records.dtype.itemsize, len(table)
    header["PCOUNT"], header["GCOUNT"], header["TFIELDS"] = len(table.heap), 1, len(forms)
    header["EXTNAME"], header["EXTVER"] = table.extname, version
    header["OI_REVN"] = table.revision
    for keyword in keywords(type(table)):
        if table[keyword.name] is not None:
            header[keyword.name] = table[keyword.name]
    for number, known in enumerate(present, start=1):
        for stem, value in _description(table, known).items():
            header[f"{stem}{number}"] = value
    for number, foreign in enumerate(extra, start=len(present) + 1):
        for stem, value in foreign.cards.items():
            header[f"{stem}{number}"] = value
    for card in table.cards:
        header.append(card, end=True)
    return header, records


def _form(known: Column, values: np.ndarray) -> tuple[object, ...]:
    if known.code == "A":
        return (f"S{_width(known, values)}",)
    return _NUMPY[known.code], values.shape[1:]


def _description(table: Table, known: Column) -> dict[str, object]:
    """The cards that describe a column, without their number."""
    values = table[known.name]
    repeat = _width(known, values) if known.code == "A" else int(np.prod(values.shape[1:]))
    cards: dict[str, object] = {"TTYPE": known.name, "TFORM": f"{repeat}{known.code}"}
    stated = known.unit in (OPEN, FLUX_ONLY)
    unit = table.units.get(known.name, "") if stated else known.unit
    if unit:
        cards["TUNIT"] = unit
    if len(known.shape) == 2:
        cards["TDIM"] = f"({values.shape[2]},{values.shape[1]})"
    return cards


def _width(known: Column, values: np.ndarray) -> int:
    longest = max(values.tolist(), key=len, default="")
    if len(longest) > known.width and known.name not in _OPEN_WIDTH:
        raise InputError(
            f"column {known.name}: {longest!r} has more than the {known.width} letters that "
            "OIFITS allows; shorten it"
        )
    return max(len(longest), known.width)


def _stored(table: Table, known: Column) -> np.ndarray:
    """The values as they go into the file."""
    values = table[known.name]
    if known.name == "TIME":
        return np.zeros_like(values)
    if known.code == "A":
        return np.array([v.encode("ascii", "replace") for v in values.tolist()], dtype="S")
    if known.code == "L":
        return np.where(values, b"T", b"F")
    limits = np.iinfo(np.int16)
    if (
        known.code == "I"
        and values.size
        and not (limits.min <= values.min() and values.max() <= limits.max)
    ):
        raise InputError(
            f"{table.label}: column {known.name} has numbers beyond {limits.max}, the largest that "
            "OIFITS allows; renumber them"
        )
    return values


def _sealed(header: fits.Header, data: bytes | np.ndarray) -> bytes:
    """The bytes of a header, with the checksums of the HDU as its last cards."""
    datasum = ones_sum(data)
    header["DATASUM"] = str(datasum)
    header["CHECKSUM"] = "0" * 16
    blank = header.tostring().encode("ascii", "replace")
    letters = encode(ones_sum(blank, datasum))
    head, _, tail = blank.rpartition(b"'0000000000000000'")
    return head + f"'{letters}'".encode() + tail
