"""Small epochs made by hand: baselines and triangles as a test wants them."""

from dataclasses import replace

import numpy as np

from orbits.binary import Scene, model, predict
from orbits.companion.covariance import Covariance
from orbits.observation import OBSERVABLES, Channels, Exposures, Observable, Observation
from orbits.sampling import Sampling
from orbits.simulation.array import Array
from orbits.simulation.export import night_file
from orbits.simulation.nights import Spectrum, blank_night, observe


def table(legs, wavelength, *, bandwidth=0.0, value=0.0, error=1.0, integration=0.0, mjd=0.0):
    """An `Observable` of rows `legs` (n, k, 2) in m, each in all channels `wavelength` (m)."""
    legs, wavelength = np.asarray(legs, float), np.atleast_1d(np.asarray(wavelength, float))
    rows = len(legs)
    exposures = Exposures(
        legs=legs,
        mjd=np.zeros(rows) + np.asarray(mjd, float) if rows else np.empty(0),
        integration=np.full(rows, integration, dtype=float),
        stations=np.tile(np.arange(legs.shape[1] + 1), (rows, 1)),
        instrument=np.zeros(rows, dtype=int),
    )
    channels = Channels(
        wavelength=wavelength,
        bandwidth=np.full(wavelength.size, bandwidth, dtype=float),
        instrument=np.zeros(wavelength.size, dtype=int),
    )
    return Observable.filled(exposures, channels, value=value, error=error)


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


def four_stations(*, exposures=1, channels=1, stations=4, wavelength=(1.5e-6, 1.8e-6), size=90.0):
    """An epoch without values: an irregular array under which the sky turns between exposures.

    Errors are 0.01 in V2 and 0.5 deg in closure phase.
    """
    ground = np.random.default_rng(5).uniform(-size / 2, size / 2, (stations, 2))
    waves = np.linspace(*wavelength, channels) if channels > 1 else np.mean(wavelength)
    pairs = [(i, j) for i in range(stations) for j in range(i + 1, stations)]
    triangles = [(i, j, k) for i, j in pairs for k in range(j + 1, stations)]
    sides, legs = [], []
    for exposure in range(exposures):
        angle = 0.35 * exposure
        turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
        at = ground @ turn.T
        sides += [[at[j] - at[i]] for i, j in pairs]
        legs += [[at[j] - at[i], at[k] - at[j]] for i, j, k in triangles]
    tables = {}
    for name, rows, members, error in (
        ("v2", sides, pairs, 0.01),
        ("t3", legs, triangles, np.radians(0.5)),
    ):
        mjd = 60000.0 + np.repeat(np.arange(exposures), len(members)) / 24
        tables[name] = table(rows, waves, error=error, mjd=mjd)
        tables[name].exposures.stations[:] = np.tile(members, (exposures, 1))
    return Observation(
        target="test",
        instruments=("TEST",),
        stations=tuple("ABCDEFGH"[:stations]),
        **tables,
    )


def with_all_observables(blank):
    """`blank` with amplitudes and phases of triangles and baselines where it has others of them."""
    return replace(
        blank,
        t3amp=replace(blank.t3, error=np.full(len(blank.t3), 0.02)),
        visamp=replace(blank.v2, error=np.full(len(blank.v2), 0.01)),
        visphi=replace(blank.v2, error=np.full(len(blank.v2), np.radians(0.5))),
    )


def fill(blank, rng=None, scene=None, *, errors=None, **values):
    """`blank` with the values of a scene, and noise from `rng` unless it is None."""
    scene = Scene() if scene is None else scene
    sampling = Sampling.of(blank, radius=60.0)
    data, _ = model(scene, scene.vector(values), sampling)
    if rng is not None:
        v2 = data[: len(blank.v2)]
        data = data + Covariance.of(blank, sampling, errors, v2).draw(rng)
    tables, first = {}, 0
    for name in OBSERVABLES:
        table = getattr(blank, name)
        value = data[first : first + len(table)]
        phase = name in ("t3", "visphi")
        tables[name] = replace(table, value=wrapped(value) if phase else value)
        first += len(table)
    return replace(blank, **tables)


def offset_in_sigma(candidate, x, y):
    """How far a solution lies from (x, y), mas, in units of its error ellipse."""
    d = np.array([candidate.x_mas - x, candidate.y_mas - y])
    return np.sqrt(d @ np.linalg.solve(candidate.covariance_xy_mas2, d))


def night_of(target, noise, rng, *, channels, **star):
    """An `OIFile` of two exposures in the K band, with four telescopes on real baselines."""
    ground = np.array([[0, 0, 0], [48, 22, 0], [-35, 81, 0], [66, 103, 0]], float)
    array = Array(
        name="FOUR", latitude=-24.6, longitude=-70.4, diameter=1.0, stations=tuple("ABCD"),
        local=ground,
    )  # fmt: skip
    spectrum = Spectrum.even("K", 2.0e-6, 2.4e-6, channels)
    mjd = 60000.1 + np.arange(2) / 24
    blank = blank_night(array, spectrum, target=target, ra=40.0, dec=-30.0, mjd=mjd)
    taken = observe(blank, lambda one: predict(one, **star), noise, rng)
    return night_file(taken, array, spectrum, ra=40.0, dec=-30.0)
