"""Time scales: files speak UTC, orbits run in TDB. Converted here and nowhere else."""

import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from astropy.time import Time

YEAR_KINDS = {"besselian": "byear", "julian": "jyear"}


def tdb_of_utc(mjd: np.ndarray) -> np.ndarray:
    """MJD TDB of MJD UTC."""
    with _quiet_offline_astropy() as Time:
        return Time(np.asarray(mjd, dtype=float), format="mjd", scale="utc").tdb.mjd


def utc_of_tdb(mjd: np.ndarray) -> np.ndarray:
    """MJD UTC of MJD TDB."""
    with _quiet_offline_astropy() as Time:
        return Time(np.asarray(mjd, dtype=float), format="mjd", scale="tdb").utc.mjd


def mjd_utc(time: "Time") -> float:
    """MJD UTC of an astropy Time on any scale."""
    with _quiet_offline_astropy():
        return float(time.utc.mjd)


def iso_utc(time: "Time") -> str:
    """Date and time, UTC, of an astropy Time on any scale, such as 2026-03-14T03:12:00.000."""
    with _quiet_offline_astropy():
        return str(time.utc.isot)


def tdb_of_year(year: np.ndarray, kind: str) -> np.ndarray:
    """MJD TDB of a date in years; `kind` is "besselian" or "julian".

    Besselian: Lieske 1979, A&A 73, 282. Orbits of visual binaries are catalogued in these years.
    """
    with _quiet_offline_astropy() as Time:
        return Time(np.asarray(year, dtype=float), format=YEAR_KINDS[kind], scale="tdb").mjd


def date_of_utc(mjd: float) -> str:
    """Calendar date of MJD UTC, as YYYY-MM-DD."""
    with _quiet_offline_astropy() as Time:
        return Time(mjd, format="mjd", scale="utc").strftime("%Y-%m-%d")


@contextmanager
def _quiet_offline_astropy() -> Iterator[type]:
    """astropy's Time, never asking the network, nor warning of years without leap seconds.

    Before 1960 and some years from now UTC is not defined to the second; an orbit does not care.
    """
    from astropy.utils import iers

    with iers.conf.set_temp("auto_download", False):
        from astropy.time import Time

        with warnings.catch_warnings():
            warnings.filterwarnings("ignore", message=".*dubious year.*")
            yield Time
