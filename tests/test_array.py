"""Stations on the ground to (u, v) as a star sees them."""

import erfa
import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import EarthLocation
from numpy.testing import assert_allclose

from orbits.simulation.array import Array, greenwich_sidereal_angle

SITE = Array(
    name="Test ridge",
    latitude=-24.6,
    longitude=-70.4,
    stations=("A", "B", "C"),
    local=np.array([[0.0, 0.0, 0.0], [80.0, 10.0, 2.0], [-30.0, 95.0, -1.0]]),
    diameter=1.0,
)


def test_sidereal_time_agrees_with_erfa():
    """Against the IAU 2006 mean sidereal time of the SOFA routines (ERFA)."""
    mjd = np.array([51544.5, 55000.25, 60310.9, 62000.0])
    expected = np.degrees(erfa.gmst06(2400000.5, mjd, 2400000.5, mjd))
    # IAU 1982 without its second-order term (T^2 * 0.0004 deg) and the 2006 precession change.
    assert_allclose(greenwich_sidereal_angle(mjd), expected, atol=1e-3)


def test_geocentric_axes_agree_with_astropy():
    """Up is the geodetic vertical, and East, North, up make a right-handed set.

    The normal of the ellipsoid is the limit of the difference of two heights.
    """
    low, high = (
        EarthLocation.from_geodetic(SITE.longitude * u.deg, SITE.latitude * u.deg, h * u.m)
        for h in (0.0, 1000.0)
    )
    up = np.array([(getattr(high, k) - getattr(low, k)).to_value(u.km) for k in "xyz"])
    east, north, vertical = SITE._axes.T
    assert_allclose(vertical, up, atol=1e-9)
    assert_allclose(np.cross(east, north), vertical, atol=1e-15)
    assert east[2] == 0
    assert north[2] > 0


def test_baselines_are_the_projection_on_the_sky():
    """u and v are components along the unit vectors towards East and North at the star."""
    ra, dec, mjd = 83.0, -31.0, np.array([60310.1, 60310.2])
    projected = SITE.projected(ra, dec, mjd)
    for k, angle in enumerate(np.radians(ra - greenwich_sidereal_angle(mjd))):
        # At the instant, the star stands over geocentric longitude RA - GMST.
        d = np.radians(dec)
        star = np.array([np.cos(d) * np.cos(angle), np.cos(d) * np.sin(angle), np.sin(d)])
        east = np.cross([0, 0, 1], star) / np.cos(d)
        north = np.cross(star, east)
        expected = np.stack([SITE.geocentric @ east, SITE.geocentric @ north], axis=-1)
        assert_allclose(projected[k], expected, atol=1e-10)


def test_star_in_the_zenith_sees_the_ground_plan():
    """At transit of a star with declination = latitude, u is East and v is North."""
    mjd = SITE.transit(123.0, 60310.0)
    projected = SITE.projected(123.0, SITE.latitude, np.array([mjd]))[0]
    assert_allclose(projected, SITE.local[:, :2], atol=1e-5)
    assert SITE.hour_angle(123.0, np.array([mjd]))[0] == pytest.approx(0.0, abs=1e-6)
    assert abs(mjd - 60310.0) <= 0.5
