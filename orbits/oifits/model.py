"""The tables of OIFITS as Python objects: what the standard says about each, said once.

The attributes of a table are the standard's own names in lower case: `vis2data` is the column
VIS2DATA, `date_obs` the keyword DATE-OBS. A missing `fill` means that the value must be given.

Versions 1 (Pauls et al. 2005, PASP 117, 1255) and 2 (Duvert et al. 2017, A&A 597, A8).
"""

# `column` and `keyword` make dataclass fields, so calling them as defaults is meant.
# ruff: noqa: RUF009

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, ClassVar

import numpy as np

from ..observation import sides
from ..problems import Problem
from .schema import FLUX_ONLY, NWAVE, OPEN, Table, column, keyword


@dataclass(kw_only=True, eq=False)
class Target(Table):
    """OI_TARGET: one row a target. Unknown positions, errors and motions are 0."""

    extname: ClassVar[str] = "OI_TARGET"

    target_id: np.ndarray = column("I")
    target: np.ndarray = column("A", width=32)
    raep0: np.ndarray = column("D", unit="deg", fill=0.0)
    decep0: np.ndarray = column("D", unit="deg", fill=0.0)
    equinox: np.ndarray = column("E", unit="yr", fill=2000.0)
    ra_err: np.ndarray = column("D", unit="deg", fill=0.0)
    dec_err: np.ndarray = column("D", unit="deg", fill=0.0)
    sysvel: np.ndarray = column("D", unit="m/s", fill=0.0)
    veltyp: np.ndarray = column("A", width=8, fill="UNKNOWN")
    veldef: np.ndarray = column("A", width=8, fill="OPTICAL")
    pmra: np.ndarray = column("D", unit="deg/yr", fill=0.0)
    pmdec: np.ndarray = column("D", unit="deg/yr", fill=0.0)
    pmra_err: np.ndarray = column("D", unit="deg/yr", fill=0.0)
    pmdec_err: np.ndarray = column("D", unit="deg/yr", fill=0.0)
    parallax: np.ndarray = column("E", unit="deg", fill=0.0)
    para_err: np.ndarray = column("E", unit="deg", fill=0.0)
    spectyp: np.ndarray = column("A", width=32, fill="UNKNOWN")
    category: np.ndarray | None = column("A", width=3, since=2, optional=True)
    """SCI or CAL."""


@dataclass(kw_only=True, eq=False)
class Array(Table):
    """OI_ARRAY: one row a station."""

    extname: ClassVar[str] = "OI_ARRAY"

    arrname: str = keyword(str)
    frame: str = keyword(str, fill="GEOCENTRIC")
    """GEOCENTRIC or SKY."""
    arrayx: float = keyword(float, fill=0.0)
    arrayy: float = keyword(float, fill=0.0)
    arrayz: float = keyword(float, fill=0.0)
    """Centre of the array, m; 0, 0, 0 where unknown."""

    tel_name: np.ndarray = column("A", width=16)
    sta_name: np.ndarray = column("A", width=16)
    sta_index: np.ndarray = column("I")
    diameter: np.ndarray = column("E", unit="m", fill=0.0)
    staxyz: np.ndarray = column("D", 3, unit="m", fill=np.nan)
    """(nrow, 3) relative to the centre, m."""
    fov: np.ndarray = column("D", unit="arcsec", since=2, fill=np.nan)
    fovtype: np.ndarray = column("A", width=6, since=2, fill="FWHM")
    """FWHM or RADIUS."""


@dataclass(kw_only=True, eq=False)
class Wavelength(Table):
    """OI_WAVELENGTH: one row a spectral channel."""

    extname: ClassVar[str] = "OI_WAVELENGTH"

    insname: str = keyword(str)

    eff_wave: np.ndarray = column("E", unit="m")
    """(nwave,) effective wavelength, m. The standard stores single precision."""
    eff_band: np.ndarray = column("E", unit="m", fill=0.0)
    """(nwave,) effective width, m; 0 where unknown."""


@dataclass(kw_only=True, eq=False)
class DataTable(Table):
    """What the tables of data have in common: nrow measurements in nwave channels."""

    quantities: ClassVar[tuple[tuple[str, str, str], ...]]
    """(value, error, correlation index) of each quantity, as column names."""

    @property
    def measured(self) -> list[tuple[str, str, str]]:
        """Those of `quantities` that this table has, with their errors."""
        return [q for q in self.quantities if self[q[0]] is not None and self[q[1]] is not None]


@dataclass(kw_only=True, eq=False)
class BaselineTable(DataTable):
    """What the tables of interferometric data have in common: each row has its baselines."""

    @property
    def legs(self) -> np.ndarray:
        """(nrow, k, 2): u and v of the independent baselines, m; k is 2 for triangles, else 1."""
        return np.stack([self.ucoord, self.vcoord], axis=-1)[:, None, :]

    @property
    def sides(self) -> np.ndarray:
        """(nrow, 1 or 3): lengths of all the projected baselines, m."""
        every = sides(self.legs)
        return np.hypot(every[..., 0], every[..., 1])


