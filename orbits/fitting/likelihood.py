"""The likelihood of the data, compiled; zero points and drift are integrated out exactly.

Velocities are linear in the zero points and the drift, whose priors are normal, so that the
integral over them is a normal density with covariance D + G G^T: D holds the errors and jitters,
G the columns of zero points times the standard deviations of their priors.
"""

import math
from typing import NamedTuple

import numpy as np

from ..compiled import compiled
from ..constants import KMS_IN_AU_PER_DAY
from ..kepler import solve
from .derived import eccentricity_and_phase
from .knowledge import log_knowledge
from .space import AXIS, COS_I, K1, K2, LONGITUDE, NODE, OUTLIERS, PARALLAX, PERIOD

LOG_2PI = math.log(2 * math.pi)
NO_PARALLAX, DERIVED, BOUNDED, FREE = range(4)


class Tables(NamedTuple):
    """The data as plain arrays, their rows in the order of time."""

    columns: np.ndarray
    """(12,) int: where the axes of `space.AXES` stand in a point; -1 where absent."""
    places: np.ndarray
    """(n, 7) positions: time, x, y, covariance xx, xy, yy, ln weight; a night's rows together."""
    place_labels: np.ndarray
    """(n, 4) int: night, and the axes of jitter, scale and angle, -1 for none."""
    calibration: np.ndarray
    """(2,) standard deviations of scale and angle (rad)."""
    field_variance: float
    """Variance of the outliers' distribution about the primary, mas2."""
    speeds: np.ndarray
    """(m, 5) velocities: time, velocity, variance, and the shares of K1 and K2."""
    speed_labels: np.ndarray
    """(m,) int: axis of the jitter, -1 for none."""
    design: np.ndarray
    """(m, q) columns of zero points and drift, times the standard deviations of their priors."""
    parallax: np.ndarray
    """(3,) how the parallax enters (NO_PARALLAX ... FREE), its value and error, mas."""
    knowledge: np.ndarray
    """(k, 4) what is known beforehand; see `knowledge.log_knowledge`."""
    constant: float
    """ln of what knowledge of zero points and drift adds to the likelihood everywhere."""


@compiled
def log_likelihood(point, tables):
    """ln of the likelihood of an allowed point (d,)."""
    total = 0.0
    if tables.places.shape[0]:
        total += _positions(point, tables)
    if tables.speeds.shape[0]:
        total += _velocities(
            point, tables.columns, tables.speeds, tables.speed_labels, tables.design
        )
    if tables.parallax[0] > 0:
        total += _parallax(point, tables.columns, tables.parallax)
    if tables.knowledge.shape[0]:
        total += log_knowledge(point, tables.columns, tables.parallax, tables.knowledge)
    return total + tables.constant


@compiled
def anomaly(time, motion, phase, e):
    """Eccentric anomaly at `time` after the reference, d, for a mean motion in turns per day."""
    turns = time * motion + phase / (2 * math.pi)
    return solve(2 * math.pi * (turns - np.rint(turns)), e)


@compiled
def position_densities(point, tables, inside, outside):
    """Write ln(weight * density) of each measured position (n,) if it is the companion, or not.

    `outside` is left alone unless the model has outliers.
    """
    columns, places, labels = tables.columns, tables.places, tables.place_labels
    e, phase = eccentricity_and_phase(point, columns)
    motion = math.exp(-point[columns[PERIOD]])
    axis, cosine = math.exp(point[columns[AXIS]]), point[columns[COS_I]]
    argument, node = point[columns[LONGITUDE]] - phase, point[columns[NODE]]
    minor = math.sqrt((1 - e) * (1 + e))
    c, s, cn, sn = math.cos(argument), math.sin(argument), math.cos(node), math.sin(node)
    A, B = axis * (c * cn - s * sn * cosine), axis * (c * sn + s * cn * cosine)
    F, G = axis * (-s * cn - c * sn * cosine), axis * (-s * sn + c * cn * cosine)
    time, east, north = math.nan, 0.0, 0.0
    for row in range(places.shape[0]):
        if places[row, 0] != time:
            time = places[row, 0]
            E = anomaly(time, motion, phase, e)
            px, py = math.cos(E) - e, minor * math.sin(E)
            east, north = B * px + G * py, A * px + F * py
        x, y = east, north
        if labels[row, 2] >= 0:
            size = 1 + tables.calibration[0] * point[labels[row, 2]]
            x, y = x * size, y * size
        if labels[row, 3] >= 0:
            turn = tables.calibration[1] * point[labels[row, 3]]
            x, y = (
                x * math.cos(turn) + y * math.sin(turn),
                y * math.cos(turn) - x * math.sin(turn),
            )
        extra = math.exp(2 * point[labels[row, 1]]) if labels[row, 1] >= 0 else 0.0
        inside[row] = places[row, 6] + _normal(places[row], x, y, extra)
        if columns[OUTLIERS] >= 0:
            outside[row] = places[row, 6] + _normal(places[row], 0.0, 0.0, tables.field_variance)


