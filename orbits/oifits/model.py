"""The tables of OIFITS as Python objects: what the standard says about each, said once.

Every table is a dataclass whose attributes are the standard's own names in lower case
(`vis2data` is the column VIS2DATA, `date_obs` the keyword DATE-OBS). The description attached to
each attribute drives the reader, the writer and the validator.

Versions 1 (Pauls et al. 2005, PASP 117, 1255) and 2 (Duvert et al. 2017, A&A 597, A8).
"""

# Columns are described by what the field calls below return, which is never shared or changed.
# ruff: noqa: RUF009

from dataclasses import dataclass, field, fields, replace
from functools import cache
from typing import Any, ClassVar, Self

import numpy as np

from .problems import Problem

NWAVE = "nwave"
"""Stands for the number of spectral channels in the shape of a column."""

DTYPES = {
    "L": np.dtype(bool),
    "I": np.dtype(np.int32),  # wider than the file's int16, so that no foreign id can wrap
    "J": np.dtype(np.int32),
    "E": np.dtype(np.float32),
    "D": np.dtype(np.float64),
    "C": np.dtype(np.complex64),
    "A": np.dtype(str),
}


@dataclass(frozen=True)
class Column:
    """What the standard says about a column."""

    name: str
    code: str
    shape: tuple[int | str, ...]
    """Of one row: () for a scalar, (3,), (NWAVE,), (NWAVE, NWAVE)."""
    unit: str
    """The unit of the standard; "" for none, "free" where the file must state one."""
    since: int
    optional: bool
    width: int
    """Characters of a text column."""
    fill: object
    """What stands for "unknown" where a compulsory column is not given; None if nothing can."""


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
        """Whether every table has it, whatever its version."""
        return not self.optional and self.since == 1


@dataclass(frozen=True)
class ExtraColumn:
    """A column the standard does not know: kept byte for byte, never interpreted."""

    cards: dict[str, object]
    """Its description: TTYPE, TFORM, TUNIT ... without the number."""
    raw: np.ndarray
    """(nrow, width) uint8."""


def _column(code, *shape, unit="", since=1, optional=False, width=1, fill=None) -> Any:
    return field(
        default=None,
        metadata={"column": (code, shape, unit, since, optional, width, fill)},
    )


def _keyword(kind, *, since=1, optional=False, fill=None) -> Any:
    return field(default=None, metadata={"keyword": (kind, since, optional, fill)})


@dataclass(kw_only=True, eq=False)
class Table:
    """One binary table. Compulsory columns that have an "unknown" value may be left out.

    Raises
    ------
    ValueError
        If a column is missing or has the wrong shape.
    """

    extname: ClassVar[str]
    revision: ClassVar[int] = 2
    """OI_REVN of this table in a version 2 file."""

    units: dict[str, str] = field(default_factory=dict)
    """Units of the columns whose unit the standard leaves open, by column name."""
    extra: dict[str, ExtraColumn] = field(default_factory=dict)
    cards: list[tuple[str, object, str]] = field(default_factory=list)
    """Header cards the standard does not know: (keyword, value, comment)."""
    hdu: int | None = None
    """Number of the HDU in the file it was read from."""
    revn: int | None = None
    """OI_REVN in the file it was read from."""

    def __post_init__(self) -> None:
        for keyword in keywords(type(self)):
            if getattr(self, attribute(keyword.name)) is None:
                if keyword.fill is None and keyword.compulsory:
                    raise ValueError(f"{self.extname}: keyword {keyword.name} is missing")
                setattr(self, attribute(keyword.name), keyword.fill)
        known = columns(type(self))
        given = [c for c in known if getattr(self, attribute(c.name)) is not None]
        if not given:
            raise ValueError(f"{self.extname}: no column is given")
        nrow = np.shape(getattr(self, attribute(given[0].name)))[0]
        nwave = self._channels()
        for column in known:
            value = getattr(self, attribute(column.name))
            if value is None:
                if column.optional:
                    continue
                if column.fill is None:
                    raise ValueError(f"{self.extname}: column {column.name} is missing")
                value = column.fill
                shape = (nrow, *(nwave if s == NWAVE else s for s in column.shape))
                value = np.full(shape, value, dtype=_dtype(column, value))
            value = np.asarray(value)
            value = value.astype(_dtype(column, value), copy=False)
            shape = (nrow, *(nwave if s == NWAVE else s for s in column.shape))
            if value.shape != shape:
                raise ValueError(
                    f"{self.extname}: column {column.name} has shape {value.shape}, not {shape}"
                )
            setattr(self, attribute(column.name), value)

    def __len__(self) -> int:
        return len(getattr(self, attribute(columns(type(self))[0].name)))

    def _channels(self) -> int:
        """NWAVE: the second axis of the first spectral column that is given."""
        for column in columns(type(self)):
            value = getattr(self, attribute(column.name))
            if NWAVE in column.shape and value is not None:
                return np.shape(value)[1] if np.ndim(value) > 1 else 0
        return 0

    @property
    def label(self) -> str:
        """How messages call this table."""
        return self.extname if self.hdu is None else f"{self.extname} (HDU {self.hdu})"

    def select(self, rows: np.ndarray, channels: np.ndarray | None = None) -> Self:
        """The table with only these rows and, in its spectral columns, these channels."""
        changes: dict[str, object] = {}
        for column in columns(type(self)):
            value = getattr(self, attribute(column.name))
            if value is None:
                continue
            value = value[rows]
            if channels is not None:
                for axis, size in enumerate(column.shape, start=1):
                    if size == NWAVE:
                        value = np.compress(channels, value, axis=axis)
            changes[attribute(column.name)] = value
        extra = {n: replace(e, raw=e.raw[rows]) for n, e in self.extra.items()}
        return replace(self, **changes, extra=extra)


