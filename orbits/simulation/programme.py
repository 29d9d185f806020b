"""Carry a scenario out: the nights that its array sees, and the velocities of its stars."""

from collections.abc import Iterator

import astropy.units as u
import numpy as np
from astropy.time import Time

from ..binary import predict
from ..observation import Observation
from ..times import tdb_of_utc
from ..velocities import Velocities
from .nights import blank_night, observe
from .scenario import Scenario


def nights(scenario: Scenario, rng: np.random.Generator) -> Iterator[Observation]:
    """Each night of the programme, with noise; the stars move from exposure to exposure."""
    star, programme = scenario.star, scenario.nights
    for date in programme.dates:
        transit = scenario.array.transit(star.ra, date)
        step = np.arange(programme.exposures) - (programme.exposures - 1) / 2
        blank = blank_night(
            scenario.array,
            scenario.spectrum,
            target=scenario.name,
            ra=star.ra,
            dec=star.dec,
            mjd=transit + step * programme.spacing / 1440.0,
            integration=programme.integration,
        )
        yield observe(blank, lambda blank: model(scenario, blank), scenario.noise, rng)


def model(scenario: Scenario, observation: Observation) -> tuple[np.ndarray, np.ndarray]:
    """V2 and closure phases (rad) of the scenario's stars, exposure by exposure, without noise."""
    light = scenario.light
    v2, t3 = observation.v2, observation.t3
    seen = np.empty(len(v2)), np.empty(len(t3))
    for mjd in np.unique(v2.mjd):
        now = (v2.mjd == mjd, t3.mjd == mjd)
        time = Time(tdb_of_utc(mjd), format="mjd", scale="tdb")
        x, y = (offset.to_value(u.mas) for offset in scenario.elements.offsets(time))
        # All of the night with the stars as they are now: how its baselines turn during an
        # exposure, and blur it, is told by the others.
        predicted = predict(
            observation,
            x=float(x),
            y=float(y),
            contrast=light.contrast,
            diameter=light.companion_diameter,
            primary_diameter=light.primary_diameter,
        )
        for kept, values, mine in zip(seen, predicted, now, strict=True):
            kept[mine] = values[mine]
    return seen


def velocities(scenario: Scenario, rng: np.random.Generator) -> Velocities:
    """Velocities of the stars that have lines, with noise.

    Raises
    ------
    ValueError
        If the scenario takes no velocities.
    """
    plan = scenario.velocities
    if plan is None:
        raise ValueError("the scenario takes no velocities")
    k1, k2 = scenario.amplitudes
    mjd = tdb_of_utc(plan.dates)
    curves = scenario.elements.velocities(
        Time(mjd, format="mjd", scale="tdb"),
        k1=k1 * u.km / u.s,
        k2=k2 * u.km / u.s,
        gamma=scenario.star.systemic_velocity * u.km / u.s,
    )
    parts = []
    for star, (curve, error) in enumerate(
        zip(curves, (plan.primary_error, plan.companion_error), strict=True)
    ):
        if error is None:
            continue
        noise = error * rng.standard_normal(len(mjd))
        parts.append(
            Velocities(
                mjd=mjd,
                velocity=curve.to_value(u.km / u.s) + noise,
                error=np.full(len(mjd), error),
                star=np.full(len(mjd), star),
                instrument=np.full(len(mjd), "", dtype=object),
                source=np.full(len(mjd), "simulated", dtype=object),
            )
        )
    return Velocities.concatenate(parts)
