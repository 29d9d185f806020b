"""Least squares from many starts at once: Levenberg (1944) and Marquardt (1963), batched.

The unknowns are those of `residuals`.
"""

from dataclasses import dataclass
from itertools import product

import numpy as np

from ..elements import campbell
from .data import Data
from .residuals import Unknowns, evaluate, model_sky, model_velocity, position_residuals
from .scan import Scan, coarse_error, doubtful, linear_solution

STEPS = 60
OPPOSITES = 20
LARGEST_K = 0.9995
ECCENTRIC = 0.9
RETRIED = 5
RETRIES = tuple(product((0.8, 0.9, 0.97), (-0.1, -0.03, 0.0, 0.03, 0.1)))
"""Eccentricities and shifts of phase, rad, from which very eccentric solutions are tried again."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Fits:
    """Converged least-squares solutions, best first."""

    unknowns: Unknowns
    values: np.ndarray
    """(S, p)"""
    cost: np.ndarray
    """(S,) -2 ln likelihood, but for a constant."""
    information: np.ndarray
    """(S, p, p) J^T J at the solution."""
    position_jitter: np.ndarray
    """(rows,) extra error of each position that was allowed for, mas."""
    velocity_jitter: np.ndarray
    """(rows,) km/s."""


def refine(data: Data, found: Scan, *, most: int, rng: np.random.Generator) -> Fits:
    """Refine the lowest minima of a scan and keep the distinct ones.

    Where the model has jitters, they are estimated from the residuals of the best solution and
    the refinement is repeated with them. Where positions are in doubt, the first refinement has
    them as coarse as the scan had, lest a start that is near but not near enough rejects them all.
    """
    unknowns = Unknowns.of(data)
    starts = [
        start
        for node in zip(*found.starts(most), strict=True)
        for start in _start(data, unknowns, *node, rng)
    ]
    values = np.array(starts)
    jitters = (np.zeros(len(data.tables.places)), np.zeros(len(data.tables.speeds)))
    if doubtful(data):
        coarse = (np.full(len(data.tables.places), coarse_error(data)), jitters[1])
        values, cost, _ = _least_squares(data, unknowns, values, coarse)
        values = _with_opposites(unknowns, values[np.argsort(cost)])
    elif "k_re" in unknowns:
        values, cost, _ = _least_squares(data, unknowns, values, jitters)
        best = values[np.argsort(cost)[:RETRIED]]
        values = np.concatenate([values, *_retries(data, unknowns, best, rng)])
    for _ in range(3 if data.model.position_jitter or data.model.velocity_jitter else 1):
        values, cost, information = _least_squares(data, unknowns, values, jitters)
        keep = _distinct(values, cost, information)
        values, cost, information = values[keep], cost[keep], information[keep]
        used, jitters = jitters, _jitters(data, unknowns, values[0], jitters)
    return Fits(
        unknowns=unknowns,
        values=values,
        cost=cost,
        information=information,
        position_jitter=used[0],
        velocity_jitter=used[1],
    )


def _retries(data, unknowns, values, rng) -> list[np.ndarray]:
    """New starts around very eccentric solutions.

    A start that is a little late or early for a periastron which lasts a thousandth of the period
    ends at the edge of what is an ellipse; a rounder one finds the way.
    """
    made = []
    for row in values:
        k = complex(row[unknowns["k_re"]], row[unknowns["k_im"]])
        if abs(k) > ECCENTRIC:
            for e, shift in RETRIES:
                made += _start(data, unknowns, np.exp(row[0]), e, np.angle(k) + shift, rng)
    return [np.array(made)] if made else []


def _with_opposites(unknowns, values):
    """The solutions, and the best of them with the companion on the primary's other side.

    Where every night has its opposite place among its alternatives, both fit equally.
    """
    other = values[:OPPOSITES].copy()
    if "p_re" in unknowns:
        columns = [unknowns[name] for name in ("p_re", "p_im", "n_re", "n_im")]
        other[:, columns] *= -1
    else:
        other[:, unknowns["node"]] += np.pi
    return np.concatenate([values, other])


def _start(data, unknowns, period, e, phase, rng) -> list[np.ndarray]:
    """Unknowns at a node of the scan; both signs of the velocity vector where they disagree."""
    (A, F, B, G), amplitude = linear_solution(data, period, e, phase, rng)
    row = np.zeros(len(unknowns.names))
    row[0] = np.log(period)
    if "k_re" in unknowns:
        k = max(e, 0.02) * np.exp(1j * phase)
        row[unknowns["k_re"]], row[unknowns["k_im"]] = k.real, k.imag
    along = complex(amplitude[0], amplitude[1]) + complex(amplitude[2], amplitude[3])
    for name, part in (("log_k1", amplitude[:2]), ("log_k2", amplitude[2:])):
        if name in unknowns:
            low, high = data.priors.amplitude
            row[unknowns[name]] = np.log(np.clip(np.hypot(*part), low, high))
    if "p_re" in unknowns:
        p, n = (A + G) + 1j * (B - F), (A - G) - 1j * (B + F)
        p, n = p * np.exp(1j * phase), n * np.exp(1j * phase)
        for name, value in (("p_re", p.real), ("p_im", p.imag), ("n_re", n.real), ("n_im", n.imag)):
            row[unknowns[name]] = value
    elif "log_axis" in unknowns:
        a, inclination, node, argument = campbell(A, B, F, G)
        if np.cos(argument - np.angle(along)) < 0:
            node, argument = node + np.pi, argument + np.pi
        inclination = np.clip(inclination, 0.05, np.pi - 0.05)
        geometry = (np.log(max(a, 1e-12)), inclination, argument + phase, node)
        for name, value in zip(
            ("log_axis", "inclination", "longitude", "node"), geometry, strict=True
        ):
            row[unknowns[name]] = value
        if abs(np.cos(argument - np.angle(along))) < 0.7:  # the sky and the velocities disagree
            other = row.copy()
            other[unknowns["longitude"]] = np.angle(along) + phase
            return [row, other]
    else:
        row[unknowns["longitude"]] = np.angle(along) + phase
    return [row]


def _least_squares(data, unknowns, values, jitters):
    """Minimise all rows of `values` together; returns them with cost and information."""
    values = values.copy()
    damping = np.full(len(values), 1e-2)
    cost, residual, jacobian = evaluate(data, unknowns, values, jitters)
    active = np.ones(len(values), dtype=bool)
    gradient, information = _normal(residual, jacobian)
    for _ in range(STEPS):
        rows = np.flatnonzero(active)
        if rows.size == 0:
            break
        scale = np.einsum("sii->si", information[rows])
        scale = np.maximum(scale, 1e-12 * scale.max(axis=1, keepdims=True) + 1e-300)
        matrix = information[rows].copy()
        np.einsum("sii->si", matrix)[:] += damping[rows, None] * scale + 1e-14 * scale
        step = np.linalg.solve(matrix, -gradient[rows][..., None])[..., 0]
        trial = _confine(data, unknowns, values[rows] + step)
        new_cost, residual, jacobian = evaluate(data, unknowns, trial, jitters)
        better = new_cost < cost[rows]
        gain = cost[rows] - new_cost
        good = rows[better]
        values[good], cost[good] = trial[better], new_cost[better]
        gradient[good], information[good] = _normal(residual[better], jacobian[better])
        damping[rows] = np.where(better, damping[rows] / 5, damping[rows] * 4)
        done = (better & (gain < 1e-6)) | (damping[rows] > 1e8)
        active[rows[done]] = False
    return values, cost, information


def _normal(residual, jacobian):
    transposed = np.swapaxes(jacobian, 1, 2)
    return (transposed @ residual[..., None])[..., 0], transposed @ jacobian


def _confine(data, unknowns, values):
    """Keep period, axis and amplitudes in their priors' ranges and the orbit an ellipse."""
    values[:, 0] = np.clip(values[:, 0], *np.log(data.priors.period))
    if "k_re" in unknowns:
        i, j = unknowns["k_re"], unknowns["k_im"]
        k = np.hypot(values[:, i], values[:, j])
        factor = np.minimum(1.0, min(LARGEST_K, data.space.eccentricity[1]) / np.maximum(k, 1e-9))
        values[:, i] *= factor
        values[:, j] *= factor
    for name, bounds in (
        ("log_axis", data.priors.semimajor_axis),
        ("log_k1", data.priors.amplitude),
        ("log_k2", data.priors.amplitude),
    ):
        if name in unknowns:
            column = unknowns[name]
            values[:, column] = np.clip(values[:, column], *np.log(bounds))
    return values