def attribute(name: str) -> str:
    """The attribute that holds the column or keyword `name`."""
    return name.lower().replace("-", "_")


@cache
def columns(kind: type[Table]) -> tuple[Column, ...]:
    """The columns that the standard knows in a table of this kind, in its order."""
    return tuple(
        Column(f.name.upper(), *f.metadata["column"])
        for f in fields(kind)
        if "column" in f.metadata
    )


@cache
def keywords(kind: type[Table]) -> tuple[Keyword, ...]:
    """The keywords that the standard knows in a table of this kind, OI_REVN apart."""
    return tuple(
        Keyword(f.name.upper().replace("DATE_OBS", "DATE-OBS"), *f.metadata["keyword"])
        for f in fields(kind)
        if "keyword" in f.metadata
    )


def _dtype(column: Column, value: object) -> np.dtype:
    return np.asarray(value).dtype if column.code == "A" else DTYPES[column.code]


@dataclass(kw_only=True, eq=False)
class Target(Table):
    """OI_TARGET: one row a target. Unknown positions, errors and motions are 0."""

    extname: ClassVar[str] = "OI_TARGET"

    target_id: np.ndarray = _column("I")
    target: np.ndarray = _column("A", width=32)
    raep0: np.ndarray = _column("D", unit="deg", fill=0.0)
    decep0: np.ndarray = _column("D", unit="deg", fill=0.0)
    equinox: np.ndarray = _column("E", unit="yr", fill=2000.0)
    ra_err: np.ndarray = _column("D", unit="deg", fill=0.0)
    dec_err: np.ndarray = _column("D", unit="deg", fill=0.0)
    sysvel: np.ndarray = _column("D", unit="m/s", fill=0.0)
    veltyp: np.ndarray = _column("A", width=8, fill="UNKNOWN")
    veldef: np.ndarray = _column("A", width=8, fill="OPTICAL")
    pmra: np.ndarray = _column("D", unit="deg/yr", fill=0.0)
    pmdec: np.ndarray = _column("D", unit="deg/yr", fill=0.0)
    pmra_err: np.ndarray = _column("D", unit="deg/yr", fill=0.0)
    pmdec_err: np.ndarray = _column("D", unit="deg/yr", fill=0.0)
    parallax: np.ndarray = _column("E", unit="deg", fill=0.0)
    para_err: np.ndarray = _column("E", unit="deg", fill=0.0)
    spectyp: np.ndarray = _column("A", width=32, fill="UNKNOWN")
    category: np.ndarray | None = _column("A", width=3, since=2, optional=True)
    """SCI or CAL."""


