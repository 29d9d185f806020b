"""Where the companion will be, how fast the stars move, and when something happens."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from .bundle import ONE_SIGMA, Bundle, Orbits
from .positions import offsets, position_angle
from .rows import Rows

_GRID = np.linspace(-np.pi, np.pi, 721)


@dataclass(frozen=True, eq=False, kw_only=True)
class Ephemeris(Rows):
    """m rows, one per date. Errors are half of the 68% interval of the draws; NaN without draws."""

    mjd: np.ndarray
    """(m,) TDB."""
    separation: np.ndarray
    """(m,) mas."""
    separation_error: np.ndarray
    position_angle: np.ndarray
    """(m,) deg, from the North of the equinox asked for."""
    position_angle_error: np.ndarray
    east: np.ndarray
    """(m,) offset, mas."""
    east_error: np.ndarray
    north: np.ndarray
    """(m,) offset, mas."""
    north_error: np.ndarray
    primary_velocity: np.ndarray
    """(m,) km/s; NaN where unknown."""
    primary_velocity_error: np.ndarray
    companion_velocity: np.ndarray
    """(m,) km/s; NaN where unknown."""
    companion_velocity_error: np.ndarray


@dataclass(frozen=True, kw_only=True)
class Event:
    """Something that happens once per orbit."""

    kind: str
    mjd: float
    """TDB."""
    error: float
    """d; NaN where nothing is known of the errors of the orbit."""
    separation: float
    """mas."""
    position_angle: float
    """deg, from the North that the node of the orbit refers to."""


def predict(bundle: Bundle, mjd: np.ndarray, *, turn: np.ndarray | float = 0.0) -> Ephemeris:
    """Places and velocities at the times `mjd` (m,), TDB.

    `turn` (deg, one or one per date) is added to all position angles: what precession does to the
    node of the orbit (`orbits.precession.turn`).
    """
    mjd = np.atleast_1d(np.asarray(mjd, dtype=float))
    best, draws = _quantities(bundle.best, mjd, turn), _quantities(bundle.draws, mjd, turn)
    columns = {"mjd": mjd}
    for name, values in best.items():
        columns[name] = values[0]
        columns[f"{name}_error"] = _half_interval(draws[name], values[0], angle="angle" in name)
    return Ephemeris(**columns)


def events(bundle: Bundle, start: float, end: float) -> list[Event]:
    """What happens from `start` up to, but without, `end` (MJD TDB), in order of time.

    Periastron, the passages of the nodes and of the line of sight (conjunctions), and the extremes
    of the separation on the sky. Which node and which conjunction it is, is said only where the
    node is known to be the ascending one. A circular orbit has no periastron. Nothing is found
    for an orbit known from velocities alone.
    """
    best = bundle.best
    found: list[Event] = []
    if not bundle.on_the_sky:
        return found
    for kind, where in _happenings(best, ascending=bundle.ascending):
        anomaly = where(best)
        period, moment = best.period[0], _moment(best, anomaly, 0.0)[0]
        x, y = best.at_anomaly(anomaly)
        first = np.ceil((start - moment) / period)
        for turn in np.arange(first, np.ceil((end - moment) / period)):
            when = moment + turn * period
            found.append(
                Event(
                    kind=kind,
                    mjd=float(when),
                    error=_timing_error(bundle, where, when),
                    separation=float(np.hypot(x, y)[0, 0]),
                    position_angle=float(position_angle(x, y)[0, 0]),
                )
            )
    return sorted(found, key=lambda event: event.mjd)


def _quantities(orbits: Orbits, mjd: np.ndarray, turn) -> dict[str, np.ndarray]:
    """Each (n, m)."""
    x, y = orbits.offsets(mjd)
    separation, angle = np.hypot(x, y), (position_angle(x, y) + turn) % 360.0
    x, y = offsets(separation, angle)
    primary, companion = orbits.velocities(mjd)
    return {
        "separation": separation,
        "position_angle": angle,
        "east": x,
        "north": y,
        "primary_velocity": primary,
        "companion_velocity": companion,
    }


def _half_interval(draws: np.ndarray, best: np.ndarray, *, angle: bool) -> np.ndarray:
    """(m,) half of the 68% interval of draws (n, m), angles on the turn nearest to the best."""
    if len(draws) == 0 or np.isnan(draws).all():
        return np.full(np.shape(best), np.nan)
    off = draws - best
    if angle:
        off = (off + 180) % 360 - 180
    low, high = np.percentile(off, ONE_SIGMA, axis=0)
    return (high - low) / 2


_Where = Callable[[Orbits], np.ndarray]
"""Gives for n orbits the eccentric anomaly (n,), rad, at which something happens."""


def _happenings(best: Orbits, *, ascending: bool) -> list[tuple[str, _Where]]:
    """Names of the events of one orbit, and where they happen."""
    names = (
        ("ascending node", "descending node", "companion behind", "companion in front")
        if ascending
        else ("node", "node", "conjunction", "conjunction")
    )
    found: list[tuple[str, _Where]] = []
    if best.eccentricity[0] > 0:
        found.append(("periastron", lambda orbits: np.zeros(len(orbits))))
    for name, longitude in zip(names, (0.0, 180.0, 90.0, 270.0), strict=True):
        found.append((name, lambda orbits, longitude=longitude: orbits.anomaly_at(longitude)))
    return found + _extremes(best)


def _extremes(best: Orbits) -> list[tuple[str, _Where]]:
    """Where the separation on the sky is greatest or smallest, of its neighbourhood at least."""
    x, y = best.at_anomaly(_GRID)
    if np.ptp(np.hypot(x, y)) < 1e-9 * best.semimajor_axis[0]:
        return []  # a circle seen from above has none
    slope, _ = _slope(best, _GRID)
    change = np.flatnonzero((slope[0, :-1] > 0) != (slope[0, 1:] > 0))
    kinds = np.where(slope[0, change] > 0, "greatest separation", "smallest separation")
    starts = _to_zero_slope(best, _GRID[change] + np.diff(_GRID)[0] / 2)[0]
    return [
        (str(kind), lambda orbits, start=start: _to_zero_slope(orbits, np.array([start]))[:, 0])
        for kind, start in zip(kinds, starts, strict=True)
    ]


def _slope(orbits: Orbits, anomaly: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """(n, m) half the derivative of the squared separation by the eccentric anomaly E, and its own.

    With north = A (cos E - e) + F b sin E, and east alike, it is a short trigonometric sum.
    """
    A, B, F, G = (constant[:, None] for constant in orbits.thiele_innes)
    e = orbits.eccentricity[:, None]
    b2 = (1 - e) * (1 + e)
    long, mixed, across = A * A + B * B, np.sqrt(b2) * (A * F + B * G), b2 * (F * F + G * G)
    s, c = np.sin(anomaly), np.cos(anomaly)
    double_s, double_c = 2 * s * c, (c - s) * (c + s)
    slope = long * e * s - (long - across) * double_s / 2 + mixed * (double_c - e * c)
    bend = long * e * c - (long - across) * double_c + mixed * (e * s - 2 * double_s)
    return slope, bend


def _to_zero_slope(orbits: Orbits, anomaly: np.ndarray) -> np.ndarray:
    """(n, m) zeros of `_slope` by Newton's method from the anomalies (m,) or (n, m)."""
    found = np.broadcast_to(anomaly, (len(orbits), np.shape(anomaly)[-1])).copy()
    for _ in range(12):
        slope, bend = _slope(orbits, found)
        # Bounded steps: near a place where two extremes merge the bend vanishes.
        found -= np.clip(slope / np.where(bend == 0, np.inf, bend), -0.1, 0.1)
    return found


def _moment(orbits: Orbits, anomaly: np.ndarray, near: np.ndarray | float) -> np.ndarray:
    """(n,) time, MJD, at which the orbits are at that eccentric anomaly, the one nearest `near`."""
    mean = anomaly - orbits.eccentricity * np.sin(anomaly)
    moment = orbits.periastron + orbits.period * mean / (2 * np.pi)
    return moment + orbits.period * np.rint((near - moment) / orbits.period)


def _timing_error(bundle: Bundle, where: _Where, when: float) -> float:
    """Half of the 68% interval of the times at which the draws do the same."""
    if len(bundle.draws) == 0:
        return np.nan
    times = _moment(bundle.draws, where(bundle.draws), when)
    low, high = np.percentile(times, ONE_SIGMA)
    return float(high - low) / 2
