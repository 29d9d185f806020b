"""Kepler's equation against a handbook and 50-digit arithmetic."""

import math

import mpmath
import numpy as np
import pytest
from numpy.testing import assert_allclose

from orbits import kepler

# Meeus, Astronomical Algorithms (2nd ed. 1998), ch. 30: E for M = 5 deg, to the 1e-6 deg printed.
MEEUS_5_DEG = {
    0.1: 5.554589,
    0.2: 6.246908,
    0.3: 7.134960,
    0.4: 8.313903,
    0.5: 9.950063,
    0.6: 12.356653,
    0.7: 16.167990,
    0.8: 22.656579,
    0.9: 33.344447,
    0.99: 45.361023,
}


@pytest.mark.parametrize(("e", "expected"), MEEUS_5_DEG.items())
def test_meeus_table_for_five_degrees(e, expected):
    found = np.degrees(kepler.eccentric_anomaly(np.radians(5.0), e))
    assert_allclose(found, expected, rtol=0, atol=0.51e-6)  # half a unit of the last digit printed


def test_meeus_hard_cases():
    # Same chapter: e = 0.99 with M = 2 deg and M = 0.2 rad.
    assert_allclose(
        np.degrees(kepler.eccentric_anomaly(np.radians(2.0), 0.99)), 32.361007, atol=0.51e-6
    )
    assert_allclose(kepler.eccentric_anomaly(0.2, 0.99), 1.066997365282, atol=0.51e-12)


def exact(m, e):
    """E to 50 digits, by bisection to the neighbourhood and Newton's method."""
    with mpmath.workdps(50):
        m, e = mpmath.mpf(float(m)), mpmath.mpf(float(e))
        low, high = m - e, m + e
        for _ in range(60):
            middle = (low + high) / 2
            low, high = (middle, high) if middle - e * mpmath.sin(middle) < m else (low, middle)
        E = (low + high) / 2
        for _ in range(8):
            E -= (E - e * mpmath.sin(E) - m) / (1 - e * mpmath.cos(E))
        return E


def test_last_digits_against_fifty_digit_arithmetic(rng):
    """Within 3 units of the last place, for all e up to 1 - 1e-8 and M down to 1e-12."""
    e = np.concatenate([rng.uniform(0, 1, 200), 1 - 10 ** rng.uniform(-8, -1, 400)])
    m = np.concatenate([rng.uniform(0, np.pi, 300), np.pi * 10 ** rng.uniform(-12, 0, 300)])
    found = kepler.eccentric_anomaly(m, e)
    units = [
        float((mpmath.mpf(float(E)) - exact(M, ecc)) / mpmath.mpf(float(np.spacing(E))))
        for E, M, ecc in zip(found, m, e, strict=True)
    ]
    assert np.abs(units).max() < 3


def test_residual_in_extended_precision(rng):
    """|E - e sin E - M| <= 1e-15 rad, the residual itself evaluated with 64-bit mantissas."""
    if np.finfo(np.longdouble).nmant < 63:
        pytest.skip("this machine has no extended precision")
    e = np.concatenate([rng.uniform(0, 1, 100_000), 1 - 10 ** rng.uniform(-8, 0, 100_000)])
    m = rng.uniform(-np.pi, np.pi, e.size)
    E, long_e = (v.astype(np.longdouble) for v in (kepler.eccentric_anomaly(m, e), e))
    assert float(np.abs(E - long_e * np.sin(E) - m).max()) <= 1e-15


def test_any_turn(rng):
    """M far from 0 solves the same equation modulo 2 pi, to 1e-13 for e up to 0.99.

    M of 1e4 rad is itself known to 2e-12 only as a number, but exactly as a double, and the check
    is made in 50 digits.
    """
    for m, e in zip(rng.uniform(-1e4, 1e4, 200), rng.uniform(0, 0.99, 200), strict=True):
        E = float(kepler.eccentric_anomaly(m, e))
        assert -math.pi <= E <= math.pi
        with mpmath.workdps(50):
            excess = (mpmath.mpf(E) - mpmath.mpf(e) * mpmath.sin(E) - mpmath.mpf(m)) / (
                2 * mpmath.pi
            )
            assert abs(excess - mpmath.nint(excess)) * 2 * mpmath.pi < 1e-13


@pytest.mark.parametrize("e", [0.0, 0.5, 1 - 1e-8])
def test_periastron_and_apastron(e):
    assert kepler.eccentric_anomaly(0.0, e) == 0
    assert_allclose(kepler.eccentric_anomaly(np.pi, e), np.pi, rtol=4e-16)


def test_circle_is_the_identity(rng):
    m = rng.uniform(-np.pi, np.pi, 1000)
    assert_allclose(kepler.eccentric_anomaly(m, 0.0), m, rtol=4e-16)


@pytest.mark.parametrize("e", [-0.1, 1.0, 1.5, np.nan])
def test_no_ellipse(e):
    with pytest.raises(ValueError, match=r"eccentricity must lie in \[0, 1\)"):
        kepler.eccentric_anomaly(1.0, e)


def test_shapes_broadcast():
    assert kepler.eccentric_anomaly(np.zeros((3, 1)), np.zeros(4)).shape == (3, 4)
    assert kepler.eccentric_anomaly(np.zeros((2, 0)), 0.5).shape == (2, 0)


def test_true_anomaly_keeps_the_radius(rng):
    """r = 1 - e cos E = (1 - e^2) / (1 + e cos v): the two equations of the ellipse agree."""
    E, e = rng.uniform(-3, 3, 500), rng.uniform(0, 0.99, 500)
    v = kepler.true_anomaly(E, e)
    assert_allclose((1 - e**2) / (1 + e * np.cos(v)), 1 - e * np.cos(E), rtol=1e-12)
    assert np.all(np.sign(v) == np.sign(E))
