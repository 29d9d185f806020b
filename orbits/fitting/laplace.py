"""From least-squares solutions to normal densities in the charts of the space."""

from dataclasses import dataclass

import numpy as np

from .data import Data
from .refine import Fits
from .space import DIRECT, PLAIN, RETROGRADE


@dataclass(frozen=True, eq=False, kw_only=True)
class Normal:
    """A normal density in one chart, standing for one solution."""

    chart: int
    mean: np.ndarray
    """(d,)"""
    covariance: np.ndarray
    """(d, d)"""
    log_weight: float
    """ln of the evidence that the solution would have if it were exactly normal."""


def normals(data: Data, fits: Fits) -> list[Normal]:
    """Laplace's approximation of each solution, its widths limited by those of the prior."""
    return [_normal(data, fits, row) for row in range(len(fits.values))]


def _normal(data: Data, fits: Fits, row: int) -> Normal:
    """One solution; coordinates that least squares does not know get a guess from `_nuisances`."""
    space, unknowns, values = data.space, fits.unknowns, fits.values[row]
    scatter = _scatter(fits.information[row])
    names = list(space.names)
    mean = np.zeros(space.dimensions)
    chart, pull = PLAIN, np.zeros((len(values), space.dimensions))

    def link(name: str, *, unknown: str | None = None) -> None:
        mean[names.index(name)] = values[unknowns[unknown or name]]
        pull[unknowns[unknown or name], names.index(name)] = 1.0

    for name in names:
        if name in unknowns and name not in ("longitude", "node"):
            link(name)
    if "h_x" in names:
        _link_eccentricity(names, unknowns, values, scatter, mean, pull)
    if "p_re" in unknowns:
        chart = _link_constants(names, unknowns, values, scatter, mean, pull)
    elif "inclination" in unknowns:
        link("longitude")
        link("node")
        tilt = values[unknowns["inclination"]]
        mean[names.index("cos_inclination")] = np.cos(tilt)
        slope = np.copysign(max(abs(np.sin(tilt)), 1e-2), np.sin(tilt))
        pull[unknowns["inclination"], names.index("cos_inclination")] = -1 / slope
    else:
        link("longitude")

    kept = [unknowns[name] for name in unknowns.names if name not in data.design_names]
    others = [unknowns[name] for name in data.design_names]
    information = _marginal(fits.information[row], kept, others)
    precision = pull[kept].T @ information @ pull[kept]
    precision += np.diag(_prior_precision(space, chart))
    _nuisances(data, fits, names, mean, precision)
    covariance = np.linalg.inv(precision)
    covariance = (covariance + covariance.T) / 2
    _, log_determinant = np.linalg.slogdet(covariance)
    weight = (
        -0.5 * fits.cost[row]
        + 0.5 * (log_determinant + space.dimensions * np.log(2 * np.pi))
        + space.log_density(chart)
    )
    return Normal(chart=chart, mean=mean, covariance=covariance, log_weight=float(weight))


def _scatter(information: np.ndarray) -> np.ndarray:
    """Standard deviations of the unknowns; large where the data say nothing."""
    scale = np.sqrt(np.maximum(np.diag(information), 1e-300))
    scaled = information / np.outer(scale, scale)
    inverse = np.linalg.inv(scaled + 1e-10 * np.eye(len(scale)))
    return np.sqrt(np.maximum(np.diag(inverse), 0)) / scale


def _marginal(information, kept, others):
    """Information on `kept` when `others` are free."""
    inner = information[np.ix_(kept, kept)]
    if not others:
        return inner
    cross = information[np.ix_(kept, others)]
    return inner - cross @ np.linalg.solve(information[np.ix_(others, others)], cross.T)