@dataclass(kw_only=True, eq=False)
class Array(Table):
    """OI_ARRAY: one row a station."""

    extname: ClassVar[str] = "OI_ARRAY"

    arrname: str = _keyword(str)
    frame: str = _keyword(str, fill="GEOCENTRIC")
    """GEOCENTRIC or SKY."""
    arrayx: float = _keyword(float, fill=0.0)
    arrayy: float = _keyword(float, fill=0.0)
    arrayz: float = _keyword(float, fill=0.0)
    """Centre of the array, m; 0, 0, 0 where unknown."""

    tel_name: np.ndarray = _column("A", width=16)
    sta_name: np.ndarray = _column("A", width=16)
    sta_index: np.ndarray = _column("I")
    diameter: np.ndarray = _column("E", unit="m", fill=0.0)
    staxyz: np.ndarray = _column("D", 3, unit="m", fill=np.nan)
    """(nrow, 3) relative to the centre, m."""
    fov: np.ndarray = _column("D", unit="arcsec", since=2, fill=np.nan)
    fovtype: np.ndarray = _column("A", width=6, since=2, fill="FWHM")
    """FWHM or RADIUS."""


@dataclass(kw_only=True, eq=False)
class Wavelength(Table):
    """OI_WAVELENGTH: one row a spectral channel."""

    extname: ClassVar[str] = "OI_WAVELENGTH"

    insname: str = _keyword(str)

    eff_wave: np.ndarray = _column("E", unit="m")
    """(nwave,) effective wavelength, m. The standard stores single precision."""
    eff_band: np.ndarray = _column("E", unit="m", fill=0.0)
    """(nwave,) effective width, m; 0 where unknown."""


@dataclass(kw_only=True, eq=False)
class DataTable(Table):
    """What the tables of data have in common: nrow measurements in nwave channels."""

    quantities: ClassVar[tuple[tuple[str, str, str], ...]]
    """(value, error, correlation index) of each quantity, as column names."""


@dataclass(kw_only=True, eq=False)
class Vis(DataTable):
    """OI_VIS: amplitude and phase of the visibility of a baseline."""

    extname: ClassVar[str] = "OI_VIS"
    quantities: ClassVar = (
        ("VISAMP", "VISAMPERR", "CORRINDX_VISAMP"),
        ("VISPHI", "VISPHIERR", "CORRINDX_VISPHI"),
        ("RVIS", "RVISERR", "CORRINDX_RVIS"),
        ("IVIS", "IVISERR", "CORRINDX_IVIS"),
    )

    date_obs: str = _keyword(str)
    arrname: str | None = _keyword(str, since=2)
    insname: str = _keyword(str)
    corrname: str | None = _keyword(str, since=2, optional=True)
    amptyp: str | None = _keyword(str, since=2, optional=True)
    """absolute, differential or correlated flux."""
    phityp: str | None = _keyword(str, since=2, optional=True)
    """absolute or differential."""
    amporder: int | None = _keyword(int, since=2, optional=True)
    phiorder: int | None = _keyword(int, since=2, optional=True)

    target_id: np.ndarray = _column("I")
    time: np.ndarray = _column("D", unit="s", fill=0.0)
    mjd: np.ndarray = _column("D", unit="day")
    int_time: np.ndarray = _column("D", unit="s", fill=0.0)
    visamp: np.ndarray = _column("D", NWAVE, fill=np.nan)
    visamperr: np.ndarray = _column("D", NWAVE, fill=np.nan)
    corrindx_visamp: np.ndarray | None = _column("J", since=2, optional=True)
    visphi: np.ndarray = _column("D", NWAVE, unit="deg", fill=np.nan)
    visphierr: np.ndarray = _column("D", NWAVE, unit="deg", fill=np.nan)
    corrindx_visphi: np.ndarray | None = _column("J", since=2, optional=True)
    visrefmap: np.ndarray | None = _column("L", NWAVE, NWAVE, since=2, optional=True)
    rvis: np.ndarray | None = _column("D", NWAVE, unit="free", since=2, optional=True)
    rviserr: np.ndarray | None = _column("D", NWAVE, unit="free", since=2, optional=True)
    corrindx_rvis: np.ndarray | None = _column("J", since=2, optional=True)
    ivis: np.ndarray | None = _column("D", NWAVE, unit="free", since=2, optional=True)
    iviserr: np.ndarray | None = _column("D", NWAVE, unit="free", since=2, optional=True)
    corrindx_ivis: np.ndarray | None = _column("J", since=2, optional=True)
    ucoord: np.ndarray = _column("D", unit="m")
    vcoord: np.ndarray = _column("D", unit="m")
    sta_index: np.ndarray = _column("I", 2)
    flag: np.ndarray = _column("L", NWAVE, fill=False)


