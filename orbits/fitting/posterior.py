"""From weighted points to equally weighted samples of every quantity that the data give."""

import math

import numpy as np
import pandas as pd

from ..compiled import compiled
from ..resampling import systematic
from .data import Data
from .derived import NAMES, derived
from .knowledge import NEXT
from .likelihood import BOUNDED, factor, largest_parallax, velocity_normal_equations
from .merging import Run
from .space import PARALLAX


def equal_weight(run: Run, rng: np.random.Generator) -> np.ndarray:
    """Indices of as many points as the run is worth, drawn by systematic resampling, shuffled."""
    return rng.permutation(systematic(np.exp(run.log_weight), rng))


def sample_table(data: Data, points: np.ndarray, rng: np.random.Generator) -> pd.DataFrame:
    """One column for each quantity, the unit at the end of its name.

    Angles are continuous across 0, so that some samples may lie a little outside 0 to 360 deg.
    Without velocities the node is the one from 0 to 180 deg. Periastron is the passage nearest to
    the middle of the data; that of a circular orbit is its node.
    """
    axes = {name: points[:, i] for i, name in enumerate(data.space.names)}
    deviates = _zero_points(data, points, rng)
    turn = np.zeros(len(points))
    if data.positions is not None and data.velocities is None:
        node = _positive(_continuous(axes["node"], math.pi), math.pi)
        turn = node - axes["node"]  # half a turn of the node turns the longitude, too
    values = derived(points, data.space.columns, _parallaxes(data, points, rng), turn)
    columns = {
        name: value
        for name, value in zip(NAMES, values.T, strict=True)
        if not np.isnan(value).any()
    }
    for name in ("argument_deg", "node_deg"):
        if name in columns:
            columns[name] = _positive(_continuous(columns[name], 360.0), 360.0)
    period = columns["period_d"]
    passage = _continuous(columns["periastron_mjd"] / period, 1.0)
    columns["periastron_mjd"] = data.reference + period * passage
    for i, name in enumerate(data.design_names):
        columns[name] = data.design_means[i] + deviates[:, i] * data.design_scales[i]
    times = [table.mjd.max() for table in (data.positions, data.velocities) if table is not None]
    ahead = np.ceil((max(times) - np.median(columns["periastron_mjd"])) / np.median(period))
    columns[NEXT] = columns["periastron_mjd"] + ahead * period
    return pd.DataFrame(columns | _nuisances(data, axes))


def _continuous(angle: np.ndarray, turn: float) -> np.ndarray:
    """The angles within half a `turn` of their mean direction, which lies within half of 0."""
    scale = 2 * math.pi / turn
    mean = np.angle(np.exp(1j * scale * angle).mean()) / scale
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


def _parallaxes(data, points, rng) -> np.ndarray:
    """(S,) the measured parallax of each sample: its axis, or a draw between 0 and its bound."""
    columns, count = data.space.columns, len(points)
    if data.parallax is None:
        return np.full(count, np.nan)
    if columns[PARALLAX] >= 0:
        return data.parallax.value + data.parallax.error * points[:, columns[PARALLAX]]
    bound = np.full(count, np.inf)
    if data.tables.parallax[0] == BOUNDED:
        _largest_parallaxes(points, columns, bound)
    return _truncated_normal(data.parallax, bound, rng)


@compiled
def _largest_parallaxes(points, columns, out):
    for s in range(points.shape[0]):
        out[s] = largest_parallax(points[s], columns)


def _truncated_normal(parallax, bound, rng) -> np.ndarray:
    """Draws from the measured parallax between 0 and the bound of each sample."""
    from scipy.special import ndtr, ndtri

    low = ndtr(-parallax.value / parallax.error)
    high = ndtr((bound - parallax.value) / parallax.error)
    uniform = low + (high - low) * rng.uniform(size=len(bound))
    return np.clip(parallax.value + parallax.error * ndtri(uniform), 1e-12, bound)


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
