"""A proposal for orbits that the data do not confine: constants drawn as the data want them.

Given period, eccentricity and phase, positions are linear in the four real Thiele-Innes constants
p, n (see `orbit_jacobian`). Their prior, log-uniform in the semimajor axis and isotropic, has the
density 1 / (4 a^4 sin^2 i) in (p, n): but for the direction that of a mixture of normal densities
about 0 with all scales alike. Against such a mixture the constants given the rest follow a mixture
of normal densities, too (e.g. Gelman et al. 2013, Bayesian Data Analysis, 14.2), and draws from it
leave only period, eccentricity and phase to be searched. As in `proposal`, the exact prior enters
by the weight of each draw, so that evidence and posterior are not changed by any of this.
"""

import math

import numpy as np

from ..compiled import compiled
from .data import Data
from .derived import eccentricity_and_phase
from .deviate import deviate
from .likelihood import anomaly, factor
from .proposal import PRIOR_SHARE
from .space import AXIS, COS_I, LONGITUDE, NODE, PERIOD, from_prior

RATIO = 3.0
"""Of the scales of neighbouring normal densities."""
ROUNDING = 1e-13
"""Share of the largest information below which it is lost in rounding."""


def suits(data: Data) -> bool:
    """Whether there are positions alone, those of two nights at least beyond doubt."""
    if data.velocities is not None or data.model.outliers:
        return False
    return int((np.bincount(data.tables.place_labels[:, 0]) == 1).sum()) >= 2


def scales_of(data: Data) -> np.ndarray:
    """(K,) scales, mas, of the normal densities that make up the prior of the constants."""
    low, high = data.priors.semimajor_axis
    count = 2 + math.ceil(math.log(high / low) / math.log(RATIO))
    return np.geomspace(low / RATIO, high, count)


@compiled
def _conditional(point, scales, tables, share, mean, root):
    """Write weight (K,), mean (K, 4) and root of the precision (K, 4, 4) of (p, n) given the rest.

    The order is Re p, Im p, Re n, Im n.
    """
    columns, places, labels = tables.columns, tables.places, tables.place_labels
    e, phase = eccentricity_and_phase(point, columns)
    motion = math.exp(-point[columns[PERIOD]])
    minor, turn_c, turn_s = math.sqrt((1 - e) * (1 + e)), math.cos(phase), math.sin(phase)
    information, vector = np.zeros((4, 4)), np.zeros(4)
    north, east = np.empty(4), np.empty(4)
    for row in range(places.shape[0]):
        night = labels[row, 0]
        before, after = max(row - 1, 0), min(row + 1, places.shape[0] - 1)
        if (row > 0 and labels[before, 0] == night) or (after > row and labels[after, 0] == night):
            continue  # one of several alternatives
        E = anomaly(places[row, 0], motion, phase, e)
        X, Y = math.cos(E) - e, minor * math.sin(E)
        re, im = (X * turn_c + Y * turn_s) / 2, (Y * turn_c - X * turn_s) / 2
        size = 1 + tables.calibration[0] * point[labels[row, 2]] if labels[row, 2] >= 0 else 1.0
        turn = tables.calibration[1] * point[labels[row, 3]] if labels[row, 3] >= 0 else 0.0
        c, s = size * math.cos(turn), size * math.sin(turn)
        for k in range(4):
            n = -im if k % 2 else re
            x = (re if k % 2 else im) * (1 if k < 2 else -1)
            north[k], east[k] = c * n - s * x, c * x + s * n
        extra = math.exp(2 * point[labels[row, 1]]) if labels[row, 1] >= 0 else 0.0
        cxx, cxy, cyy = places[row, 3] + extra, places[row, 4], places[row, 5] + extra
        determinant = cxx * cyy - cxy * cxy
        for a in range(4):
            by_x = (cyy * east[a] - cxy * north[a]) / determinant
            by_y = (cxx * north[a] - cxy * east[a]) / determinant
            vector[a] += by_x * places[row, 1] + by_y * places[row, 2]
            for b in range(a + 1):
                information[a, b] += by_x * east[b] + by_y * north[b]
    floor = 0.0
    for a in range(4):
        floor += ROUNDING * information[a, a]
    most = -math.inf
    for k in range(scales.size):
        for a in range(4):
            for b in range(a + 1):
                root[k, a, b] = information[a, b]
        share[k] = -4 * math.log(scales[k])
        for a in range(4):
            root[k, a, a] += floor + 1 / scales[k] ** 2
        factor(root[k])
        for a in range(4):
            value = vector[a]
            for b in range(a):
                value -= root[k, a, b] * mean[k, b]
            mean[k, a] = value / root[k, a, a]
            share[k] += 0.5 * mean[k, a] ** 2 - math.log(root[k, a, a])
        _back(root[k], mean[k])
        most = max(most, share[k])
    total = 0.0
    for k in range(scales.size):
        share[k] = math.exp(share[k] - most)
        total += share[k]
    for k in range(scales.size):
        share[k] /= total