@dataclass(kw_only=True, eq=False)
class Vis2(DataTable):
    """OI_VIS2: squared visibility of a baseline."""

    extname: ClassVar[str] = "OI_VIS2"
    quantities: ClassVar = (("VIS2DATA", "VIS2ERR", "CORRINDX_VIS2DATA"),)

    date_obs: str = _keyword(str)
    arrname: str | None = _keyword(str, since=2)
    insname: str = _keyword(str)
    corrname: str | None = _keyword(str, since=2, optional=True)

    target_id: np.ndarray = _column("I")
    time: np.ndarray = _column("D", unit="s", fill=0.0)
    mjd: np.ndarray = _column("D", unit="day")
    int_time: np.ndarray = _column("D", unit="s", fill=0.0)
    vis2data: np.ndarray = _column("D", NWAVE)
    vis2err: np.ndarray = _column("D", NWAVE)
    corrindx_vis2data: np.ndarray | None = _column("J", since=2, optional=True)
    ucoord: np.ndarray = _column("D", unit="m")
    vcoord: np.ndarray = _column("D", unit="m")
    sta_index: np.ndarray = _column("I", 2)
    """(nrow, 2): the baseline is the second station minus the first."""
    flag: np.ndarray = _column("L", NWAVE, fill=False)
    """True: bad, not to be used."""


@dataclass(kw_only=True, eq=False)
class T3(DataTable):
    """OI_T3: amplitude and phase of the bispectrum of a triangle of stations A, B, C."""

    extname: ClassVar[str] = "OI_T3"
    quantities: ClassVar = (
        ("T3AMP", "T3AMPERR", "CORRINDX_T3AMP"),
        ("T3PHI", "T3PHIERR", "CORRINDX_T3PHI"),
    )

    date_obs: str = _keyword(str)
    arrname: str | None = _keyword(str, since=2)
    insname: str = _keyword(str)
    corrname: str | None = _keyword(str, since=2, optional=True)

    target_id: np.ndarray = _column("I")
    time: np.ndarray = _column("D", unit="s", fill=0.0)
    mjd: np.ndarray = _column("D", unit="day")
    int_time: np.ndarray = _column("D", unit="s", fill=0.0)
    t3amp: np.ndarray = _column("D", NWAVE, fill=np.nan)
    """NaN, with its error, where only the phase was measured."""
    t3amperr: np.ndarray = _column("D", NWAVE, fill=np.nan)
    corrindx_t3amp: np.ndarray | None = _column("J", since=2, optional=True)
    t3phi: np.ndarray = _column("D", NWAVE, unit="deg")
    t3phierr: np.ndarray = _column("D", NWAVE, unit="deg")
    corrindx_t3phi: np.ndarray | None = _column("J", since=2, optional=True)
    u1coord: np.ndarray = _column("D", unit="m")
    v1coord: np.ndarray = _column("D", unit="m")
    """Side A to B."""
    u2coord: np.ndarray = _column("D", unit="m")
    v2coord: np.ndarray = _column("D", unit="m")
    """Side B to C."""
    sta_index: np.ndarray = _column("I", 3)
    flag: np.ndarray = _column("L", NWAVE, fill=False)


@dataclass(kw_only=True, eq=False)
class Flux(DataTable):
    """OI_FLUX: spectrum of the target, calibrated (CALSTAT C) or per station (U)."""

    extname: ClassVar[str] = "OI_FLUX"
    revision: ClassVar[int] = 1
    quantities: ClassVar = (("FLUXDATA", "FLUXERR", "CORRINDX_FLUXDATA"),)

    date_obs: str = _keyword(str)
    insname: str = _keyword(str)
    arrname: str | None = _keyword(str, optional=True)
    corrname: str | None = _keyword(str, optional=True)
    fov: float | None = _keyword(float, optional=True)
    fovtype: str | None = _keyword(str, optional=True)
    calstat: str = _keyword(str)

    target_id: np.ndarray = _column("I")
    mjd: np.ndarray = _column("D", unit="day")
    int_time: np.ndarray = _column("D", unit="s", fill=0.0)
    fluxdata: np.ndarray = _column("D", NWAVE, unit="free")
    fluxerr: np.ndarray = _column("D", NWAVE, unit="free")
    corrindx_fluxdata: np.ndarray | None = _column("J", optional=True)
    sta_index: np.ndarray | None = _column("I", optional=True)
    flag: np.ndarray = _column("L", NWAVE, fill=False)


