"""The turn of position angles against rigorous precession computed elsewhere, and first order."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from orbits.precession import turn

# Rigorous precession, by astropy's FK5 frames, of a pair 1 arcsec apart from equinox 2000. The axes
# of ICRS and of J2000 differ by up to 0.02 arcsec, which turns angles by up to 5e-6 deg.
RIGOROUS = [
    (90.0, 60.0, 2050.0, 0.55661),
    (90.0, 60.0, 1900.0, -1.11327),
    (270.0, 45.0, 2050.0, -0.39362),
    (200.0, -1.45, 1900.0, 0.18461),
    (219.9, -60.835, 2050.0, -0.37127),
    (219.9, -60.835, 1900.0, 0.71346),
    (30.0, 80.0, 1900.0, -1.49985),
]


@pytest.mark.parametrize(("ra", "dec", "year", "expected"), RIGOROUS)
def test_rigorous_precession(ra, dec, year, expected):
    assert_allclose(turn(ra, dec, 2000.0, year), expected, atol=1e-5)


def test_first_order():
    """0.0055675 deg a year times sin(ra) / cos(dec): n = 20.0431 arcsec a year at 2000."""
    for ra, dec in ((10.0, 20.0), (140.0, -35.0), (300.0, 5.0)):
        slope = (turn(ra, dec, 2000.0, 2000.5) - turn(ra, dec, 2000.0, 1999.5)) / 1.0
        # Today's n is smaller by 5.9e-5 of it, 20.0419 arcsec; the second order cancels here.
        expected = 20.0431 / 3600 * np.sin(np.radians(ra)) / np.cos(np.radians(dec))
        assert_allclose(slope, expected, rtol=1e-4)


def test_there_and_back():
    ahead, back = turn(219.9, -60.8, 1900.0, 2050.0), turn(219.9, -60.8, 2050.0, 1900.0)
    assert_allclose(ahead + back, 0, atol=1e-12)
    assert turn(100.0, 10.0, 1950.0, np.array([1950.0, 2000.0]))[0] == 0
