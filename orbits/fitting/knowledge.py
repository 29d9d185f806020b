"""Further knowledge of any quantity of the results, taken as an independent measurement of it."""

import numpy as np

from .. import masses
from ..errors import InputError
from .data import Data

ANGLES = ("inclination_deg", "node_deg", "argument_deg")


def log_knowledge(data: Data, points: np.ndarray) -> np.ndarray:
    """(S,) ln of the normal densities that `priors.normal` puts on quantities of the points."""
    total = np.zeros(len(points))
    values = quantities(data, points)
    for name, (mean, error) in data.priors.normal.items():
        difference = values[name] - mean
        if name in ANGLES:
            # Without velocities node and argument are known up to half a turn of both.
            turn = 180.0 if name != "inclination_deg" and not data.space.has_velocities else 360.0
            difference = (difference + turn / 2) % turn - turn / 2
        total -= 0.5 * (difference / error) ** 2 + np.log(error) + 0.5 * np.log(2 * np.pi)
    return total


def quantities(data: Data, points: np.ndarray) -> dict[str, np.ndarray]:
    """The quantities (S,) that each point fixes by itself, by their names in the results."""
    axes = {name: points[:, i] for i, name in enumerate(data.space.names)}
    e, phase = np.zeros(len(points)), np.zeros(len(points))
    if "h_x" in axes:
        e = axes["h_x"] ** 2 + axes["h_y"] ** 2
        phase = np.arctan2(axes["h_y"], axes["h_x"])
    period = np.exp(axes["log_period"])
    made = {
        "period_d": period,
        "eccentricity": e,
        "argument_deg": np.degrees(axes["longitude"] - phase),
    }
    for name, axis in (("k1_kms", "log_k1"), ("k2_kms", "log_k2")):
        if axis in axes:
            made[name] = np.exp(axes[axis])
    if data.positions is None:
        return made
    inclination = np.arccos(np.clip(axes["cos_inclination"], -1, 1))
    axis = np.exp(axes["log_axis"])
    made["semimajor_axis_mas"] = axis
    made["inclination_deg"], made["node_deg"] = np.degrees(inclination), np.degrees(axes["node"])
    if "k1_kms" in made and "k2_kms" in made:
        k1, k2 = made["k1_kms"], made["k2_kms"]
        one, two = masses.double_lined_masses(period, e, inclination, k1, k2)
        made |= {"primary_msun": one, "companion_msun": two, "total_msun": one + two}
        made["mass_ratio"] = two / one
        made["parallax_mas"] = masses.orbital_parallax(period, e, inclination, k1, k2, axis)
    return made


def check_knowledge(data: Data) -> None:
    """Raise InputError for knowledge of a quantity that the points do not fix."""
    known = quantities(data, np.full((1, data.space.dimensions), 0.1))
    for name in data.priors.normal:
        if name not in known:
            raise InputError(
                f"priors.normal: {name!r} is not among what these data fix: {', '.join(known)}"
            )
