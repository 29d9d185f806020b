"""Residuals of many orbits at once against all data, with their analytic Jacobian.

The unknowns are ln P, k = e exp(i m) (see `orbit_jacobian`), the geometry, ln K of each star, and
in units of their priors' standard deviations the zero points, drift and calibration errors. The
geometry is the two complex Thiele-Innes constants for positions alone, so that orbits seen
face-on are no special place; ln a, i, longitude and node with velocities, which fix the latter
two; the longitude for velocities alone.
"""

from dataclasses import dataclass

import numpy as np

from ..masses import orbital_parallax as parallax_of
from .data import Data
from .likelihood import DERIVED
from .orbit_jacobian import constants_of, sky, sky_by_constants, turned_motion

ASSUMED_OUTLIERS = 0.1


@dataclass(frozen=True, eq=False, kw_only=True)
class Unknowns:
    """Where the unknowns of a problem stand in a row of numbers."""

    names: tuple[str, ...]

    def __getitem__(self, name: str) -> int:
        return self.names.index(name)

    def __contains__(self, name: str) -> bool:
        return name in self.names

    @classmethod
    def of(cls, data: Data) -> "Unknowns":
        """The unknowns that the data and the model call for."""
        names = ["log_period"]
        if not data.model.circular:
            names += ["k_re", "k_im"]
        if len(data.tables.places) and len(data.tables.speeds):
            names += ["log_axis", "inclination", "longitude", "node"]
        elif len(data.tables.places):
            names += ["p_re", "p_im", "n_re", "n_im"]
        else:
            names += ["longitude"]
        further = ("log_k1", "log_k2", "parallax", "scale_", "angle_")
        names += [name for name in data.space.names if name.startswith(further)]
        return cls(names=(*names, *data.design_names))


def evaluate(data, unknowns, values, jitters):
    """Cost (S,), residuals (S, N) and Jacobian (S, N, p) of all rows of unknowns."""
    parts = []
    cost = np.zeros(len(values))
    if len(data.tables.places):
        extra, residual, jacobian = position_residuals(data, unknowns, values, jitters[0])
        cost += extra
        parts.append((residual, jacobian))
    further = []
    if len(data.tables.speeds):
        further.append(_velocity_residuals(data, unknowns, values, jitters[1]))
    further.append(_prior_residuals(data, unknowns, values))
    if data.tables.parallax[0] == DERIVED:
        further.append(_parallax_residuals(data, unknowns, values))
    cost += sum(np.square(residual).sum(axis=1) for residual, _ in further)
    residuals, jacobians = zip(*parts, *further, strict=True)
    return cost, np.concatenate(residuals, axis=1), np.concatenate(jacobians, axis=1)


def _k(unknowns, values):
    if "k_re" not in unknowns:
        return np.zeros(len(values), dtype=complex)
    return values[:, unknowns["k_re"]] + 1j * values[:, unknowns["k_im"]]


def model_sky(data, unknowns, values):
    """North + i East (S, n) at the times of the positions, and its derivatives (S, n, p)."""
    time = data.tables.places[:, 0]
    R, *by_motion = turned_motion(time, values[:, 0], _k(unknowns, values), velocity=False)
    if "p_re" in unknowns:
        p = values[:, unknowns["p_re"]] + 1j * values[:, unknowns["p_im"]]
        n = values[:, unknowns["n_re"]] + 1j * values[:, unknowns["n_im"]]
        by_geometry = sky_by_constants(R)
        names = ("p_re", "p_im", "n_re", "n_im")
    else:
        names = ("log_axis", "inclination", "longitude", "node")
        p, n, dp, dn = constants_of(*(values[:, unknowns[name]] for name in names))
        by_geometry = [sky(R, one, two) for one, two in zip(dp, dn, strict=True)]
    place = sky(R, p, n)
    jacobian = np.zeros((*place.shape, values.shape[1]), dtype=complex)
    jacobian[..., 0] = sky(by_motion[0], p, n)
    if "k_re" in unknowns:
        jacobian[..., unknowns["k_re"]] = sky(by_motion[1], p, n)
        jacobian[..., unknowns["k_im"]] = sky(by_motion[2], p, n)
    for name, column in zip(names, by_geometry, strict=True):
        jacobian[..., unknowns[name]] = column
    return _calibrate(data, unknowns, values, place, jacobian)


def _calibrate(data, unknowns, values, place, jacobian):
    """Apply each instrument's errors of scale and orientation."""
    for axis in range(data.space.dimensions):
        name = data.space.names[axis]
        if not name.startswith(("scale_", "angle_")):
            continue
        rows = (data.tables.place_labels[:, 2] == axis) | (data.tables.place_labels[:, 3] == axis)
        value = values[:, unknowns[name], None]
        if name.startswith("scale_"):
            sigma = data.tables.calibration[0]
            factor, slope = 1 + sigma * value, sigma / (1 + sigma * value)
        else:
            sigma = data.tables.calibration[1]
            factor, slope = np.exp(1j * sigma * value), 1j * sigma
        place[:, rows] *= factor
        jacobian[:, rows] *= factor[..., None]
        jacobian[:, rows, unknowns[name]] = place[:, rows] * slope
    return place, jacobian


