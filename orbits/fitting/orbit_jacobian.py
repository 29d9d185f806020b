"""Sky positions and velocity shapes of many orbits at once, with their analytic derivatives.

Complex numbers keep this short. The place in the orbital plane is q = X + i Y, and R = q exp(-i m)
turns it by the mean anomaly m at the reference time, so that R depends on k = e exp(i m) without
trouble where e is 0. On the sky north + i east = (p R + conj(n R)) / 2 with
p = a (1 + cos i) exp(i (longitude + node)) and n = a (1 - cos i) exp(i (longitude - node)): two
complex Thiele-Innes constants. The velocity's shape is the real part of exp(i longitude) S with
S = (exp(i v) + e) exp(-i m).
"""

import numpy as np

from ..kepler import eccentric_anomaly

SMALLEST = 1e-9
"""Eccentricity below which the direction of periastron is that of k = SMALLEST."""


def turned_motion(time, log_period, k, *, velocity: bool):
    """R (or S for `velocity`) and its derivatives by ln P and the real and imaginary part of k.

    `time` is (n,) d after the reference, `log_period` and complex `k` are (S,); the result is four
    complex arrays (S, n).
    """
    e = np.maximum(np.abs(k), SMALLEST)[:, None]
    m = np.angle(k)[:, None]
    lag = 2 * np.pi * np.exp(-log_period)[:, None] * time
    E = eccentric_anomaly(m + lag, np.broadcast_to(e, lag.shape))
    c, s = np.cos(E), np.sin(E)
    minor = np.sqrt((1 - e) * (1 + e))
    r = 1 - e * c
    q = c - e + 1j * minor * s
    by_mean = (-s + 1j * minor * c) / r
    if velocity:
        direction = q / r  # exp(i v)
        value = direction + e
        by_e = 1 + 1j * direction * direction.imag * (2 + e * direction.real) / minor**2
        by_mean = 1j * minor * q / r**3
    else:
        value = q
        by_e = -(s**2) / r - 1 + 1j * (-e / minor * s + minor * c * s / r)
    back = np.exp(-1j * m)
    by_phase = (by_mean - 1j * value) * back
    value, by_e, by_mean = value * back, by_e * back, by_mean * back
    cm, sm = np.cos(m), np.sin(m)
    return (
        value,
        -by_mean * lag,
        by_e * cm - by_phase * sm / e,
        by_e * sm + by_phase * cm / e,
    )


def sky(R, p, n):
    """North + i East (S, m) of the turned motion R (S, m) and the complex constants p, n (S,)."""
    return (p[:, None] * R + np.conj(n[:, None] * R)) / 2


def sky_by_constants(R):
    """Derivatives of `sky` by the real and imaginary parts of p and of n: four (S, m)."""
    return R / 2, 1j * R / 2, np.conj(R) / 2, -1j * np.conj(R) / 2


def constants_of(log_axis, inclination, longitude, node):
    """The complex constants p, n (S,) and their derivatives by the four arguments, (4, S) each."""
    a, c, s = np.exp(log_axis), np.cos(inclination), np.sin(inclination)
    up, down = np.exp(1j * (longitude + node)), np.exp(1j * (longitude - node))
    p, n = a * (1 + c) * up, a * (1 - c) * down
    return (
        p,
        n,
        np.stack([p, -a * s * up, 1j * p, 1j * p]),
        np.stack([n, a * s * down, 1j * n, -1j * n]),
    )
