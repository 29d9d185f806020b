"""Time scales against published values and the reference library."""

import numpy as np
import pytest

from orbits.times import tdb_of_utc, tdb_of_year, utc_of_tdb


def test_tdb_is_ahead_of_utc_by_leap_seconds():
    """TT - UTC = 32.184 s + 37 leap seconds since 2017 (IERS Bulletin C); TDB = TT within 2 ms."""
    # 1e-11 d is the spacing of MJD in double precision; 2 ms are 2.3e-8 d.
    assert (tdb_of_utc(60000.0) - 60000.0) * 86400 == pytest.approx(69.184, abs=2.6e-3)


def test_utc_round_trip():
    mjd = np.array([-30000.25, 15020.0, 41317.5, 60310.123456, 90000.0])
    # Twice the spacing of doubles near 1e5 d.
    np.testing.assert_allclose(utc_of_tdb(tdb_of_utc(mjd)), mjd, rtol=0, atol=3e-11)


def test_besselian_and_julian_years():
    """B1950.0 = JD 2433282.42345905 (Lieske 1979, A&A 73, 282); J2000.0 = JD 2451545.0."""
    assert tdb_of_year(1950.0, "besselian") == pytest.approx(33281.92345905, abs=1e-8)
    assert tdb_of_year(2000.0, "julian") == 51544.5