def position_residuals(data, unknowns, values, jitter):
    """Cost of the positions, and whitened residuals (S, 2n): only chosen rows count."""
    place, jacobian = model_sky(data, unknowns, values)
    places = data.tables.places
    cxx, cxy, cyy = places[:, 3] + jitter**2, places[:, 4], places[:, 5] + jitter**2
    # C^-1 = L L^T with L lower triangular; L^T takes (x, y) to two numbers of unit variance.
    determinant = cxx * cyy - cxy**2
    l11 = np.sqrt(cyy / determinant)
    l21 = -cxy / np.sqrt(cyy * determinant)
    l22 = 1 / np.sqrt(cyy)

    def whiten(x, y):
        return l11 * x + l21 * y, l22 * y

    first, second = whiten(place.imag - places[:, 1], place.real - places[:, 2])
    square = first**2 + second**2 + np.log(determinant) - 2 * places[:, 6]
    cost, weight = _choose(data, square)
    root = np.sqrt(weight)
    jx, jy = np.moveaxis(jacobian.imag, 2, 0), np.moveaxis(jacobian.real, 2, 0)
    one, two = whiten(jx, jy)
    return (
        cost,
        np.concatenate([root * first, root * second], axis=1),
        np.concatenate([np.moveaxis(root * one, 0, 2), np.moveaxis(root * two, 0, 2)], axis=1),
    )


def _choose(data, square):
    """Cost (S,) and weight of each row (S, n): the best alternative, less the outliers."""
    nights = data.tables.place_labels[:, 0]
    starts = np.flatnonzero(np.diff(nights, prepend=-1))
    least = np.minimum.reduceat(square, starts, axis=1)
    chosen = square == least[:, nights]
    if not data.model.outliers:
        return least.sum(axis=1), chosen.astype(float)
    share = min(ASSUMED_OUTLIERS, data.priors.outlier_fraction / 2)
    wide = data.tables.places[:, 1:3] ** 2
    wide = wide.sum(axis=1) / data.tables.field_variance + 2 * np.log(data.tables.field_variance)
    wide = np.minimum.reduceat(wide, starts)
    inside = np.log1p(-share) - least / 2
    outside = np.log(share) - wide / 2
    cost = -2 * np.logaddexp(inside, outside).sum(axis=1)
    weight = 1 / (1 + np.exp(np.clip(outside - inside, -700, 700)))
    return cost, chosen * weight[:, nights]


def model_velocity(data, unknowns, values):
    """Velocities (S, m) and their derivatives (S, m, p)."""
    speeds = data.tables.speeds
    S, *by_motion = turned_motion(speeds[:, 0], values[:, 0], _k(unknowns, values), velocity=True)
    turn = np.exp(1j * values[:, unknowns["longitude"]])[:, None]
    shape = (turn * S).real
    k1, k2 = (
        np.exp(values[:, unknowns[name], None]) * share if name in unknowns else 0.0
        for name, share in (("log_k1", speeds[:, 3]), ("log_k2", speeds[:, 4]))
    )
    amplitude = k1 + k2
    jacobian = np.zeros((*shape.shape, values.shape[1]))
    jacobian[..., 0] = amplitude * (turn * by_motion[0]).real
    if "k_re" in unknowns:
        jacobian[..., unknowns["k_re"]] = amplitude * (turn * by_motion[1]).real
        jacobian[..., unknowns["k_im"]] = amplitude * (turn * by_motion[2]).real
    jacobian[..., unknowns["longitude"]] = amplitude * (1j * turn * S).real
    for name, part in (("log_k1", k1), ("log_k2", k2)):
        if name in unknowns:
            jacobian[..., unknowns[name]] = part * shape
    zero = [unknowns[name] for name in data.design_names]
    jacobian[..., zero] = data.tables.design
    return amplitude * shape + values[:, zero] @ data.tables.design.T, jacobian


def _velocity_residuals(data, unknowns, values, jitter):
    velocity, jacobian = model_velocity(data, unknowns, values)
    error = np.sqrt(data.tables.speeds[:, 2] + jitter**2)
    return (velocity - data.tables.speeds[:, 1]) / error, jacobian / error[:, None]


def _prior_residuals(data, unknowns, values):
    """The normal priors of parallax, zero points and calibration, as if measured to be 0 +- 1."""
    names = [n for n in unknowns.names if n.startswith(("parallax", "scale_", "angle_"))]
    columns = [unknowns[name] for name in (*names, *data.design_names)]
    jacobian = np.zeros((len(values), len(columns), values.shape[1]))
    jacobian[:, np.arange(len(columns)), columns] = 1.0
    return values[:, columns], jacobian


def orbital_parallax(unknowns, values):
    """The parallax (S,) that both velocity curves and the sky imply, and d ln of it (S, p)."""
    k = _k(unknowns, values)
    e = np.abs(k)
    inclination = values[:, unknowns["inclination"]]
    parts = [
        np.exp(values[:, unknowns[name]]) if name in unknowns else np.zeros(len(values))
        for name in ("log_k1", "log_k2")
    ]
    total = parts[0] + parts[1]
    axis = np.exp(values[:, unknowns["log_axis"]])
    folded = np.arccos(np.cos(inclination))
    found = parallax_of(np.exp(values[:, 0]), e, folded, 0.0, total, axis)
    slope = np.zeros(values.shape)
    slope[:, 0] = -1.0
    slope[:, unknowns["log_axis"]] = 1.0
    slope[:, unknowns["inclination"]] = np.cos(inclination) / np.sin(inclination)
    for name, part in zip(("log_k1", "log_k2"), parts, strict=True):
        if name in unknowns:
            slope[:, unknowns[name]] = -part / total
    if "k_re" in unknowns:
        slope[:, unknowns["k_re"]] = k.real / ((1 - e) * (1 + e))
        slope[:, unknowns["k_im"]] = k.imag / ((1 - e) * (1 + e))
    return found, slope


def _parallax_residuals(data, unknowns, values):
    found, slope = orbital_parallax(unknowns, values)
    error = data.parallax.error
    return (
        ((found - data.parallax.value) / error)[:, None],
        (slope * (found / error)[:, None])[:, None, :],
    )
