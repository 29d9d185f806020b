"""From weighted points to equally weighted samples of every quantity that the data give."""

import math

import numpy as np
import pandas as pd

from .. import masses
from ..compiled import compiled
from ..elements import thiele_innes
from .data import Data
from .likelihood import factor, largest_parallax, velocity_normal_equations
from .nested import Run

TURN = 2 * math.pi


def equal_weight(run: Run, rng: np.random.Generator) -> np.ndarray:
    """Indices of as many points as the run is worth, drawn by systematic resampling, shuffled."""
    count = max(int(run.effective_samples), 1)
    weight = np.exp(run.log_weight)
    places = (np.arange(count) + rng.uniform()) / count
    chosen = np.searchsorted(np.cumsum(weight / weight.sum()), places)
    return rng.permutation(np.minimum(chosen, len(weight) - 1))


def sample_table(data: Data, points: np.ndarray, rng: np.random.Generator) -> pd.DataFrame:
    """One column for each quantity, the unit at the end of its name.

    Angles are continuous across 0, so that some samples may lie a little outside 0 to 360 deg.
    """
    axes = {name: points[:, i] for i, name in enumerate(data.space.names)}
    columns = _elements(data, axes)
    for name, axis in (("k1_kms", "log_k1"), ("k2_kms", "log_k2")):
        if axis in axes:
            columns[name] = np.exp(axes[axis])
    if data.velocities is not None and (data.velocities.star == 2).all():
        columns["k_sum_kms"] = columns.pop("k2_kms")
    deviates = _zero_points(data, points, rng)
    for i, name in enumerate(data.design_names):
        columns[name] = deviates[:, i] * data.design_scales[i]
    columns |= _sizes(data, points, columns, rng)
    columns |= _periastron(data, columns)
    columns |= _nuisances(data, axes)
    return pd.DataFrame(columns)


def _elements(data, axes) -> dict[str, np.ndarray]:
    """The elements, for the periastron nearest to the middle of the data.

    Without velocities the node is the one from 0 to 180 deg. The periastron of a circular orbit is
    its node.
    """
    period, longitude = np.exp(axes["log_period"]), axes["longitude"]
    made = {}
    if data.positions is not None:
        half = math.pi if data.velocities is None else TURN
        node = _positive(_continuous(axes["node"], half), half)
        longitude = longitude + (node - axes["node"])  # half a turn of the node turns both
        made["semimajor_axis_mas"] = np.exp(axes["log_axis"])
        made["inclination_deg"] = np.degrees(np.arccos(axes["cos_inclination"]))
        made["node_deg"] = np.degrees(node)
    if "h_x" in axes:
        e = axes["h_x"] ** 2 + axes["h_y"] ** 2
        phase = np.arctan2(axes["h_y"], axes["h_x"])
        argument = _positive(_continuous(longitude - phase, TURN), TURN)
    else:
        e, phase, argument = np.zeros(len(period)), longitude, np.zeros(len(period))
    made["argument_deg"] = np.degrees(argument)
    periastron = data.reference - period * _continuous(phase, TURN) / TURN
    return {"period_d": period, "periastron_mjd": periastron, "eccentricity": e} | made


def _continuous(angle: np.ndarray, turn: float) -> np.ndarray:
    """The angles within half a `turn` of their mean direction, which lies within half of 0."""
    mean = np.angle(np.exp(1j * TURN / turn * angle).mean()) * turn / TURN
    return mean + (angle - mean + turn / 2) % turn - turn / 2


def _positive(angle: np.ndarray, turn: float) -> np.ndarray:
    """The angles with their median between 0 and a `turn`."""
    return angle - turn * np.floor(np.median(angle) / turn)


def _zero_points(data, points, rng) -> np.ndarray:
    """(S, q) draws of the deviates of zero points and drift, which are normal given the rest."""
    deviates = rng.normal(size=(len(points), len(data.design_names)))
    _draw_zero_points(points, data.tables, deviates)
    return deviates


@compiled
def _draw_zero_points(points, tables, deviates):
    """Turn standard normal numbers (S, q) into draws from the normal density of each point."""
    terms = tables.design.shape[1]
    matrix, vector = np.empty((terms, terms)), np.empty(terms)
    for s in range(points.shape[0]):
        velocity_normal_equations(points[s], tables.columns, tables.speeds, tables.speed_labels,
                                  tables.design, matrix, vector)  # fmt: skip
        factor(matrix)
        for i in range(terms):
            for j in range(i):
                vector[i] -= matrix[i, j] * vector[j]
            vector[i] /= matrix[i, i]
        for i in range(terms - 1, -1, -1):
            value = vector[i] + deviates[s, i]
            for j in range(i + 1, terms):
                value -= matrix[j, i] * deviates[s, j]
            deviates[s, i] = value / matrix[i, i]