@compiled
def _positions(point, tables):
    rows = tables.places.shape[0]
    inside, outside = np.empty(rows), np.empty(rows)
    position_densities(point, tables, inside, outside)
    outliers = tables.columns[OUTLIERS] >= 0
    share = point[tables.columns[OUTLIERS]] if outliers else 0.0
    total, row = 0.0, 0
    while row < rows:
        night, likelihood, wide = tables.place_labels[row, 0], -math.inf, -math.inf
        while row < rows and tables.place_labels[row, 0] == night:
            likelihood = _log_sum(likelihood, inside[row])
            if outliers:
                wide = _log_sum(wide, outside[row])
            row += 1
        if share > 0:
            likelihood = _log_sum(math.log1p(-share) + likelihood, math.log(share) + wide)
        total += likelihood
    return total


@compiled
def _normal(place, x, y, extra):
    """ln of the normal density of a measured position about (x, y)."""
    cxx, cxy, cyy = place[3] + extra, place[4], place[5] + extra
    determinant = cxx * cyy - cxy * cxy
    dx, dy = place[1] - x, place[2] - y
    square = (cyy * dx * dx - 2 * cxy * dx * dy + cxx * dy * dy) / determinant
    return -0.5 * (square + math.log(determinant)) - LOG_2PI


@compiled
def _log_sum(a, b):
    """ln(exp a + exp b)."""
    if a < b:
        a, b = b, a
    if b == -math.inf:
        return a
    return a + math.log1p(math.exp(b - a))


@compiled
def velocity_shape(point, columns, time):
    """cos(argument + true anomaly) + e cos(argument) at `time` after the reference."""
    e, phase = eccentricity_and_phase(point, columns)
    E = anomaly(time, math.exp(-point[columns[PERIOD]]), phase, e)
    argument = point[columns[LONGITUDE]] - phase
    c, s, minor = math.cos(E), math.sin(E), math.sqrt((1 - e) * (1 + e))
    return (math.cos(argument) * (1 - e * e) * c - math.sin(argument) * minor * s) / (1 - e * c)


@compiled
def velocity_normal_equations(point, columns, speeds, labels, design, matrix, vector):
    """Normal equations of the zero points' deviates; returns chi-square without them and ln |D|.

    `matrix` (q, q) becomes 1 + G^T D^-1 G and `vector` (q,) becomes G^T D^-1 r.
    """
    k1 = math.exp(point[columns[K1]]) if columns[K1] >= 0 else 0.0
    k2 = math.exp(point[columns[K2]]) if columns[K2] >= 0 else 0.0
    terms = design.shape[1]
    matrix[:] = 0.0
    vector[:] = 0.0
    for i in range(terms):
        matrix[i, i] = 1.0
    square, log_determinant, time, shape = 0.0, 0.0, math.nan, 0.0
    for row in range(speeds.shape[0]):
        if speeds[row, 0] != time:
            time = speeds[row, 0]
            shape = velocity_shape(point, columns, time)
        variance = speeds[row, 2]
        if labels[row] >= 0:
            variance += math.exp(2 * point[labels[row]])
        residual = speeds[row, 1] - shape * (speeds[row, 3] * k1 + speeds[row, 4] * k2)
        square += residual * residual / variance
        log_determinant += math.log(variance)
        for i in range(terms):
            scaled = design[row, i] / variance
            if scaled != 0:
                vector[i] += scaled * residual
                for j in range(i + 1):
                    matrix[i, j] += scaled * design[row, j]
    return square, log_determinant


