"""Small epochs made by hand: baselines and triangles as a test wants them."""

import numpy as np

from orbits.observation import Observable, Observation


def table(legs, wavelength, *, bandwidth=0.0, value=0.0, error=1.0, integration=0.0, mjd=0.0):
    """An `Observable` of rows `legs` (n, k, 2) in m, each in all channels `wavelength` (m)."""
    legs, wavelength = np.asarray(legs, float), np.atleast_1d(np.asarray(wavelength, float))
    rows, channels = len(legs), wavelength.size
    n = rows * channels
    return Observable(
        legs=np.repeat(legs, channels, axis=0),
        wavelength=np.tile(wavelength, rows),
        bandwidth=np.full(n, bandwidth, dtype=float),
        value=np.full(n, value, dtype=float),
        error=np.full(n, error, dtype=float),
        mjd=np.repeat(np.zeros(rows) + np.asarray(mjd, float) if rows else np.empty(0), channels),
        integration=np.full(n, integration, dtype=float),
        stations=np.tile(np.arange(legs.shape[1] + 1), (n, 1)),
        row=np.repeat(np.arange(rows), channels),
        channel=np.tile(np.arange(channels), rows),
        instrument=np.zeros(n, dtype=int),
    )


def epoch(v2_legs=(), t3_legs=(), wavelength=1.6e-6, **common):
    """An `Observation` of baselines (n, 2) and triangles (n, 2, 2), m."""
    v2 = np.reshape(np.asarray(v2_legs, float), (-1, 1, 2))
    t3 = np.reshape(np.asarray(t3_legs, float), (-1, 2, 2))
    return Observation(
        target="test",
        instruments=("TEST",),
        v2=table(v2, wavelength, **common),
        t3=table(t3, wavelength, **common),
    )


def wrapped(angle):
    """`angle` (rad) brought into (-pi, pi]."""
    return np.angle(np.exp(1j * np.asarray(angle)))