@dataclass(kw_only=True, eq=False)
class Corr(Table):
    """OI_CORR: correlations between data, above the diagonal of a symmetric matrix."""

    extname: ClassVar[str] = "OI_CORR"
    revision: ClassVar[int] = 1

    corrname: str = _keyword(str)
    ndata: int = _keyword(int)

    iindx: np.ndarray = _column("J")
    jindx: np.ndarray = _column("J")
    corr: np.ndarray = _column("D")


@dataclass(kw_only=True, eq=False)
class Inspol(Table):
    """OI_INSPOL: Jones matrices of the instrument; kept, not used."""

    extname: ClassVar[str] = "OI_INSPOL"
    revision: ClassVar[int] = 1

    date_obs: str = _keyword(str)
    npol: int = _keyword(int)
    arrname: str = _keyword(str)
    orient: str = _keyword(str)
    model: str = _keyword(str)

    target_id: np.ndarray = _column("I")
    insname: np.ndarray = _column("A", width=16)
    mjd_obs: np.ndarray = _column("D", unit="day")
    mjd_end: np.ndarray = _column("D", unit="day")
    jxx: np.ndarray = _column("C", NWAVE)
    jyy: np.ndarray = _column("C", NWAVE)
    jxy: np.ndarray = _column("C", NWAVE)
    jyx: np.ndarray = _column("C", NWAVE)
    sta_index: np.ndarray = _column("I")


KINDS: dict[str, type[Table]] = {
    kind.extname: kind for kind in (Target, Array, Wavelength, Vis, Vis2, T3, Flux, Corr, Inspol)
}


@dataclass(frozen=True)
class OtherHDU:
    """An extension that is no OIFITS table: kept byte for byte."""

    name: str
    raw: bytes


@dataclass(kw_only=True, eq=False)
class OIFile:
    """All that an OIFITS file holds.

    Example
    -------
    One squared visibility in two channels::

        file = OIFile(
            target=Target(target_id=[1], target=["Harrow 7"], raep0=[84.1], decep0=[-1.2]),
            arrays=[Array(arrname="SIM", tel_name=["T1", "T2"], sta_name=["A", "B"],
                          sta_index=[1, 2], staxyz=[[0, 0, 0], [0, 100, 0]])],
            wavelengths=[Wavelength(insname="SIM_H", eff_wave=[1.6e-6, 1.7e-6],
                                    eff_band=[5e-8, 5e-8])],
            data=[Vis2(insname="SIM_H", arrname="SIM", date_obs="2026-03-14", target_id=[1],
                       mjd=[61113.1], int_time=[60.0], vis2data=[[0.9, 0.8]],
                       vis2err=[[0.01, 0.01]], ucoord=[80.0], vcoord=[60.0],
                       sta_index=[[1, 2]])],
        )
        file.write("night.oifits")
    """

    target: Target
    wavelengths: list[Wavelength]
    data: list[DataTable]
    """Vis, Vis2, T3 and Flux tables, in the order of the file."""
    arrays: list[Array] = field(default_factory=list)
    correlations: list[Corr] = field(default_factory=list)
    polarisations: list[Inspol] = field(default_factory=list)
    primary: dict[str, object] = field(default_factory=dict)
    """Keywords of the primary header; the writer fills in those that version 2 demands."""
    history: list[str] = field(default_factory=list)
    others: list[OtherHDU] = field(default_factory=list)
    version: int = 2
    source: str = ""
    """The file it was read from."""
    problems: list[Problem] = field(default_factory=list)
    """What departed from the standard when it was read."""

    @property
    def tables(self) -> list[Table]:
        """Every OIFITS table, in the order in which they are written."""
        return [
            self.target,
            *self.arrays,
            *self.wavelengths,
            *self.correlations,
            *self.data,
            *self.polarisations,
        ]

    def wavelength(self, insname: str) -> Wavelength:
        """The spectral set-up of that name."""
        return next(table for table in self.wavelengths if table.insname == insname)

    def array(self, arrname: str | None) -> Array | None:
        """The array of that name; None where there is none."""
        return next((table for table in self.arrays if table.arrname == arrname), None)

    def of(self, kind: type[Table]) -> list[Any]:
        """The data tables of one kind."""
        return [table for table in self.data if isinstance(table, kind)]

    def write(self, path, *, force: bool = False) -> None:
        """Write a version 2 file; see `orbits.oifits.writing.write`."""
        from .writing import write

        write(self, path, force=force)
