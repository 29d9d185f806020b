"""A bundle: one orbit together with those that its errors or its posterior allow.

Solutions of a fit and entries of a catalogue both become a Bundle; drawings, ephemerides and
tables of events are functions of it. Plain numbers: d, MJD TDB, mas, deg, km/s.
"""

from collections.abc import Mapping
from dataclasses import dataclass, fields, replace
from pathlib import Path
from typing import TYPE_CHECKING, Self

import numpy as np

from .constants import JULIAN_YEAR
from .elements import Elements, thiele_innes
from .errors import InputError
from .kepler import eccentric_anomaly, mean_anomaly, true_anomaly
from .rows import Rows

if TYPE_CHECKING:
    from .fitting.solution import Solution
    from .positions import Positions
    from .velocities import Velocities


ONE_SIGMA = (15.865, 84.135)
"""Percentiles of the interval that holds 68.27 per cent."""

_ROUND = 0.1
"""Below this eccentricity the place on the orbit is known some ten times better than periastron."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Orbits(Rows):
    """n orbits; conventions as in `Elements`."""

    period: np.ndarray
    """(n,) d, > 0."""
    periastron: np.ndarray
    """(n,) MJD TDB."""
    eccentricity: np.ndarray
    """(n,) in [0, 1)."""
    semimajor_axis: np.ndarray
    """(n,) mas, of the relative orbit."""
    inclination: np.ndarray
    """(n,) deg; below 90 the position angle grows with time."""
    node: np.ndarray
    """(n,) deg."""
    argument: np.ndarray
    """(n,) deg, of the companion's relative orbit."""
    k1: np.ndarray
    """(n,) km/s: half the range of the primary's velocity; NaN where unknown. So are k2, gamma."""
    k2: np.ndarray
    """(n,) km/s, of the companion."""
    gamma: np.ndarray
    """(n,) km/s, of the centre of mass."""

    @classmethod
    def names(cls) -> tuple[str, ...]:
        """The names of the columns, in order."""
        return tuple(f.name for f in fields(cls))

    @classmethod
    def of(cls, columns: Mapping[str, np.ndarray]) -> Self:
        """Orbits from a mapping of names to (n,) arrays; k1, k2 and gamma may be missing."""
        n = len(columns["period"])
        return cls(
            **{
                name: np.array(columns.get(name, np.full(n, np.nan)), dtype=np.float64)
                for name in cls.names()
            }
        )

    @property
    def thiele_innes(self) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """A, B, F, G, each (n,), mas: north = A X + F Y, east = B X + G Y."""
        angles = (np.radians(v) for v in (self.inclination, self.node, self.argument))
        return thiele_innes(self.semimajor_axis, *angles)

    def anomaly(self, mjd: np.ndarray) -> np.ndarray:
        """(n, m) eccentric anomaly, rad, at the (m,) times `mjd` (TDB), or (n, m) times."""
        mean = mean_anomaly(mjd, self.period[:, None], self.periastron[:, None])
        return eccentric_anomaly(mean, self.eccentricity[:, None])

    def anomaly_at(self, longitude: float) -> np.ndarray:
        """(n,) eccentric anomaly, rad, where the companion is `longitude` deg beyond the node."""
        half, e = np.radians(longitude - self.argument) / 2, self.eccentricity
        return 2 * np.arctan2(np.sqrt(1 - e) * np.sin(half), np.sqrt(1 + e) * np.cos(half))

    def at_anomaly(self, anomaly: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """(n, m) East and North offset, mas, at eccentric anomalies (m,) or (n, m), rad."""
        A, B, F, G = (constant[:, None] for constant in self.thiele_innes)
        e = self.eccentricity[:, None]
        X, Y = np.cos(anomaly) - e, np.sqrt((1 - e) * (1 + e)) * np.sin(anomaly)
        return B * X + G * Y, A * X + F * Y

    def offsets(self, mjd: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """(n, m) East and North offset, mas, at the times `mjd` (TDB), (m,) or (n, m)."""
        return self.at_anomaly(self.anomaly(mjd))

    def velocities(self, mjd: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """(n, m) velocities of primary and companion, km/s, at `mjd` (TDB); NaN where unknown.

        The companion recedes at the node: V2 = gamma + K2 [cos(w + v) + e cos w], with w the
        argument of its relative orbit, and V1 the same with -K1.
        """
        w, e = np.radians(self.argument)[:, None], self.eccentricity[:, None]
        course = np.cos(w + true_anomaly(self.anomaly(mjd), e)) + e * np.cos(w)
        gamma = self.gamma[:, None]
        return gamma - self.k1[:, None] * course, gamma + self.k2[:, None] * course

    def curves(self, mjd: np.ndarray) -> np.ndarray:
        """(3, n, m) velocities as `Velocities.star` counts them: primary, companion, difference.

        Of an orbit whose gamma is unknown they are those seen from the centre of mass, which is
        all that the difference of both stars' velocities tells.
        """
        known = replace(self, gamma=np.nan_to_num(self.gamma))
        primary, companion = known.velocities(mjd)
        return np.stack([primary, companion, companion - primary])

    def phase(self, mjd: np.ndarray) -> np.ndarray:
        """(n, m) phase in [0, 1) since periastron at the (m,) times `mjd` (TDB)."""
        return (mjd - self.periastron[:, None]) / self.period[:, None] % 1.0


@dataclass(frozen=True, eq=False, kw_only=True)
class Bundle:
    """An orbit, its spread, and what it was measured from."""

    name: str
    best: Orbits
    """One row."""
    draws: Orbits
    """Equally likely orbits; no rows where nothing is known of the errors."""
    spread: str = ""
    """Where `draws` come from, in words; "" where there are none."""
    ascending: bool = False
    """The node is known to be the ascending one; else it and the argument may be off by 180."""
    positions: "Positions | None" = None
    velocities: "Velocities | None" = None

    @property
    def on_the_sky(self) -> bool:
        """Whether size and inclination are known; velocities alone do not give them."""
        best = self.best
        return bool(np.isfinite(best.semimajor_axis[0] + best.inclination[0] + best.node[0]))

    @classmethod
    def of_elements(cls, name: str, elements: Elements, **more: object) -> Self:
        """A bundle of one orbit with nothing known of its errors."""
        best = orbits_of_elements(elements)
        return cls(name=name, best=best, draws=best.select(np.zeros(1, dtype=bool)), **more)

    @classmethod
    def of_solution(cls, solution: "Solution") -> Self:
        """The bundle of a fit: its best sample, its posterior, and the data that were fitted.

        Velocities come without the zero points of their instruments and without the drift,
        positions without errors of scale and orientation, so that they can be held against the
        orbit alone. Elements that the data cannot give are NaN.
        """
        best = {name: np.array([value]) for name, value in solution.best.items()}
        velocities = solution.velocities
        if velocities is not None:
            velocities = replace(velocities, velocity=velocities.velocity - _shifts(solution))
        return cls(
            name=solution.name,
            best=orbits_of_samples(best),
            draws=orbits_of_samples(solution.samples),
            spread="posterior",
            ascending=velocities is not None and solution.positions is not None,
            positions=_calibrated(solution),
            velocities=velocities,
        )

    def position_residuals(self) -> np.ndarray:
        """(n, 2) East and North of the positions less the best orbit, mas."""
        return self.positions.xy - np.stack(self.best.offsets(self.positions.mjd), axis=-1)[0]

    def velocity_residuals(self) -> np.ndarray:
        """(n,) velocities less those of the best orbit, km/s."""
        measured = self.velocities
        model = self.best.curves(measured.mjd)[:, 0]
        return measured.velocity - model[measured.star, np.arange(len(measured))]

    @property
    def errors_too_large(self) -> bool:
        """The errors count as independent, but time and argument of periastron all but cancel."""
        if self.spread in ("", "posterior") or self.best.eccentricity[0] >= _ROUND:
            return False
        return bool(np.ptp(self.draws.periastron) > 0 and np.ptp(self.draws.argument) > 0)

    def thin(self, n: int) -> Orbits:
        """At most `n` of the draws, evenly picked."""
        if len(self.draws) <= n:
            return self.draws
        return self.draws.select(np.linspace(0, len(self.draws) - 1, n).astype(int))


def orbits_of_elements(elements: Elements) -> Orbits:
    """One row of plain numbers from elements with units."""
    return Orbits.of(
        {
            "period": [elements.period.to_value("d")],
            "periastron": [elements.periastron.tdb.mjd],
            "eccentricity": [elements.eccentricity],
            "semimajor_axis": [elements.semimajor_axis.to_value("mas")],
            "inclination": [elements.inclination.to_value("deg")],
            "node": [elements.node.to_value("deg")],
            "argument": [elements.argument.to_value("deg")],
        }
    )


def _shifts(solution: "Solution") -> np.ndarray:
    """What instruments and a drift add to each velocity in the best sample, km/s."""
    velocities, best = solution.velocities, solution.best
    shifts = np.array([best.get(f"zero_point_{name}_kms", 0.0) for name in velocities.instrument])
    times = [data.mjd for data in (solution.positions, velocities) if data is not None]
    middle = (min(t.min() for t in times) + max(t.max() for t in times)) / 2
    drift = best.get("drift_kms_per_year", 0.0) / JULIAN_YEAR
    # The difference of both stars' velocities knows neither.
    return np.where(velocities.star == 2, 0.0, shifts + drift * (velocities.mjd - middle))


def _calibrated(solution: "Solution") -> "Positions | None":
    """The positions as an instrument without errors of scale and orientation would give them."""
    from .fitting.comparing import calibration_of

    positions = solution.positions
    if positions is None:
        return None
    scale, turn = calibration_of(solution.best, positions.instrument)
    if (scale == 1).all() and (turn == 0).all():
        return positions
    c, s = np.cos(turn) / scale, np.sin(turn) / scale
    back = np.stack([np.stack([c, -s], -1), np.stack([s, c], -1)], -2)
    return replace(
        positions,
        xy=np.einsum("nij,nj->ni", back, positions.xy),
        covariance=back @ positions.covariance @ np.swapaxes(back, 1, 2),
    )


SAMPLE_COLUMNS = {
    "period": "period_d",
    "periastron": "periastron_mjd",
    "eccentricity": "eccentricity",
    "semimajor_axis": "semimajor_axis_mas",
    "inclination": "inclination_deg",
    "node": "node_deg",
    "argument": "argument_deg",
    "k1": "k1_kms",
    "k2": "k2_kms",
    "gamma": "gamma_kms",
}
"""How the columns of `Orbits` are called among posterior samples."""


def orbits_of_samples(samples: Mapping[str, np.ndarray]) -> Orbits:
    """Orbits from posterior samples, a table or data frame with the columns of a `Solution`."""
    return Orbits.of(
        {name: samples[column] for name, column in SAMPLE_COLUMNS.items() if column in samples}
    )


def read_samples(path: Path) -> Orbits:
    """Orbits from the file of posterior samples that a fit has written (ECSV).

    Raises
    ------
    InputError
        If the file is missing, is no table or lacks one of the seven elements.
    """
    from astropy.table import Table

    if not path.is_file():
        raise InputError(f"{path}: no such file; it should hold the posterior samples of an orbit")
    try:
        table = Table.read(path, format="ascii.ecsv")
    except (ValueError, TypeError, KeyError, IndexError) as error:
        raise InputError(f"{path}: not a readable ECSV table: {error}") from error
    for column in tuple(SAMPLE_COLUMNS.values())[:7]:
        if column not in table.colnames:
            raise InputError(f"{path}: no column {column}; it is needed")
    return orbits_of_samples({name: np.asarray(table[name]) for name in table.colnames})


def draw_orbits(
    best: Mapping[str, float], errors: Mapping[str, float], n: int, rng: np.random.Generator
) -> Orbits:
    """`n` orbits around `best` with independent normal `errors`; none where no error is known.

    Quantities without an error keep their value. The normal laws are cut where an orbit would
    cease to be one: the period at 0, the eccentricity at 0 and 1, the semimajor axis at 0. What a
    catalogue leaves out, the correlations, is not invented; the rounder the orbit, the more the
    errors of time and argument of periastron cancel in truth, and the wider is this spread.
    """
    known = {name: value for name, value in errors.items() if np.isfinite(value) and value > 0}
    if not known:
        n = 0
    limits = {"period": (0.0, np.inf), "eccentricity": (0.0, 1.0), "semimajor_axis": (0.0, np.inf)}
    return Orbits.of(
        {
            name: _cut_normal(
                value, known.get(name, 0.0), limits.get(name, (-np.inf, np.inf)), n, rng
            )
            for name, value in best.items()
        }
    )


def _cut_normal(
    value: float, error: float, limits: tuple[float, float], n: int, rng: np.random.Generator
) -> np.ndarray:
    """(n,) normal numbers within `limits`, by inverting the cut distribution function."""
    if error == 0.0 or n == 0:
        return np.full(n, value)
    from scipy.special import ndtr, ndtri

    low, high = ((limit - value) / error for limit in limits)
    below, above = ndtr(low), ndtr(high)
    fraction = below + (above - below) * (1 - rng.random(n))  # in (0, 1]
    numbers = value + error * ndtri(np.clip(fraction, 1e-16, 1 - 1e-16))
    # Rounding may put a number on the upper limit, where an eccentricity would be 1.
    return np.clip(numbers, limits[0], np.nextafter(limits[1], -np.inf))