@dataclass(kw_only=True, eq=False)
class Vis(BaselineTable):
    """OI_VIS: amplitude and phase of the visibility of a baseline."""

    extname: ClassVar[str] = "OI_VIS"
    quantities: ClassVar = (
        ("VISAMP", "VISAMPERR", "CORRINDX_VISAMP"),
        ("VISPHI", "VISPHIERR", "CORRINDX_VISPHI"),
        ("RVIS", "RVISERR", "CORRINDX_RVIS"),
        ("IVIS", "IVISERR", "CORRINDX_IVIS"),
    )

    date_obs: str = keyword(str)
    arrname: str | None = keyword(str, since=2)
    insname: str = keyword(str)
    corrname: str | None = keyword(str, since=2, optional=True)
    amptyp: str | None = keyword(str, since=2, optional=True)
    """absolute, differential or correlated flux."""
    phityp: str | None = keyword(str, since=2, optional=True)
    """absolute or differential."""
    amporder: int | None = keyword(int, since=2, optional=True)
    phiorder: int | None = keyword(int, since=2, optional=True)

    target_id: np.ndarray = column("I")
    time: np.ndarray = column("D", unit="s", fill=0.0)
    mjd: np.ndarray = column("D", unit="day")
    int_time: np.ndarray = column("D", unit="s", fill=0.0)
    visamp: np.ndarray = column("D", NWAVE, unit=FLUX_ONLY, fill=np.nan)
    visamperr: np.ndarray = column("D", NWAVE, unit=FLUX_ONLY, fill=np.nan)
    corrindx_visamp: np.ndarray | None = column("J", since=2, optional=True)
    visphi: np.ndarray = column("D", NWAVE, unit="deg", fill=np.nan)
    visphierr: np.ndarray = column("D", NWAVE, unit="deg", fill=np.nan)
    corrindx_visphi: np.ndarray | None = column("J", since=2, optional=True)
    visrefmap: np.ndarray | None = column("L", NWAVE, NWAVE, since=2, optional=True)
    rvis: np.ndarray | None = column("D", NWAVE, unit=OPEN, since=2, optional=True)
    rviserr: np.ndarray | None = column("D", NWAVE, unit=OPEN, since=2, optional=True)
    corrindx_rvis: np.ndarray | None = column("J", since=2, optional=True)
    ivis: np.ndarray | None = column("D", NWAVE, unit=OPEN, since=2, optional=True)
    iviserr: np.ndarray | None = column("D", NWAVE, unit=OPEN, since=2, optional=True)
    corrindx_ivis: np.ndarray | None = column("J", since=2, optional=True)
    ucoord: np.ndarray = column("D", unit="m")
    vcoord: np.ndarray = column("D", unit="m")
    sta_index: np.ndarray = column("I", 2)
    flag: np.ndarray = column("L", NWAVE, fill=False)


@dataclass(kw_only=True, eq=False)
class Vis2(BaselineTable):
    """OI_VIS2: squared visibility of a baseline."""

    extname: ClassVar[str] = "OI_VIS2"
    quantities: ClassVar = (("VIS2DATA", "VIS2ERR", "CORRINDX_VIS2DATA"),)

    date_obs: str = keyword(str)
    arrname: str | None = keyword(str, since=2)
    insname: str = keyword(str)
    corrname: str | None = keyword(str, since=2, optional=True)

    target_id: np.ndarray = column("I")
    time: np.ndarray = column("D", unit="s", fill=0.0)
    mjd: np.ndarray = column("D", unit="day")
    int_time: np.ndarray = column("D", unit="s", fill=0.0)
    vis2data: np.ndarray = column("D", NWAVE)
    vis2err: np.ndarray = column("D", NWAVE)
    corrindx_vis2data: np.ndarray | None = column("J", since=2, optional=True)
    ucoord: np.ndarray = column("D", unit="m")
    vcoord: np.ndarray = column("D", unit="m")
    sta_index: np.ndarray = column("I", 2)
    """(nrow, 2): the baseline is the second station minus the first."""
    flag: np.ndarray = column("L", NWAVE, fill=False)
    """True: bad, not to be used."""