@compiled
def _largest_parallaxes(points, columns, out):
    for s in range(points.shape[0]):
        out[s] = largest_parallax(points[s], columns)


def _sizes(data, points, columns, rng) -> dict[str, np.ndarray]:
    """Masses, parallax and linear sizes, as far as the data determine them."""
    period, e = columns["period_d"], columns["eccentricity"]
    k1, k2 = columns.get("k1_kms"), columns.get("k2_kms")
    both = columns.get("k_sum_kms")
    if k1 is not None and k2 is not None:
        both = k1 + k2
    if data.positions is None:
        return _spectroscopic(period, e, k1, k2)
    inclination, axis = np.radians(columns["inclination_deg"]), columns["semimajor_axis_mas"]
    if both is not None:
        parallax = masses.orbital_parallax(period, e, inclination, 0.0, both, axis)
        total = masses.total_mass(period, axis, parallax)
        made = {"parallax_mas": parallax, "total_msun": total}
        if k1 is not None and k2 is not None:
            made["primary_msun"], made["companion_msun"] = total * k2 / both, total * k1 / both
            made["mass_ratio"] = k1 / k2
        return made | {"semimajor_axis_au": axis / parallax}
    single = k1 if k1 is not None else k2
    function = (
        {} if single is None else {"mass_function_msun": masses.mass_function(period, e, single)}
    )
    if data.parallax is None:
        return function
    bound = np.full(len(period), np.inf)
    if single is not None:
        _largest_parallaxes(points, data.space.columns, bound)
    parallax = _truncated_normal(data.parallax, bound, rng)
    made = {"parallax_mas": parallax, "total_msun": masses.total_mass(period, axis, parallax)}
    if single is not None:
        mine, other = masses.single_lined_masses(period, e, inclination, single, axis, parallax)
        made["primary_msun"], made["companion_msun"] = (
            (mine, other) if k1 is not None else (other, mine)
        )
        made["mass_ratio"] = made["companion_msun"] / made["primary_msun"]
    return made | function | {"semimajor_axis_au": axis / parallax}


def _spectroscopic(period, e, k1, k2) -> dict[str, np.ndarray]:
    """What velocities alone give: masses times sin^3 i, or the mass function."""
    if k1 is not None and k2 is not None:
        one, two = masses.double_lined_masses(period, e, np.pi / 2, k1, k2)
        return {"primary_sin3i_msun": one, "companion_sin3i_msun": two, "mass_ratio": k1 / k2}
    single = k1 if k1 is not None else k2
    return {} if single is None else {"mass_function_msun": masses.mass_function(period, e, single)}


def _truncated_normal(parallax, bound, rng) -> np.ndarray:
    """Draws from the measured parallax between 0 and the bound of each sample."""
    from scipy.special import ndtr, ndtri

    low = ndtr(-parallax.value / parallax.error)
    high = ndtr((bound - parallax.value) / parallax.error)
    uniform = low + (high - low) * rng.uniform(size=len(bound))
    return np.clip(parallax.value + parallax.error * ndtri(uniform), 1e-12, bound)


def _periastron(data, columns) -> dict[str, np.ndarray]:
    """Date of the first periastron after the data, and the separation on the sky there."""
    times = [table.mjd.max() for table in (data.positions, data.velocities) if table is not None]
    period, passage = columns["period_d"], columns["periastron_mjd"]
    ahead = np.ceil((max(times) - np.median(passage)) / np.median(period))
    made = {"next_periastron_mjd": passage + ahead * period}
    if data.positions is not None:
        angles = (
            np.radians(columns[f"{name}_deg"]) for name in ("inclination", "node", "argument")
        )
        A, B, _, _ = thiele_innes(columns["semimajor_axis_mas"], *angles)
        made["periastron_separation_mas"] = np.hypot(A, B) * (1 - columns["eccentricity"])
    return made


def _nuisances(data, axes) -> dict[str, np.ndarray]:
    """Jitters, the share of outliers and errors of calibration, by instrument."""
    made = {}
    if "outlier_fraction" in axes:
        made["outlier_fraction"] = axes["outlier_fraction"]
    for axis, name in data.nuisances.items():
        if axis.startswith("scale_"):
            made[name] = 1 + data.tables.calibration[0] * axes[axis]
        elif axis.startswith("angle_"):
            made[name] = np.degrees(data.tables.calibration[1] * axes[axis])
        else:
            made[name] = np.exp(axes[axis])
    return made
