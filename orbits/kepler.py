"""Kepler's equation and the anomalies, for arrays of plain numbers (angles in rad).

M is the mean anomaly, E the eccentric anomaly and v the true anomaly.
"""

import math

import numpy as np

from .compiled import compiled

# 2 pi as a sum; the first two parts have 27 significant bits: k times them is exact for k < 2**26.
_TURN = 2 * math.pi
_TURN_HIGH = 6.283185303211212
_TURN_MIDDLE = 3.968374295837407e-09
_TURN_LOW = 2.2884754904439327e-17


def mean_anomaly(mjd: np.ndarray, period: np.ndarray, periastron: np.ndarray) -> np.ndarray:
    """Mean anomaly in [-pi, pi] at the times `mjd` (d) for a period (d) and a periastron (MJD)."""
    phase = (np.asarray(mjd) - periastron) / period
    return _TURN * (phase - np.rint(phase))


def eccentric_anomaly(mean_anomaly: np.ndarray, eccentricity: np.ndarray) -> np.ndarray:
    """Solve M = E - e sin E for E in [-pi, pi], whatever turn M is in; the arguments broadcast.

    The starting value of Markley (1995, Celest. Mech. Dyn. Astron. 63, 101) is good to 1e-3; a
    step of Halley's method brings that to 1e-9 and one of Newton's to the last digit, the residual
    being evaluated so that it keeps its digits where E is small and e close to 1.

    Raises
    ------
    ValueError
        If an eccentricity is outside [0, 1).
    """
    e = np.asarray(eccentricity, dtype=np.float64)
    if not np.all((e >= 0) & (e < 1)):
        raise ValueError(f"eccentricity must lie in [0, 1), got {eccentricity!r}")
    m, e = np.broadcast_arrays(np.asarray(mean_anomaly, dtype=np.float64), e)
    solution = np.empty(m.shape)
    # Copies, since a broadcast array of one element would otherwise be passed on as it is.
    _solve_all(m.flatten(), e.flatten(), solution.reshape(-1))
    return solution


def true_anomaly(eccentric_anomaly: np.ndarray, eccentricity: np.ndarray) -> np.ndarray:
    """True anomaly in [-pi, pi] of an eccentric anomaly."""
    half = np.asarray(eccentric_anomaly) / 2
    e = np.asarray(eccentricity)
    return 2 * np.arctan2(np.sqrt(1 + e) * np.sin(half), np.sqrt(1 - e) * np.cos(half))


def orbital_plane(
    mjd: np.ndarray, period: np.ndarray, periastron: np.ndarray, eccentricity: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Place in the orbital plane in units of the semimajor axis: X towards periastron, and Y."""
    e = np.asarray(eccentricity)
    anomaly = eccentric_anomaly(mean_anomaly(mjd, period, periastron), e)
    return np.cos(anomaly) - e, np.sqrt((1 - e) * (1 + e)) * np.sin(anomaly)


@compiled
def solve(m, e):
    """E of one mean anomaly in [-pi, pi] and one eccentricity in [0, 1)."""
    sign = 1.0 if m >= 0 else -1.0
    m = abs(m)
    # Markley (1995): the sine replaced by a Pade approximant makes the equation a cubic.
    alpha = (3 * math.pi**2 + 1.6 * math.pi * (math.pi - m) / (1 + e)) * (1 / (math.pi**2 - 6))
    gap = 1 - e
    d = 3 * gap + alpha * e
    r = (3 * alpha * d * (d - gap) + m * m) * m
    q = 2 * alpha * d * gap - m * m
    w = _rough_cube_root(r + math.sqrt(q * q * q + r * r)) ** 2
    E = (2 * r * w / (w * w + w * q + q * q) + m) / d
    E = E if E > 0 else 0.0  # m = 0, where the cubic's expressions may be 0/0
    sine, cosine = _sine_cosine(E)
    f0 = _excess(E, sine, m, e)
    f1 = gap + e * (1 - cosine)
    step = -f0 * f1 / (f1 * f1 - 0.5 * f0 * e * sine)
    E += step
    # |step| < 1e-3: sine and cosine at the new E from the old ones, by Taylor's series.
    square = step * step
    small_sine = step * (1 - square / 6 * (1 - square / 20))
    small_versine = square / 2 * (1 - square / 12)
    sine, cosine = (
        sine + (cosine * small_sine - sine * small_versine),
        cosine - (sine * small_sine + cosine * small_versine),
    )
    f0 = _excess(E, sine, m, e)
    return sign * (E - f0 / (gap + e * (1 - cosine)))


@compiled
def _excess(E, sine, m, e):
    """E - e sin E - m, with E - sin E by its series where the difference would lose digits."""
    s = E * E
    tail = 1 - s / 156 * (1 - s / 210 * (1 - s / 272 * (1 - s / 342)))
    cubic = (E * s / 6) * (1 - s / 20 * (1 - s / 42 * (1 - s / 72 * (1 - s / 110 * tail))))
    return (E - m) - e * sine if E > 1.2 else ((1 - e) * E - m) + e * cubic


@compiled
def _sine_cosine(E):
    """Sine and cosine of E in [0, pi] to 1.2e-16, by Taylor's series about the quarter turns."""
    quarter = _round(E * (2 / math.pi))
    x = (E - quarter * 1.5707963267948966) - quarter * 6.123233995736766e-17
    s = x * x
    t = 1 - s * (1 / 110) * (1 - s * (1 / 156) * (1 - s * (1 / 210)))
    sine = x - x * s * (1 / 6) * (1 - s * (1 / 20) * (1 - s * (1 / 42) * (1 - s * (1 / 72) * t)))
    t = 1 - s * (1 / 90) * (1 - s * (1 / 132) * (1 - s * (1 / 182) * (1 - s * (1 / 240))))
    cosine = 1 - s * 0.5 * (1 - s * (1 / 12) * (1 - s * (1 / 30) * (1 - s * (1 / 56) * t)))
    if quarter == 1.0:
        return cosine, -sine
    return (-sine, -cosine) if quarter == 2.0 else (sine, cosine)


@compiled
def _rough_cube_root(x):
    """Cube root of x >= 0 to 1e-4: a third of the bits of x, then one step of Halley's method."""
    third = np.int64(np.float64(np.float64(x).view(np.int64)) * (1 / 3))
    guess = np.int64(third + 0x2A9F7893782DA1CE).view(np.float64)
    cube = guess * guess * guess
    return guess * (cube + 2 * x) / (2 * cube + x)


@compiled
def _round(x):
    """The nearest whole number of |x| < 2**51: adding 1.5 * 2**52 leaves no room for a fraction."""
    return (x + 6755399441055744.0) - 6755399441055744.0


@compiled
def _solve_all(m, e, solution):
    for i in range(m.size):
        turns = _round(m[i] * (1 / _TURN))
        reduced = ((m[i] - turns * _TURN_HIGH) - turns * _TURN_MIDDLE) - turns * _TURN_LOW
        solution[i] = solve(reduced, e[i])
