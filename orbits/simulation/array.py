"""An interferometer on the ground: stations, and the baselines a star sees of them.

An aperture mask on one telescope is an array too, whose stations turn with the pupil.
"""

from dataclasses import dataclass
from itertools import combinations

import numpy as np


@dataclass(frozen=True, eq=False, kw_only=True)
class Array:
    """Stations about a centre on the Earth."""

    name: str
    latitude: float
    """Geodetic latitude, deg."""
    longitude: float
    """Degrees, East positive."""
    stations: tuple[str, ...]
    local: np.ndarray
    """(n, 3) East, North and up of each station from the centre, m."""
    diameter: float
    """Aperture of a station, m."""

    @property
    def geocentric(self) -> np.ndarray:
        """(n, 3) offsets along the geocentric axes of OI_ARRAY, m.

        X points to latitude 0, longitude 0; Y to longitude 90 deg East; Z to the pole.
        """
        return self.local @ self._axes.T

    @property
    def centre(self) -> np.ndarray:
        """(3,) geocentric coordinates of the array's centre on a sphere of 6371 km, m."""
        return 6.371e6 * self._axes[:, 2]

    @property
    def pairs(self) -> np.ndarray:
        """(n_baselines, 2) indices of the stations of each baseline."""
        return np.array(list(combinations(range(len(self.stations)), 2)))

    @property
    def triangles(self) -> np.ndarray:
        """(n_triangles, 3) indices of the stations of each triangle."""
        return np.array(list(combinations(range(len(self.stations)), 3)), dtype=int).reshape(-1, 3)

    @property
    def _axes(self) -> np.ndarray:
        """Columns: the directions East, North and up at the centre, in geocentric axes."""
        lat, lon = np.radians([self.latitude, self.longitude])
        east = [-np.sin(lon), np.cos(lon), 0.0]
        north = [-np.sin(lat) * np.cos(lon), -np.sin(lat) * np.sin(lon), np.cos(lat)]
        up = [np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)]
        return np.array([east, north, up]).T

    def projected(self, ra: float, dec: float, mjd: np.ndarray) -> np.ndarray:
        """Station coordinates (u east, v north) as seen from a star, m.

        A baseline is the difference of two: second station minus first
        (Thompson, Moran & Swenson 2017, Interferometry and Synthesis, eq. 4.1).

        Parameters
        ----------
        ra, dec : float
            Direction of the star, deg.
        mjd : ndarray of shape (n_times,)
            UTC, taken for UT1 (they differ by less than a second).

        Returns
        -------
        ndarray of shape (n_times, n_stations, 2)
        """
        h = np.radians(greenwich_sidereal_angle(mjd) - ra)[:, None]
        d = np.radians(dec)
        x, y, z = self.geocentric.T
        u = x * np.sin(h) + y * np.cos(h)
        v = -x * np.sin(d) * np.cos(h) + y * np.sin(d) * np.sin(h) + z * np.cos(d)
        return np.stack([u, v], axis=-1)

    def hour_angle(self, ra: float, mjd: np.ndarray) -> np.ndarray:
        """Local hour angle of right ascension `ra` (deg), h in [-12, 12)."""
        angle = greenwich_sidereal_angle(mjd) + self.longitude - ra
        return ((angle + 180.0) % 360.0 - 180.0) / 15.0

    def transit(self, ra: float, mjd: float) -> float:
        """The MJD nearest to `mjd` at which right ascension `ra` (deg) culminates."""
        return float(mjd - self.hour_angle(ra, np.array([mjd]))[0] / SIDEREAL_HOURS_PER_DAY)


SIDEREAL_HOURS_PER_DAY = 24.0 * 1.00273790935


def greenwich_sidereal_angle(mjd: np.ndarray) -> np.ndarray:
    """Greenwich mean sidereal time as an angle, deg (IAU 1982; Aoki et al. 1982, A&A 105, 359).

    The terms of second order, below 0.001 deg in this century, are left out.
    """
    return (280.46061837 + 360.98564736629 * (np.asarray(mjd) - 51544.5)) % 360.0
