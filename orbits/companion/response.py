"""How the data answer to one more star, as a sum of plane waves over its position.

With e_j(x, y) = exp(-2 pi i (u_j x + v_j y)) at the data's own spatial frequencies, both the first
order in a faint companion's contrast and, at any fixed contrast, the squared visibility and the
bispectrum of a binary are Re(A e): linear in the waves, because the product of the waves of two
sides of a triangle is the wave of the third.
"""

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from ..constants import MAS
from ..sampling import Sampling
from ..visibility import shape_visibility
from .grid import Grid

_NULL = 0.02
"""Visibility below which the phase of the primary no longer answers linearly to a companion; the
response of a closure phase is held back there, so that a null cannot dominate a map."""


@dataclass(frozen=True, eq=False)
class Response:
    """n data that depend on a position as Re(A e), e made of m plane waves; the first is 1."""

    u: np.ndarray
    """(m,) cycles/rad."""
    v: np.ndarray
    """(m,) cycles/rad."""
    matrix: sparse.csr_array
    """(n, m) complex: A."""

    def coefficients(self, weights: np.ndarray) -> np.ndarray:
        """(k, m): the waves of the sums over data with `weights` (k, n)."""
        return (self.matrix.T @ weights.T).T

    def at(self, x: np.ndarray, y: np.ndarray) -> np.ndarray:
        """(p, n): the data at p positions, mas, one by one: slow, and the truth of the maps."""
        waves = np.exp(-2j * np.pi * MAS * (np.outer(self.u, x) + np.outer(self.v, y)))
        return (self.matrix @ waves).real.T

    def square(self, grid: Grid, precision: sparse.csr_array, removed: np.ndarray) -> np.ndarray:
        """d^T (P - sum of z^T z) d at every position of `grid`.

        `precision` (n, n) is P, symmetric, and the rows z of `removed` (k, n) take directions out
        of it. With d = Re(A e) the first term is a sum of waves at the sums and differences of
        pairs of the frequencies that meet in it.
        """
        weighted = precision @ self.matrix
        plain = sparse.coo_array(sparse.triu(self.matrix.T @ weighted))
        crossed = sparse.coo_array(sparse.triu(self.matrix.conj().T @ weighted))
        u, v, coefficients = [], [], []
        for part, sign in ((plain, 1), (crossed, -1)):
            i, j = part.coords
            u.append(self.u[j] + sign * self.u[i])
            v.append(self.v[j] + sign * self.v[i])
            coefficients.append(part.data / np.where(i == j, 2, 1))
        total = grid.sum(np.concatenate(u), np.concatenate(v), np.concatenate(coefficients))
        for part in self._sums(grid, removed):
            total -= part**2
        return total

    def _sums(self, grid: Grid, weights: np.ndarray):
        """Yield the map of each weighted sum of the data, `weights` (k, n)."""
        if not len(weights):
            return
        transform = grid.transform(self.u, self.v)
        waves = self.coefficients(weights)
        for start in range(0, len(waves), 2):
            yield from transform(waves[start : start + 2])


def faint_response(
    sampling: Sampling, visibility: np.ndarray, flux: float, companion: tuple[str, float]
) -> Response:
    """Derivative of V2 and closure phase by the contrast of a companion that is not there yet.

    Parameters
    ----------
    visibility : complex ndarray of shape (m, T)
        Of the scene so far, at the samples.
    flux : float
        Of the scene so far, in units of the primary's.
    companion : (str, float)
        Shape and diameter (mas) of the companion.
    """
    shape, weights = _companion(sampling, *companion), sampling.time_weights
    own = visibility[sampling.v2]
    v2 = _Entries(sampling, shape, first=0)
    v2.constant(-2 * (np.abs(own) ** 2 @ weights) / flux)
    v2.waves(sampling.v2, 2 * np.conj(own) * weights / flux)
    t3 = _Entries(sampling, shape, first=len(sampling.v2))
    sides = visibility[sampling.t3]
    sides = np.where(sampling.turned[:, :, None], np.conj(sides), sides)  # (n_t3, 3, T)
    others = _others(sides)
    triple = (sides.prod(axis=1) @ weights)[:, None, None]
    floor = _NULL**2 * (np.abs(others) ** 2 @ weights).sum(axis=1)[:, None, None]
    floor += np.finfo(float).tiny  # where two sides are null the phase says nothing
    by_side = others * weights * np.conj(triple) / (np.abs(triple) ** 2 + floor) / flux
    for side in range(3):
        # Im(c w) = Re(-i c w), and Im(c w*) = Re(i c* w).
        c = by_side[:, side]
        turned = sampling.turned[:, side, None]
        t3.waves(sampling.t3[:, side], np.where(turned, 1j * np.conj(c), -1j * c))
    return _response(sampling, v2, t3)


