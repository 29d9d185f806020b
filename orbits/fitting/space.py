"""The space of parameters: its axes, the region that the priors allow, and charts of it.

A point is a row of plain numbers, one for each axis that the data call for:

log_period       ln of the period in d
h_x, h_y         sqrt(e) cos m and sqrt(e) sin m with m the mean anomaly at the reference time;
                 absent for circular orbits
log_axis         ln of the semimajor axis in mas
cos_inclination
longitude        m + argument of periastron (the argument of latitude of a circular orbit)
node             position angle of the node; both rad
log_k1, log_k2   ln of the velocity semi-amplitudes in km/s
parallax         where masses that need it are known beforehand: its deviation from the measured
                 one, in units of the error
further          nuisances: ln of jitters, the share of outliers, and calibration errors in units
                 of their prior's standard deviation

The prior is uniform in all of these (normal for parallax and calibration errors), because a uniform
eccentricity and phase fill the disc of (h_x, h_y) evenly. Two charts serve positions without
velocities, where node and longitude lose their meaning for orbits seen face-on. The chart
"direct" replaces (cos i, longitude, node) by u = sqrt(1 - cos i) exp(i (longitude - node)) and
longitude + node, the chart "retrograde" has sqrt(1 + cos i), sum and difference exchanged. The
isotropic prior is uniform in both.
"""

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from ..compiled import compiled
from .deviate import deviate
from .priors import Priors

PLAIN, DIRECT, RETROGRADE = range(3)

# Where the compiled functions look up the axes; -1 stands for an axis that is absent.
PERIOD, H_X, H_Y, AXIS, COS_I, LONGITUDE, NODE, K1, K2, OUTLIERS, PARALLAX, SUM = range(12)
AXES = (
    "log_period",
    "h_x",
    "h_y",
    "log_axis",
    "cos_inclination",
    "longitude",
    "node",
    "log_k1",
    "log_k2",
    "outlier_fraction",
    "parallax",
)


@dataclass(frozen=True, eq=False, kw_only=True)
class Space:
    """The axes of a problem and the region of them that the priors allow."""

    names: tuple[str, ...]
    low: np.ndarray
    """(d,) lower ends of the uniform densities; -inf for normal ones."""
    high: np.ndarray
    """(d,) upper ends; for h_x and h_y the radius of the disc's outer edge."""
    eccentricity: tuple[float, float]
    has_velocities: bool
    sum_alone: bool
    """log_k2 stands for K1 + K2: all velocities are differences."""

    @property
    def dimensions(self) -> int:
        """Number of axes."""
        return len(self.names)

    @property
    def columns(self) -> np.ndarray:
        """(12,) int: where each of AXES stands in a point, -1 where absent; SUM is a flag."""
        places = [self.names.index(a) if a in self.names else -1 for a in AXES]
        return np.array([*places, 1 if self.sum_alone else -1])

    @property
    def charts(self) -> tuple[int, ...]:
        """The charts in which a posterior may look simple."""
        return (PLAIN,) if self.has_velocities else (DIRECT, RETROGRADE)

    @property
    def region(self) -> "Region":
        """The same for compiled functions."""
        return Region(
            columns=self.columns,
            low=self.low,
            high=self.high,
            least_e=self.eccentricity[0],
            most_e=self.eccentricity[1],
            normal=self.normal,
        )

    @property
    def normal(self) -> np.ndarray:
        """(d,) bool: axes with a standard normal prior."""
        return np.isneginf(self.low)

    def periodic(self, chart: int) -> np.ndarray:
        """(d,) bool: coordinates of a chart that are angles of period 2 pi."""
        angles = ("longitude", "node") if chart == PLAIN else ("longitude",)
        return np.array([name in angles for name in self.names])

    def log_density(self, chart: int) -> float:
        """ln of the prior density in a chart, but for the exponents of its normal coordinates."""
        lengths = self.high - self.low
        total = -0.5 * math.log(2 * math.pi) * int(self.normal.sum())
        for name, length in zip(self.names, lengths, strict=True):
            if name == "h_x":
                low, high = self.eccentricity
                total -= math.log(math.pi * (high - low))
            elif name == "h_y" or np.isinf(length):
                continue
            elif chart != PLAIN and name in ("cos_inclination", "node"):
                total -= 0.5 * math.log(2 * math.pi)  # together the disc of radius sqrt(2)
            else:
                total -= math.log(length)
        return total


class Region(NamedTuple):
    """A space as plain arrays; see `Space`."""

    columns: np.ndarray
    low: np.ndarray
    high: np.ndarray
    least_e: float
    most_e: float
    normal: np.ndarray