@dataclass(kw_only=True, eq=False)
class T3(BaselineTable):
    """OI_T3: amplitude and phase of the bispectrum of a triangle of stations A, B, C."""

    extname: ClassVar[str] = "OI_T3"
    quantities: ClassVar = (
        ("T3AMP", "T3AMPERR", "CORRINDX_T3AMP"),
        ("T3PHI", "T3PHIERR", "CORRINDX_T3PHI"),
    )

    date_obs: str = keyword(str)
    arrname: str | None = keyword(str, since=2)
    insname: str = keyword(str)
    corrname: str | None = keyword(str, since=2, optional=True)

    target_id: np.ndarray = column("I")
    time: np.ndarray = column("D", unit="s", fill=0.0)
    mjd: np.ndarray = column("D", unit="day")
    int_time: np.ndarray = column("D", unit="s", fill=0.0)
    t3amp: np.ndarray = column("D", NWAVE, fill=np.nan)
    """NaN, with its error, where only the phase was measured."""
    t3amperr: np.ndarray = column("D", NWAVE, fill=np.nan)
    corrindx_t3amp: np.ndarray | None = column("J", since=2, optional=True)
    t3phi: np.ndarray = column("D", NWAVE, unit="deg")
    t3phierr: np.ndarray = column("D", NWAVE, unit="deg")
    corrindx_t3phi: np.ndarray | None = column("J", since=2, optional=True)
    u1coord: np.ndarray = column("D", unit="m")
    v1coord: np.ndarray = column("D", unit="m")
    """Side A to B."""
    u2coord: np.ndarray = column("D", unit="m")
    v2coord: np.ndarray = column("D", unit="m")
    """Side B to C."""
    sta_index: np.ndarray = column("I", 3)
    flag: np.ndarray = column("L", NWAVE, fill=False)

    @property
    def legs(self) -> np.ndarray:
        """(nrow, 2, 2): u and v of the sides A to B and B to C, m."""
        first = np.stack([self.u1coord, self.v1coord], axis=-1)
        return np.stack([first, np.stack([self.u2coord, self.v2coord], axis=-1)], axis=1)


@dataclass(kw_only=True, eq=False)
class Flux(DataTable):
    """OI_FLUX: spectrum of the target, calibrated (CALSTAT C) or per station (U)."""

    extname: ClassVar[str] = "OI_FLUX"
    revision: ClassVar[int] = 1
    quantities: ClassVar = (("FLUXDATA", "FLUXERR", "CORRINDX_FLUXDATA"),)

    date_obs: str = keyword(str)
    insname: str = keyword(str)
    arrname: str | None = keyword(str, optional=True)
    corrname: str | None = keyword(str, optional=True)
    fov: float | None = keyword(float, optional=True)
    fovtype: str | None = keyword(str, optional=True)
    calstat: str = keyword(str)

    target_id: np.ndarray = column("I")
    mjd: np.ndarray = column("D", unit="day")
    int_time: np.ndarray = column("D", unit="s", fill=0.0)
    fluxdata: np.ndarray = column("D", NWAVE, unit=OPEN)
    fluxerr: np.ndarray = column("D", NWAVE, unit=OPEN)
    corrindx_fluxdata: np.ndarray | None = column("J", optional=True)
    sta_index: np.ndarray | None = column("I", optional=True)
    flag: np.ndarray = column("L", NWAVE, fill=False)


@dataclass(kw_only=True, eq=False)
class Corr(Table):
    """OI_CORR: correlations between data, above the diagonal of a symmetric matrix."""

    extname: ClassVar[str] = "OI_CORR"
    revision: ClassVar[int] = 1

    corrname: str = keyword(str)
    ndata: int = keyword(int)

    iindx: np.ndarray = column("J")
    jindx: np.ndarray = column("J")
    corr: np.ndarray = column("D")


@dataclass(kw_only=True, eq=False)
class Inspol(Table):
    """OI_INSPOL: Jones matrices of the instrument; kept, not used."""

    extname: ClassVar[str] = "OI_INSPOL"
    revision: ClassVar[int] = 1

    date_obs: str = keyword(str)
    npol: int = keyword(int)
    arrname: str = keyword(str)
    orient: str = keyword(str)
    model: str = keyword(str)

    target_id: np.ndarray = column("I")
    insname: np.ndarray = column("A", width=16)
    mjd_obs: np.ndarray = column("D", unit="day")
    mjd_end: np.ndarray = column("D", unit="day")
    jxx: np.ndarray = column("C", NWAVE)
    jyy: np.ndarray = column("C", NWAVE)
    jxy: np.ndarray = column("C", NWAVE)
    jyx: np.ndarray = column("C", NWAVE)
    sta_index: np.ndarray = column("I")


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
    comments: list[str] = field(default_factory=list)
    others: list[OtherHDU] = field(default_factory=list)
    version: int = 2
    files: tuple[str, ...] = ()
    """The files it was read from."""
    problems: list[Problem] = field(default_factory=list)
    """What departed from the standard when it was read."""
    clashes: list[Problem] = field(default_factory=list)
    """What did not agree between the files that it was joined from."""

    @property
    def source(self) -> str:
        """How messages call it: the names of its files."""
        return ", ".join(self.files)

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

    def write(self, path: str | Path, *, force: bool = False) -> None:
        """Write a version 2 file; see `orbits.oifits.writing.write`."""
        from .writing import write

        write(self, path, force=force)
