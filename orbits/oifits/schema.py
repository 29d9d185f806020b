"""How the standard describes a table, and the base of the classes that hold one.

A table is a dataclass. Each attribute that stands for a column or a keyword carries what the
standard says about it; the reader, the writer and the validator go by these descriptions.
"""

from dataclasses import dataclass, field, fields, replace
from functools import cache
from typing import Any, ClassVar, Self

import numpy as np

NWAVE = "nwave"
"""Stands for the number of spectral channels in the shape of a column."""

OPEN = "open"
"""Stands for a unit that the standard leaves to the file, which must state one."""

FLUX_ONLY = "flux only"
"""Stands for no unit, unless the amplitudes of the table are correlated fluxes: then the file
states one."""

DTYPES = {
    "L": np.dtype(bool),
    "I": np.dtype(np.int32),  # wider than the file's int16, so that no foreign id can wrap
    "J": np.dtype(np.int32),
    "E": np.dtype(np.float32),
    "D": np.dtype(np.float64),
    "C": np.dtype(np.complex64),
}


@dataclass(frozen=True)
class Column:
    """What the standard says about a column."""

    name: str
    code: str
    """The letter of its TFORM."""
    shape: tuple[int | str, ...]
    """Of one row: () for a scalar, (3,), (NWAVE,), (NWAVE, NWAVE)."""
    unit: str
    since: int
    """The version that introduced it."""
    optional: bool
    width: int
    """Characters of a text column."""
    fill: object
    """What stands for "unknown" where a compulsory column is not given; None if nothing can."""

    def array(self, value: Any) -> np.ndarray:
        """`value` as an array of the type in which this column is held."""
        value = np.asarray(value)
        return value.astype(str if self.code == "A" else DTYPES[self.code], copy=False)


@dataclass(frozen=True)
class Keyword:
    """What the standard says about a header keyword of a table."""

    name: str
    kind: type
    since: int
    optional: bool
    fill: object

    @property
    def compulsory(self) -> bool:
        """Whether a table must have it in every version."""
        return not self.optional and self.since == 1


@dataclass(frozen=True)
class ExtraColumn:
    """A column the standard does not know: kept byte for byte, never interpreted."""

    cards: dict[str, object]
    """Its description: TTYPE, TFORM, TUNIT ... without the number."""
    raw: np.ndarray
    """(nrow, width) uint8."""


def column(code, *shape, unit="", since=1, optional=False, width=1, fill=None) -> Any:
    """A dataclass field for a column; the arguments are the attributes of `Column`."""
    return field(
        default=None, metadata={"column": (code, shape, unit, since, optional, width, fill)}
    )


def keyword(kind, *, since=1, optional=False, fill=None) -> Any:
    """A dataclass field for a keyword; the arguments are the attributes of `Keyword`."""
    return field(default=None, metadata={"keyword": (kind, since, optional, fill)})


@dataclass(kw_only=True, eq=False)
class Table:
    """One binary table. Compulsory columns that have an "unknown" value may be left out.

    Raises
    ------
    ValueError
        If a column or keyword is missing, or a column has the wrong shape.
    """

    extname: ClassVar[str]
    revision: ClassVar[int] = 2
    """OI_REVN of this table in a version 2 file."""

    units: dict[str, str] = field(default_factory=dict)
    """Units of the columns whose unit the standard leaves open, by column name."""
    extra: dict[str, ExtraColumn] = field(default_factory=dict)
    heap: bytes = b""
    """What columns of varying length among `extra` point into."""
    cards: list[tuple[str, object, str]] = field(default_factory=list)
    """Header cards the standard does not know: (keyword, value, comment)."""
    file: str | None = None
    """The file it was read from."""
    hdu: int | None = None
    """Number of the HDU in that file."""
    revn: int | None = None
    """OI_REVN in that file."""

    def __post_init__(self) -> None:
        for known in keywords(type(self)):
            if self[known.name] is None:
                if known.fill is None and known.compulsory:
                    raise ValueError(f"{self.extname}: keyword {known.name} is missing")
                self[known.name] = known.fill
        nrow, nwave = self._size()
        for known in columns(type(self)):
            if self[known.name] is None:
                if not known.optional:
                    self[known.name] = self._unknown(known, nrow, nwave)
                continue
            value = known.array(self[known.name])
            shape = _shape(known, nrow, nwave)
            if value.shape != shape:
                raise ValueError(
                    f"{self.extname}: column {known.name} has shape {value.shape}, not {shape}"
                )
            self[known.name] = value

    def __getitem__(self, name: str) -> Any:
        """The column or keyword that the standard calls `name`."""
        return getattr(self, attribute(name))

    def __setitem__(self, name: str, value: object) -> None:
        setattr(self, attribute(name), value)

    def __len__(self) -> int:
        return self._size()[0]

    @property
    def label(self) -> str:
        """How messages call this table."""
        return self.extname if self.hdu is None else f"{self.extname} (HDU {self.hdu})"

    @property
    def present(self) -> list[Column]:
        """The columns that this table has."""
        return [known for known in columns(type(self)) if self[known.name] is not None]

    def select(self, rows: np.ndarray, channels: np.ndarray | None = None) -> Self:
        """The table with only these rows and, in its spectral columns, these channels.

        Both are boolean or index arrays; `channels` None keeps all of them.
        """
        changes: dict[str, object] = {}
        for known in self.present:
            value = self[known.name][rows]
            for axis, size in enumerate(known.shape, start=1):
                if size == NWAVE and channels is not None:
                    value = value[(slice(None),) * axis + (channels,)]
            changes[attribute(known.name)] = value
        extra = {n: replace(e, raw=e.raw[rows]) for n, e in self.extra.items()}
        return replace(self, **changes, extra=extra)

    def _size(self) -> tuple[int, int]:
        """Rows, and channels of the spectral columns (0 in a table without any)."""
        given = self.present
        if not given:
            raise ValueError(f"{self.extname}: no column is given")
        spectral = next((known for known in given if NWAVE in known.shape), None)
        shape = np.shape(self[spectral.name]) if spectral else ()
        return len(self[given[0].name]), shape[1] if len(shape) > 1 else 0

    def _unknown(self, known: Column, nrow: int, nwave: int) -> np.ndarray:
        """What stands in for a compulsory column that is not given."""
        if known.fill is None:
            raise ValueError(f"{self.extname}: column {known.name} is missing")
        return known.array(np.full(_shape(known, nrow, nwave), known.fill))


def _shape(known: Column, nrow: int, nwave: int) -> tuple[int, ...]:
    return (nrow, *(nwave if size == NWAVE else size for size in known.shape))


def attribute(name: str) -> str:
    """The attribute that holds the column or keyword `name`."""
    return name.lower().replace("-", "_")


@cache
def columns(kind: type[Table]) -> tuple[Column, ...]:
    """The columns that the standard knows in a table of this kind, in its order."""
    return tuple(
        Column(entry.name.upper(), *entry.metadata["column"])
        for entry in fields(kind)
        if "column" in entry.metadata
    )


@cache
def keywords(kind: type[Table]) -> tuple[Keyword, ...]:
    """The keywords that the standard knows in a table of this kind, OI_REVN apart."""
    return tuple(
        Keyword(entry.name.upper().replace("DATE_OBS", "DATE-OBS"), *entry.metadata["keyword"])
        for entry in fields(kind)
        if "keyword" in entry.metadata
    )