def _root_disc(value: complex, scatter: float) -> tuple[complex, np.ndarray]:
    """h with |h| h = value, and d(value)/d(h) (2, 2), kept from vanishing at the centre.

    Within its scatter of 0, `value` says only that |h| is below the root of the scatter: the slope
    there is taken at that radius.
    """
    size = abs(value)
    direction = value / size if size > 0 else 1.0 + 0j
    radius = max(np.sqrt(size), np.sqrt(scatter))
    unit = np.array([direction.real, direction.imag])
    return np.sqrt(size) * direction, radius * (np.eye(2) + np.outer(unit, unit))


def _link_eccentricity(names, unknowns, values, scatter, mean, pull):
    rows, columns = [unknowns["k_re"], unknowns["k_im"]], [names.index("h_x"), names.index("h_y")]
    h, slope = _root_disc(complex(*values[rows]), min(scatter[rows].max(), 1.0))
    mean[columns] = h.real, h.imag
    pull[np.ix_(rows, columns)] = slope


def _link_constants(names, unknowns, values, scatter, mean, pull) -> int:
    """Semimajor axis, u and the angle of the larger constant, in the chart of that constant."""
    p_rows = [unknowns["p_re"], unknowns["p_im"]]
    n_rows = [unknowns["n_re"], unknowns["n_im"]]
    p, n = complex(*values[p_rows]), complex(*values[n_rows])
    chart = DIRECT if abs(p) >= abs(n) else RETROGRADE
    if chart == RETROGRADE:
        p, n, p_rows, n_rows = n, p, n_rows, p_rows
    a = (abs(p) + abs(n)) / 2
    u, slope = _root_disc(n / a, min(scatter[n_rows].max() / a, 1.0))
    axis, angle = names.index("log_axis"), names.index("longitude")
    columns = [names.index("cos_inclination"), names.index("node")]
    mean[axis], mean[angle], mean[columns] = np.log(a), np.angle(p), (u.real, u.imag)
    for rows, value in ((p_rows, p), (n_rows, n)):
        pull[rows, axis] = value.real, value.imag
    pull[p_rows, angle] = -p.imag, p.real
    pull[np.ix_(n_rows, columns)] = a * slope
    # p = a (2 - |u|^2) exp(i angle)
    towards = p / abs(p)
    for column, part in zip(columns, (u.real, u.imag), strict=True):
        pull[p_rows, column] = -2 * a * part * towards.real, -2 * a * part * towards.imag
    return chart


def _prior_precision(space, chart) -> np.ndarray:
    """Inverse variances of the prior in a chart, which limit widths the data do not."""
    precision = np.zeros(space.dimensions)
    for i, name in enumerate(space.names):
        if space.normal[i]:
            precision[i] = 0.0  # least squares holds it as a datum already
        elif name in ("h_x", "h_y"):
            precision[i] = 4.0
        elif chart != PLAIN and name in ("cos_inclination", "node"):
            precision[i] = 2.0
        else:
            precision[i] = 12.0 / (space.high[i] - space.low[i]) ** 2
    return precision


def _nuisances(data, fits, names, mean, precision) -> None:
    """Guesses for jitters and the share of outliers, which least squares treats as known."""
    places, speeds = data.tables.places, data.tables.speeds
    for labels, jitter, variance in (
        (data.tables.place_labels[:, 1], fits.position_jitter, (places[:, 3] + places[:, 5]) / 2),
        (data.tables.speed_labels, fits.velocity_jitter, speeds[:, 2]),
    ):
        for axis in np.unique(labels[labels >= 0]):
            rows = labels == axis
            low, high = data.space.low[axis], data.space.high[axis]
            error = np.sqrt(variance[rows].mean())
            if jitter[rows].mean() > 0.3 * error:
                mean[axis] = np.clip(np.log(jitter[rows].mean()), low, high)
                precision[axis, axis] += rows.sum()
            else:  # not needed: anything much below the errors does
                top = np.clip(np.log(0.5 * error), low + 0.1, high)
                mean[axis] = (low + top) / 2
                precision[axis, axis] += 12.0 / (top - low) ** 2
    if "outlier_fraction" in names:
        axis = names.index("outlier_fraction")
        mean[axis] = data.space.high[axis] / 3
