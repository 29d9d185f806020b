"""What points stand for: elements, masses and sizes, compiled.

The same numbers fill the tables of results (`posterior`) and are held against what is known of
them beforehand (`knowledge`).
"""

import math

import numpy as np

from ..compiled import compiled
from ..masses import (
    double_lined_masses,
    mass_function,
    orbital_parallax,
    single_lined_masses,
    total_mass,
)
from .space import AXIS, COS_I, H_X, H_Y, K1, K2, LONGITUDE, NODE, PERIOD, SUM

NAMES = (
    "period_d",
    "periastron_mjd",
    "eccentricity",
    "semimajor_axis_mas",
    "inclination_deg",
    "node_deg",
    "argument_deg",
    "k1_kms",
    "k2_kms",
    "k_sum_kms",
    "parallax_mas",
    "total_msun",
    "primary_msun",
    "companion_msun",
    "mass_ratio",
    "mass_function_msun",
    "primary_sin3i_msun",
    "companion_sin3i_msun",
    "semimajor_axis_au",
    "periastron_separation_mas",
)
(
    Q_PERIOD, Q_PERIASTRON, Q_E, Q_AXIS, Q_INCLINATION, Q_NODE, Q_ARGUMENT, Q_K1, Q_K2, Q_SUM,
    Q_PARALLAX, Q_TOTAL, Q_PRIMARY, Q_COMPANION, Q_RATIO, Q_FUNCTION, Q_PRIMARY_SIN3I,
    Q_COMPANION_SIN3I, Q_AU, Q_CLOSEST,
) = range(len(NAMES))  # fmt: skip


@compiled
def eccentricity_and_phase(point, columns):
    """Eccentricity, and mean anomaly at the reference time."""
    if columns[H_X] < 0:
        return 0.0, 0.0
    hx, hy = point[columns[H_X]], point[columns[H_Y]]
    return hx * hx + hy * hy, math.atan2(hy, hx)


@compiled
def derive(point, columns, parallax, turn, out):
    """Write the quantities NAMES (20,) of a point (d,); NaN for what the data do not give.

    `parallax` (mas) is the measured one, NaN without; both velocity curves overrule it. The date of
    periastron counts from the reference time. The node and the longitude are turned by `turn`
    (rad), half a turn of which positions cannot tell.
    """
    out[:] = math.nan
    e, phase = eccentricity_and_phase(point, columns)
    period, longitude = math.exp(point[columns[PERIOD]]), point[columns[LONGITUDE]] + turn
    if columns[H_X] < 0:  # the periastron of a circular orbit is its node
        phase = longitude
    out[Q_PERIOD], out[Q_E] = period, e
    out[Q_PERIASTRON] = -period * phase / (2 * math.pi)
    out[Q_ARGUMENT] = math.degrees(longitude - phase)
    k1 = math.exp(point[columns[K1]]) if columns[K1] >= 0 else math.nan
    k2 = math.exp(point[columns[K2]]) if columns[K2] >= 0 else math.nan
    if columns[SUM] >= 0:
        k1, k2, both = math.nan, math.nan, k2
    else:
        both = k1 + k2
    out[Q_K1], out[Q_K2] = k1, k2
    out[Q_SUM] = both if columns[SUM] >= 0 else math.nan
    out[Q_RATIO] = k1 / k2
    single = k2 if math.isnan(k1) else k1
    if math.isnan(both):
        out[Q_FUNCTION] = mass_function(period, e, single)
    if columns[AXIS] < 0:
        out[Q_PRIMARY_SIN3I], out[Q_COMPANION_SIN3I] = double_lined_masses(
            period, e, math.pi / 2, k1, k2
        )
        return
    axis, inclination = math.exp(point[columns[AXIS]]), math.acos(point[columns[COS_I]])
    out[Q_AXIS], out[Q_INCLINATION] = axis, math.degrees(inclination)
    out[Q_NODE] = math.degrees(point[columns[NODE]] + turn)
    across = math.sin(longitude - phase) * math.sin(inclination)
    out[Q_CLOSEST] = axis * (1 - e) * math.sqrt(max(1 - across * across, 0.0))
    if not math.isnan(both):
        parallax = orbital_parallax(period, e, inclination, 0.0, both, axis)
    out[Q_PARALLAX], out[Q_AU] = parallax, axis / parallax
    out[Q_TOTAL] = total_mass(period, axis, parallax)
    if math.isnan(both):
        mine, other = single_lined_masses(period, e, inclination, single, axis, parallax)
        out[Q_PRIMARY], out[Q_COMPANION] = (other, mine) if math.isnan(k1) else (mine, other)
        out[Q_RATIO] = out[Q_COMPANION] / out[Q_PRIMARY]
    else:
        out[Q_PRIMARY], out[Q_COMPANION] = out[Q_TOTAL] * k2 / both, out[Q_TOTAL] * k1 / both


@compiled
def _derive_all(points, columns, parallax, turn, out):
    for s in range(points.shape[0]):
        derive(points[s], columns, parallax[s], turn[s], out[s])


def derived(points: np.ndarray, columns: np.ndarray, parallax: np.ndarray, turn: np.ndarray):
    """(S, 20) quantities NAMES of points (S, d); `parallax` and `turn` are (S,); see `derive`."""
    out = np.empty((len(points), len(NAMES)))
    _derive_all(points, columns, parallax, turn, out)
    return out