def bright_residual(
    sampling: Sampling,
    visibility: np.ndarray,
    flux: float,
    companion: tuple[str, float],
    contrast: float,
    data: np.ndarray,
) -> Response:
    """Data minus the model of a binary of fixed contrast, for `data` (n_v2 + n_t3,).

    Exact for V2 where smearing does not matter. A closure phase enters as the part of the
    bispectrum across the observed phase over its root-mean-square modulus: the residual to first
    order, which a map needs to point at the peaks; the exact model judges those.
    """
    shape, weights = _companion(sampling, *companion), sampling.time_weights
    n2 = len(sampling.v2)
    first = (flux * visibility) @ weights  # (m,)
    second = contrast * (shape @ sampling.band_weights) @ weights
    total = flux + contrast
    v2 = _Entries(sampling, shape, first=0)
    own, other = first[sampling.v2], second[sampling.v2]
    v2.constant(data[:n2] - (np.abs(own) ** 2 + other**2) / total**2)
    v2.waves(sampling.v2, -2 * contrast * np.conj(own)[:, None] * weights / total**2)
    t3 = _Entries(sampling, shape, first=n2)
    a = first[sampling.t3]
    a = np.where(sampling.turned, np.conj(a), a)
    b = second[sampling.t3]
    ahead, behind = b * _others(a), a * _others(b)  # coefficients of w and of its conjugate
    middle = a.prod(axis=1) + b.prod(axis=1)
    size = np.sqrt(np.abs(middle) ** 2 + (np.abs(ahead) ** 2 + np.abs(behind) ** 2).sum(axis=1))
    across = 1j * np.exp(-1j * data[n2:]) / size
    t3.constant((across * middle).real)
    for side in range(3):
        plain, mirrored = across * ahead[:, side], across * behind[:, side]
        turned = sampling.turned[:, side]
        c = np.where(turned, mirrored + np.conj(plain), plain + np.conj(mirrored))
        # The wave carries the companion's shape already: take out its mean, put in the nodes'.
        mean = b[:, side] / contrast
        scale = np.divide(c, mean, out=np.zeros_like(c), where=mean != 0)
        t3.waves(sampling.t3[:, side], scale[:, None] * weights)
    return _response(sampling, v2, t3)


class _Entries:
    """Collects the elements of A for one kind of data; wave 0 is the constant 1."""

    def __init__(self, sampling: Sampling, shape: np.ndarray, *, first: int):
        self.nodes = sampling.u[0].size if len(sampling) else 0
        self.shape = (shape * sampling.band_weights).reshape(len(sampling), self.nodes)
        self.per_time = len(sampling.band_weights)
        self.first = first
        self.rows: list[np.ndarray] = []
        self.columns: list[np.ndarray] = []
        self.values: list[np.ndarray] = []

    def constant(self, values: np.ndarray) -> None:
        """Add `values` (n,) that do not depend on the position."""
        self._add(np.arange(len(values)), np.zeros(len(values), dtype=int), values)

    def waves(self, sample: np.ndarray, factors: np.ndarray) -> None:
        """Add the waves of the companion at `sample` (n,), times `factors` (n, T)."""
        n = len(sample)
        values = np.repeat(factors, self.per_time, axis=1) * self.shape[sample]
        columns = 1 + sample[:, None] * self.nodes + np.arange(self.nodes)
        self._add(np.repeat(np.arange(n), self.nodes), columns.ravel(), values.ravel())

    def _add(self, rows, columns, values) -> None:
        self.rows.append(self.first + rows)
        self.columns.append(columns)
        self.values.append(values.astype(complex))


def _response(sampling: Sampling, *entries: _Entries) -> Response:
    u, v = (np.concatenate([[0.0], part.ravel()]) for part in (sampling.u, sampling.v))
    rows, columns, values = (
        np.concatenate([part for entry in entries for part in getattr(entry, name)])
        for name in ("rows", "columns", "values")
    )
    n = len(sampling.v2) + len(sampling.t3)
    return Response(u, v, sparse.csr_array((values, (rows, columns)), shape=(n, len(u))))


def _companion(sampling: Sampling, shape: str, diameter: float) -> np.ndarray:
    """(m, T, K) visibility of the companion at every node."""
    return shape_visibility(shape, np.pi * MAS * diameter * sampling.modulus)[0]


def _others(sides: np.ndarray) -> np.ndarray:
    """Product of the other two sides, for each of three along axis 1."""
    return np.stack(
        [sides[:, 1] * sides[:, 2], sides[:, 0] * sides[:, 2], sides[:, 0] * sides[:, 1]], axis=1
    )