@compiled
def _back(root, vector):
    """Solve root^T x = vector in place, for a lower triangular root."""
    for a in range(vector.size - 1, -1, -1):
        for b in range(a + 1, vector.size):
            vector[a] -= root[b, a] * vector[b]
        vector[a] /= root[a, a]


@compiled
def place_linear(cube, scales, tables, region, point):
    """Write the draw (d,) that d + 1 uniform numbers stand for.

    The first number chooses the component, the prior alone where it is small.
    """
    columns, count = region.columns, scales.size
    from_prior(cube[1:], region, point)
    if cube[0] < PRIOR_SHARE:
        return
    share, mean, root = np.empty(count), np.empty((count, 4)), np.empty((count, 4, 4))
    _conditional(point, scales, tables, share, mean, root)
    left, k = (cube[0] - PRIOR_SHARE) / (1 - PRIOR_SHARE), 0
    while k < count - 1 and left > share[k]:
        left -= share[k]
        k += 1
    offset = np.empty(4)
    for a, axis in enumerate((AXIS, COS_I, LONGITUDE, NODE)):
        offset[a] = deviate(cube[columns[axis] + 1])
    _back(root[k], offset)
    for a in range(4):
        offset[a] += mean[k, a]
    p, n = math.hypot(offset[0], offset[1]), math.hypot(offset[2], offset[3])
    plus, minus = math.atan2(offset[1], offset[0]), math.atan2(offset[3], offset[2])
    point[columns[AXIS]] = math.log((p + n) / 2)
    point[columns[COS_I]] = (p - n) / (p + n)
    point[columns[LONGITUDE]] = (plus + minus) / 2
    point[columns[NODE]] = (plus - minus) / 2


@compiled
def linear_ratio(point, scales, tables, region):
    """ln of the proposal's density over the prior's at an allowed point."""
    columns, count = region.columns, scales.size
    share, mean, root = np.empty(count), np.empty((count, 4)), np.empty((count, 4, 4))
    _conditional(point, scales, tables, share, mean, root)
    a, cosine = math.exp(point[columns[AXIS]]), point[columns[COS_I]]
    plus = point[columns[LONGITUDE]] + point[columns[NODE]]
    minus = point[columns[LONGITUDE]] - point[columns[NODE]]
    offset = np.empty(4)
    offset[0], offset[1] = a * (1 + cosine) * math.cos(plus), a * (1 + cosine) * math.sin(plus)
    offset[2], offset[3] = a * (1 - cosine) * math.cos(minus), a * (1 - cosine) * math.sin(minus)
    density = 0.0
    for k in range(count):
        log_density = -2 * math.log(2 * math.pi)
        for i in range(4):
            value = 0.0
            for j in range(i, 4):
                value += root[k, j, i] * (offset[j] - mean[k, j])
            log_density += math.log(root[k, i, i]) - 0.5 * value * value
        density += share[k] * math.exp(log_density)
    # 1 / the prior density in ln a, cos i, longitude and node, and of those in (p, n).
    room = 4 * a**4 * (1 - cosine) * (1 + cosine)
    for axis in (AXIS, COS_I, LONGITUDE, NODE):
        room *= region.high[columns[axis]] - region.low[columns[axis]]
    return math.log(PRIOR_SHARE + (1 - PRIOR_SHARE) * density * room)