@compiled
def factor(matrix):
    """Replace the lower triangle of a positive definite matrix by its Cholesky factor."""
    for i in range(matrix.shape[0]):
        for j in range(i + 1):
            value = matrix[i, j]
            for k in range(j):
                value -= matrix[i, k] * matrix[j, k]
            matrix[i, j] = math.sqrt(value) if i == j else value / matrix[j, j]


@compiled
def _velocities(point, columns, speeds, labels, design):
    terms = design.shape[1]
    matrix, vector = np.empty((terms, terms)), np.empty(terms)
    square, log_determinant = velocity_normal_equations(
        point, columns, speeds, labels, design, matrix, vector
    )
    factor(matrix)
    for i in range(terms):  # |L^-1 vector|^2 is what the zero points take off chi-square
        for j in range(i):
            vector[i] -= matrix[i, j] * vector[j]
        vector[i] /= matrix[i, i]
        square -= vector[i] * vector[i]
        log_determinant += 2 * math.log(matrix[i, i])
    return -0.5 * (square + log_determinant + speeds.shape[0] * LOG_2PI)


@compiled
def largest_parallax(point, columns):
    """Parallax, mas, at which the velocities' orbit is as large as the relative orbit on the sky.

    With both velocity curves that is the orbital parallax; with one of them, the bound beyond
    which the other star would need a negative mass.
    """
    k1 = math.exp(point[columns[K1]]) if columns[K1] >= 0 else 0.0
    k2 = math.exp(point[columns[K2]]) if columns[K2] >= 0 else 0.0
    e, _ = eccentricity_and_phase(point, columns)
    cosine = point[columns[COS_I]]
    sine = math.sqrt((1 - cosine) * (1 + cosine))
    projected = (k1 + k2) * KMS_IN_AU_PER_DAY * math.exp(point[columns[PERIOD]]) / (2 * math.pi)
    return math.exp(point[columns[AXIS]]) * sine / (projected * math.sqrt((1 - e) * (1 + e)))


@compiled
def _parallax(point, columns, parallax):
    value, error = parallax[1], parallax[2]
    single = columns[K1] >= 0 or columns[K2] >= 0
    bound = largest_parallax(point, columns) if single else math.inf
    if parallax[0] == FREE:
        inside = 0 < value + error * point[columns[PARALLAX]] < bound
        return -math.log(_normal_below(value / error)) if inside else -math.inf
    if parallax[0] == DERIVED:
        z = (bound - value) / error
        return -0.5 * z * z - math.log(error) - 0.5 * LOG_2PI
    # The share of the prior of the parallax, the measurement, for which both masses are positive.
    below = _normal_below((bound - value) / error) - _normal_below(-value / error)
    return math.log(below / _normal_below(value / error)) if below > 0 else -math.inf


@compiled
def _normal_below(z):
    return 0.5 * math.erfc(-z / math.sqrt(2.0))


@compiled
def night_probabilities(points, tables, chosen, outlier):
    """Write the mean probability of each row (n,), and of each night (nights,) to be an outlier.

    The rows' probabilities are those among the alternatives of a night if it is no outlier.
    """
    rows = tables.places.shape[0]
    inside, outside = np.empty(rows), np.empty(rows)
    columns = tables.columns
    outliers = columns[OUTLIERS] >= 0
    chosen[:] = 0.0
    outlier[:] = 0.0
    for s in range(points.shape[0]):
        position_densities(points[s], tables, inside, outside)
        row = 0
        while row < rows:
            first, night = row, tables.place_labels[row, 0]
            likelihood, wide = -math.inf, -math.inf
            while row < rows and tables.place_labels[row, 0] == night:
                likelihood = _log_sum(likelihood, inside[row])
                if outliers:
                    wide = _log_sum(wide, outside[row])
                row += 1
            for k in range(first, row):
                chosen[k] += math.exp(inside[k] - likelihood) / points.shape[0]
            if outliers:
                share = max(points[s, columns[OUTLIERS]], 1e-300)  # its logarithm is wanted
                yes, no = math.log(share) + wide, math.log1p(-share) + likelihood
                outlier[night] += math.exp(yes - _log_sum(yes, no)) / points.shape[0]