def _distinct(values, cost, information) -> np.ndarray:
    """Indices of solutions, best first, that lie apart by more than half their own errors."""
    kept: list[int] = []
    for i in np.argsort(cost):
        if not np.isfinite(cost[i]):
            continue
        difference = values[kept] - values[i]
        distance = np.einsum("si,ij,sj->s", difference, information[i], difference)
        if not kept or distance.min() > 0.25:
            kept.append(int(i))
    return np.array(kept, dtype=int)


def _jitters(data, unknowns, best, used):
    """Extra errors by instrument that bring the residuals of the best solution to their size."""
    values = best[None, :]
    position, velocity = (np.zeros_like(part) for part in used)
    if data.model.position_jitter and len(data.tables.places):
        place, _ = model_sky(data, unknowns, values)
        difference = np.column_stack(
            [place[0].imag - data.tables.places[:, 1], place[0].real - data.tables.places[:, 2]]
        )
        _, weight = _chosen_rows(data, unknowns, values, used[0])
        errors = (data.tables.places[:, 3] + data.tables.places[:, 5]) / 2
        square = (difference**2).mean(axis=1)
        position = _by_instrument(data.tables.place_labels[:, 1], square, errors, weight)
    if data.model.velocity_jitter and len(data.tables.speeds):
        model, _ = model_velocity(data, unknowns, values)
        square = (model[0] - data.tables.speeds[:, 1]) ** 2
        velocity = _by_instrument(
            data.tables.speed_labels, square, data.tables.speeds[:, 2], np.ones(len(square))
        )
    return position, velocity


def _chosen_rows(data, unknowns, values, jitter):
    cost, residual, _ = position_residuals(data, unknowns, values, jitter)
    return cost, (residual[0, : len(data.tables.places)] != 0).astype(float)


def _by_instrument(labels, square, errors, weight):
    """sqrt of the mean excess of squared residuals over squared errors, for each label."""
    jitter = np.zeros(len(labels))
    for label in np.unique(labels):
        rows = labels == label
        excess = np.average(square[rows] - errors[rows], weights=weight[rows] + 1e-12)
        floor = 0.01 * errors[rows].mean()
        jitter[rows] = np.sqrt(max(excess, floor))
    return jitter