def make_space(
    priors: Priors,
    *,
    positions: bool,
    k1: bool,
    k2: bool,
    sum_alone: bool,
    circular: bool,
    outliers: bool,
    parallax: bool,
    position_jitters: int,
    velocity_jitters: int,
    scales: int,
    angles: int,
) -> Space:
    """The space for the kinds of data at hand and the nuisances asked for."""
    velocities = k1 or k2
    axes: dict[str, tuple[float, float]] = {"log_period": _logs(priors.period)}
    if not circular:
        edge = math.sqrt(priors.eccentricity[1])
        axes |= {"h_x": (-edge, edge), "h_y": (-edge, edge)}
    if positions:
        axes |= {"log_axis": _logs(priors.semimajor_axis), "cos_inclination": (-1.0, 1.0)}
    axes["longitude"] = (0.0, 2 * math.pi)
    if positions:
        # Without velocities half a turn of node and longitude together changes nothing.
        axes["node"] = (0.0, 2 * math.pi if velocities else math.pi)
    if k1:
        axes["log_k1"] = _logs(priors.amplitude)
    if k2:
        axes["log_k2"] = _logs(priors.amplitude)
    if outliers:
        axes["outlier_fraction"] = (0.0, priors.outlier_fraction)
    if parallax:
        axes["parallax"] = (-math.inf, math.inf)
    for i in range(position_jitters):
        axes[f"log_position_jitter_{i}"] = _logs(priors.position_jitter)
    for i in range(velocity_jitters):
        axes[f"log_velocity_jitter_{i}"] = _logs(priors.velocity_jitter)
    for i in range(scales):
        axes[f"scale_{i}"] = (-math.inf, math.inf)
    for i in range(angles):
        axes[f"angle_{i}"] = (-math.inf, math.inf)
    low, high = np.array(list(zip(*axes.values(), strict=True)))
    return Space(
        names=tuple(axes),
        low=low,
        high=high,
        eccentricity=priors.eccentricity,
        has_velocities=velocities,
        sum_alone=sum_alone,
    )


def _logs(bounds: tuple[float, float]) -> tuple[float, float]:
    return math.log(bounds[0]), math.log(bounds[1])


@compiled
def to_chart(point, chart, columns, coordinates):
    """Write the coordinates of `point` in a chart."""
    for k in range(point.size):
        coordinates[k] = point[k]
    if chart == PLAIN:
        return
    cosine = point[columns[COS_I]]
    total = point[columns[LONGITUDE]] + point[columns[NODE]]
    difference = point[columns[LONGITUDE]] - point[columns[NODE]]
    if chart == DIRECT:
        radius, phase, other = math.sqrt(max(1 - cosine, 0.0)), difference, total
    else:
        radius, phase, other = math.sqrt(max(1 + cosine, 0.0)), total, difference
    coordinates[columns[COS_I]] = radius * math.cos(phase)
    coordinates[columns[LONGITUDE]] = other
    coordinates[columns[NODE]] = radius * math.sin(phase)


@compiled
def from_chart(coordinates, chart, columns, point):
    """Write the point that has these coordinates in a chart; the inverse of `to_chart`."""
    for k in range(point.size):
        point[k] = coordinates[k]
    if chart == PLAIN:
        return
    ux, uy, other = (
        coordinates[columns[COS_I]],
        coordinates[columns[NODE]],
        coordinates[columns[LONGITUDE]],
    )
    square, phase = ux * ux + uy * uy, math.atan2(uy, ux)
    point[columns[LONGITUDE]] = (other + phase) / 2
    if chart == DIRECT:
        point[columns[COS_I]], point[columns[NODE]] = 1 - square, (other - phase) / 2
    else:
        point[columns[COS_I]], point[columns[NODE]] = square - 1, (phase - other) / 2


@compiled
def allowed(point, region):
    """Whether a point lies where the prior is not 0; angles may be anywhere."""
    columns = region.columns
    for k in range(point.size):
        if not math.isfinite(point[k]):
            return False
        if k == columns[LONGITUDE] or k == columns[NODE] or k == columns[H_X] or k == columns[H_Y]:
            continue
        if not (region.low[k] <= point[k] <= region.high[k]):
            return False
    if columns[H_X] >= 0:
        e = point[columns[H_X]] ** 2 + point[columns[H_Y]] ** 2
        return region.least_e <= e <= region.most_e
    return True


@compiled
def from_prior(uniform, region, point):
    """Write the point of the prior that d uniform numbers stand for."""
    i, j = region.columns[H_X], region.columns[H_Y]
    for k in range(point.size):
        if region.normal[k]:
            point[k] = deviate(uniform[k])
        else:
            point[k] = region.low[k] + (region.high[k] - region.low[k]) * uniform[k]
    if i >= 0:
        radius = math.sqrt(region.least_e + (region.most_e - region.least_e) * uniform[i])
        phase = 2 * math.pi * uniform[j]
        point[i], point[j] = radius * math.cos(phase), radius * math.sin(phase)
