"""Binary tables: the columns of an HDU as NumPy arrays, without interpretation beyond FITS."""

import re
from dataclasses import dataclass

import numpy as np

from .blocks import HDU

_SIZES = {
    "A": 1,
    "L": 1,
    "B": 1,
    "I": 2,
    "J": 4,
    "K": 8,
    "E": 4,
    "D": 8,
    "C": 8,
    "M": 16,
    "P": 8,
    "Q": 16,
}
_NUMPY = {
    "L": "u1", "B": "u1", "I": ">i2", "J": ">i4", "K": ">i8",
    "E": ">f4", "D": ">f8", "C": ">c8", "M": ">c16",
}  # fmt: skip
CARDS = ("TTYPE", "TFORM", "TUNIT", "TNULL", "TSCAL", "TZERO", "TDISP", "TDIM")


class Malformed(Exception):
    """The table contradicts itself; the message says how."""


@dataclass(frozen=True)
class Field:
    """One column as it stands in the file."""

    name: str
    code: str
    repeat: int
    unit: str
    offset: int
    width: int
    """Bytes of a row."""
    cards: dict[str, object]


class BinTable:
    """The fields of a BINTABLE and their values."""

    def __init__(self, hdu: HDU) -> None:
        header = hdu.header
        if header.text("XTENSION") not in ("BINTABLE", "A3DTABLE") or header.get("NAXIS") != 2:
            raise Malformed("it is not a binary table")
        self.row_bytes, self.nrow = header.get("NAXIS1"), header.get("NAXIS2")
        count = header.get("TFIELDS")
        if isinstance(count, bool) or not isinstance(count, int) or not 0 <= count <= 999:
            raise Malformed(f"keyword TFIELDS is {count!r}")
        self.fields: list[Field] = []
        offset = 0
        for number in range(1, count + 1):
            self.fields.append(_field(header, number, offset))
            offset += self.fields[-1].width
        if offset != self.row_bytes:
            raise Malformed(f"its columns take {offset} bytes a row, NAXIS1 says {self.row_bytes}")
        if len(hdu.data) < self.nrow * self.row_bytes:
            raise Malformed(f"it has {len(hdu.data)} bytes, too few for {self.nrow} rows")
        self._bytes = np.frombuffer(hdu.data, dtype=np.uint8)[: self.nrow * self.row_bytes]
        self._bytes = self._bytes.reshape(self.nrow, self.row_bytes)
        start = header.get("THEAP")
        regular = isinstance(start, int) and self._bytes.size <= start <= len(hdu.data)
        self._heap = hdu.data[start if regular else self._bytes.size :]

    def raw(self, field: Field) -> np.ndarray:
        """(nrow, width) uint8: the bytes of a column."""
        return self._bytes[:, field.offset : field.offset + field.width]

    @property
    def heap(self) -> bytes:
        """What columns of varying length point into; empty without such columns."""
        return bytes(self._heap) if any(field.code in "PQ" for field in self.fields) else b""

    def values(self, field: Field) -> np.ndarray:
        """(nrow, repeat) in the file's own type, or scaled where it says so; text as (nrow,) bytes.

        The array is a view of the file's bytes where it can be.
        """
        values = self._stored(field)
        scale, zero = field.cards.get("TSCAL", 1), field.cards.get("TZERO", 0)
        if field.code in "AL" or (scale == 1 and zero == 0):
            return values
        with np.errstate(over="ignore", invalid="ignore"):  # scales can be any numbers
            return values.astype(np.float64) * scale + zero

    def nulls(self, field: Field) -> np.ndarray | None:
        """(nrow, repeat) bool: where a column of whole numbers has none; None if nowhere."""
        null = field.cards.get("TNULL")
        if field.code not in "BIJK" or null is None:
            return None
        missing = self._stored(field) == null
        return missing if missing.any() else None

    def _stored(self, field: Field) -> np.ndarray:
        """(nrow, repeat) in the file's own type, text as (nrow,) bytes; before any scaling."""
        form = f"S{field.width}" if field.code == "A" else _NUMPY.get(field.code)
        if form is None:
            raise Malformed(f"column {field.name} has the form {field.cards['TFORM']!r}")
        if field.width == 0:
            return np.empty((self.nrow, 0), dtype="u1" if field.code == "A" else form)
        dtype = np.dtype(form)
        values = (
            np.ndarray(
                (self.nrow, 1 if field.code == "A" else field.repeat),
                dtype,
                buffer=self._bytes,
                offset=field.offset,
                strides=(self.row_bytes, dtype.itemsize),
            )
            if self.nrow
            else np.empty((0, 1 if field.code == "A" else field.repeat), dtype)
        )
        return values[:, 0] if field.code == "A" else values


def _field(header, number: int, offset: int) -> Field:
    cards = {}
    for stem in CARDS:
        value = header.get(f"{stem}{number}")
        if value is not None:
            cards[stem] = value
    form = str(cards.get("TFORM", "")).strip()
    match = re.match(r"(\d{0,9})([LXBIJKAEDCMPQ])", form)
    name = str(cards.get("TTYPE", "")).strip()
    if match is None:
        raise Malformed(f"column {name or number} has the form {form!r}")
    for stem in ("TSCAL", "TZERO"):
        if not isinstance(cards.get(stem, 0), int | float):
            raise Malformed(f"column {name or number} has {stem} {cards[stem]!r}")
    repeat, code = int(match[1] or 1), match[2]
    width = (repeat + 7) // 8 if code == "X" else repeat * _SIZES[code]
    unit = str(cards.get("TUNIT", "")).strip()
    return Field(name, code, repeat, unit, offset, width, cards)
