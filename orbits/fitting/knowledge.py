"""Further knowledge of quantities of the results, each taken as an independent measurement.

The likelihood is multiplied by a normal density of each quantity; the prior of the parameters
stays what it is, so that the evidence is that of the data together with the knowledge.
"""

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np

from ..compiled import compiled
from ..errors import InputError
from .derived import NAMES, derive, derived
from .space import K1, K2, PARALLAX, PERIOD

if TYPE_CHECKING:
    from .data import Data

NEXT = "next_periastron_mjd"
"""The same as the periastron, whole periods later."""
NEED_PARALLAX = frozenset({"parallax_mas", "total_msun", "primary_msun", "companion_msun",
                           "mass_ratio", "semimajor_axis_au"})  # fmt: skip
"""Quantities that a parallax gives where the velocities of one star at most are known."""
BOTH_STARS = frozenset({"primary_msun", "companion_msun", "mass_ratio"})
"""Those of them for which positions and a parallax are not enough."""
ANGLES = frozenset({"inclination_deg", "node_deg", "argument_deg"})
PLAIN, ANGLE, DATE = range(3)
ROOT_2PI = math.sqrt(2 * math.pi)


def rows_of(normal: Mapping[str, tuple[float, float]], reference: float) -> np.ndarray:
    """(k, 4) index among NAMES, kind, mean and standard deviation of what is known."""
    rows = []
    for name, (mean, error) in normal.items():
        if name in ("periastron_mjd", NEXT):
            rows.append((NAMES.index("periastron_mjd"), DATE, mean - reference, error))
        elif name in NAMES:
            rows.append((NAMES.index(name), ANGLE if name in ANGLES else PLAIN, mean, error))
    return np.array(rows, dtype=float).reshape(-1, 4)


def combined(names: tuple[str, ...], scales: np.ndarray, normal) -> tuple:
    """Means and deviations of zero points and drift, and ln of the constant factor.

    The product of the prior, normal about 0, and of what is known is a normal density again.
    """
    means, scales, constant = np.zeros(len(names)), scales.copy(), 0.0
    for i, name in enumerate(names):
        if name in normal:
            value, error = normal[name]
            total = math.hypot(scales[i], error)
            constant -= 0.5 * (value / total) ** 2 + math.log(total * ROOT_2PI)
            means[i] = value * (scales[i] / total) ** 2
            scales[i] *= error / total
    return means, scales, constant


@compiled
def log_knowledge(point, columns, parallax, rows):
    """ln of the product of the normal densities `rows` (k, 4) at a point.

    Positions alone leave node and argument open by half a turn of both: the mean of the two counts.
    """
    measured = math.nan
    if columns[PARALLAX] >= 0:
        measured = parallax[1] + parallax[2] * point[columns[PARALLAX]]
    values = np.empty(len(NAMES))
    total = _log_densities(point, columns, measured, 0.0, rows, values)
    if columns[K1] >= 0 or columns[K2] >= 0:
        return total
    other = _log_densities(point, columns, measured, math.pi, rows, values)
    most = max(total, other)
    return most + math.log((math.exp(total - most) + math.exp(other - most)) / 2)


@compiled
def _log_densities(point, columns, parallax, turn, rows, values):
    derive(point, columns, parallax, turn, values)
    total = 0.0
    for row in range(rows.shape[0]):
        difference, error = values[int(rows[row, 0])] - rows[row, 2], rows[row, 3]
        if rows[row, 1] != PLAIN:  # the nearest of all turns, or passages
            cycle = 360.0 if rows[row, 1] == ANGLE else math.exp(point[columns[PERIOD]])
            difference -= cycle * np.rint(difference / cycle)
        total -= 0.5 * (difference / error) ** 2 + math.log(error * ROOT_2PI)
    return total


def check_knowledge(data: "Data") -> None:
    """Raise InputError for knowledge of a quantity that the data do not give."""
    space = data.space
    parallax = np.nan if data.parallax is None else data.parallax.value
    point = np.full((1, space.dimensions), 0.1)
    (values,) = derived(point, space.columns, np.array([parallax]), np.zeros(1))
    given = [name for name, value in zip(NAMES, values, strict=True) if np.isfinite(value)]
    given += [NEXT, *data.design_names]
    for name in data.priors.normal:
        if name not in given:
            raise InputError(
                f"priors.normal: {name!r} is not among what these data give: "
                f"{', '.join(given)}{_remedy(name, positions=data.positions is not None)}"
            )


def _remedy(name: str, *, positions: bool) -> str:
    """What would give the quantity, where that is a distance or the masses of both stars."""
    if name not in NEED_PARALLAX:
        return ""
    if name in BOTH_STARS:
        what = "velocities of both stars, or of one and a parallax ([parallax])"
    else:
        what = "a parallax ([parallax]) or velocities of both stars"
    return f"; it takes {what}" if positions else f"; it takes positions, and {what}"
