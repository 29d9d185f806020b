"""How position angles turn when the equinox that North is counted from moves."""

import numpy as np


def turn(ra: float, dec: float, equinox: float, other: np.ndarray) -> np.ndarray:
    """What to add to a position angle of `equinox` to have it of the equinoxes `other`, deg.

    Rigorous, by the rotation of the tangent plane at the star (`ra`, `dec`, ICRS, deg) under the
    precession of Capitaine, Wallace & Chapront (2003, A&A 412, 567). Equinoxes are Julian years.
    To first order it is 0.0055675 deg per year times sin(ra) / cos(dec). The star's own motion,
    which turns the meridian at the star as well, is not applied.
    """
    others = np.atleast_1d(np.asarray(other, dtype=float))
    a, d = np.radians(ra), np.radians(dec)
    star = np.array([np.cos(d) * np.cos(a), np.cos(d) * np.sin(a), np.sin(d)])
    north = np.array([-np.sin(d) * np.cos(a), -np.sin(d) * np.sin(a), np.cos(d)])
    before = _pole_angle(equinox, star, north)
    angles = np.array([_pole_angle(year, star, north) for year in others]) - before
    return ((np.degrees(angles) + 180) % 360 - 180).reshape(np.shape(other))


def _pole_angle(year: float, star: np.ndarray, north: np.ndarray) -> float:
    """Position angle of the ICRS North at the star, counted from the North of the equinox, rad."""
    import erfa

    matrix = erfa.pmat06(2451545.0, (year - 2000.0) * 365.25)
    place, direction = matrix @ star, matrix @ north
    east = np.array([-place[1], place[0], 0.0]) / np.hypot(place[0], place[1])
    return float(np.arctan2(direction @ east, direction @ np.cross(place, east)))
