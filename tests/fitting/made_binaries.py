"""Invented binaries and their data, for the tests of orbit fits."""

import astropy.units as u
import numpy as np
from astropy.time import Time

from orbits import Elements, Positions, Velocities
from orbits.positions import ellipse_covariance

KMS = u.km / u.s


def text(count):
    return np.full(count, "", dtype=object)


def binary(**given):
    """An orbit of 104 d; any element may be given in d, mas and deg."""
    values = {"period": 104.0, "periastron": 60010.0, "eccentricity": 0.35, "semimajor_axis": 20.0,
              "inclination": 137.0, "node": 40.0, "argument": 88.0} | given  # fmt: skip
    return Elements(
        period=values["period"] * u.day,
        periastron=Time(values["periastron"], format="mjd", scale="tdb"),
        eccentricity=values["eccentricity"],
        semimajor_axis=values["semimajor_axis"] * u.mas,
        inclination=values["inclination"] * u.deg,
        node=values["node"] * u.deg,
        argument=values["argument"] * u.deg,
    )


def seen(elements, count, rng, *, error=0.1, span=1500.0):
    """Positions with error ellipses of 1 : 0.6 in random directions; `error` may be one each."""
    mjd = np.sort(60000 + rng.uniform(0, span, count))
    x, y = elements.offsets(Time(mjd, format="mjd", scale="tdb"))
    size = np.broadcast_to(error, count)
    covariance = ellipse_covariance(size, 0.6 * size, rng.uniform(0, 180, count))
    noise = np.einsum("nij,nj->ni", np.linalg.cholesky(covariance), rng.normal(size=(count, 2)))
    return Positions(
        mjd=mjd,
        xy=np.column_stack([x.to_value(u.mas), y.to_value(u.mas)]) + noise,
        covariance=covariance,
        weight=np.ones(count),
        night=np.array([f"night {i}" for i in range(count)], dtype=object),
        instrument=text(count),
        source=text(count),
        contrast=np.full(count, np.nan),
        contrast_error=np.full(count, np.nan),
    )


def moving(elements, count, rng, *, k1=25.0, k2=27.0, gamma=12.0, error=0.3, span=1500.0):
    """Velocities of both stars at the same times, the primary's first."""
    mjd = np.sort(60000 + rng.uniform(0, span, count))
    both = elements.velocities(
        Time(mjd, format="mjd", scale="tdb"), k1=k1 * KMS, k2=k2 * KMS, gamma=gamma * KMS
    )
    clean = np.concatenate([v.to_value(KMS) for v in both])
    return Velocities(
        mjd=np.tile(mjd, 2),
        velocity=clean + error * rng.normal(size=2 * count),
        error=np.full(2 * count, error),
        star=np.repeat([0, 1], count),
        instrument=text(2 * count),
        source=text(2 * count),
    )


def with_false_places(positions, rng, *, away=8.0):
    """Each night also at a wrong place, both equally probable beforehand; the true ones first."""
    count = len(positions)
    false = positions.xy + away * rng.normal(size=(count, 2))
    double = positions.select(np.tile(np.arange(count), 2))
    values = {name: getattr(double, name) for name in vars(double)}
    values["xy"] = np.concatenate([positions.xy, false])
    values["weight"] = np.full(2 * count, 0.5)
    return Positions(**values)
