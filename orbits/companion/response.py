"""How the data answer to one more star, as a sum of plane waves over its position.

With e_j(x, y) = exp(-2 pi i (u_j x + v_j y)) at the data's own spatial frequencies, both the first
order in a faint companion's contrast and, at any fixed contrast, the squared visibility and the
bispectrum of a binary are Re(A e): linear in the waves, because the product of the waves of two
sides of a triangle is the wave of the third.
"""

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from ..binary import sides
from ..constants import MAS
from ..observation import OBSERVABLES
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
        waves = self.coefficients(removed)
        # What does not depend on the position needs no transform.
        still = ~waves[:, 1:].any(axis=1)
        total -= (waves[still, 0].real ** 2).sum()
        for part in self._sums(grid, waves[~still]):
            total -= part**2
        return total

    def _sums(self, grid: Grid, waves: np.ndarray):
        """Yield the map of each sum of waves, (k, m) coefficients."""
        if not len(waves):
            return
        transform = grid.transform(self.u, self.v)
        for start in range(0, len(waves), 2):
            yield from transform(waves[start : start + 2])


def faint_response(
    sampling: Sampling, visibility: np.ndarray, flux: float, companion: tuple[str, float]
) -> Response:
    """Derivative of the data by the contrast of a companion that is not there yet.

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
    t3 = _Entries(sampling, shape, first=v2.end(len(sampling.v2)))
    by_side, _ = _logarithmic(visibility, sampling.t3, sampling.turned, weights)
    # A phase is the imaginary part of a logarithm.
    t3.triangles(sampling.t3, sampling.turned, -1j * by_side / flux)
    t3amp = _Entries(sampling, shape, first=t3.end(len(sampling.t3)))
    by_side, size = _logarithmic(visibility, sampling.t3amp, sampling.t3amp_turned, weights)
    t3amp.constant(-3 * size / flux)
    t3amp.triangles(sampling.t3amp, sampling.t3amp_turned, size[:, None, None] * by_side / flux)
    visamp = _Entries(sampling, shape, first=t3amp.end(len(sampling.t3amp)))
    own = visibility[sampling.visamp]
    modulus = np.abs(own)
    visamp.constant(-(modulus @ weights) / flux)
    direction = np.conj(own) / np.where(modulus > 0, modulus, 1.0)
    visamp.waves(sampling.visamp, direction * weights / flux)
    visphi = _Entries(sampling, shape, first=visamp.end(len(sampling.visamp)))
    own = visibility[sampling.visphi] @ weights
    sense = np.where(sampling.visphi_turned, -1.0, 1.0)
    angle = -1j * sense * np.conj(own) / (np.abs(own) ** 2 + _NULL**2) / flux
    visphi.waves(sampling.visphi, angle[:, None] * weights)
    return _response(sampling, v2, t3, t3amp, visamp, visphi)


def _logarithmic(visibility, samples, turned, weights) -> tuple[np.ndarray, np.ndarray]:
    """Derivatives of the log of bispectra by their sides (n, 3, T), and their moduli (n,)."""
    each = sides(visibility, samples, turned)
    others = _others(each)
    triple = each.prod(axis=1) @ weights
    floor = _NULL**2 * (np.abs(others) ** 2 @ weights).sum(axis=1)
    floor += np.finfo(float).tiny  # where two sides are null the phase says nothing
    scale = np.conj(triple) / (np.abs(triple) ** 2 + floor)
    return others * weights * scale[:, None, None], np.abs(triple)


def bright_residual(
    sampling: Sampling,
    visibility: np.ndarray,
    flux: float,
    companion: tuple[str, float],
    contrast: float,
    data: np.ndarray,
    null: np.ndarray,
) -> Response:
    """Data minus the model of a binary of fixed contrast, for stacked `data` (n,).

    Exact for V2 where smearing does not matter. A bispectrum enters as its part across the observed
    closure phase over its root-mean-square modulus, and amplitudes as their parts along the phase
    of the scene so far: residuals to first order, which a map needs to point at the peaks; the
    exact model judges those. Phases of single baselines, whose zero is unknown, take no part: they
    stay at `null` (n,), the residuals of the scene so far.
    """
    shape, weights = _companion(sampling, *companion), sampling.time_weights
    first = (flux * visibility) @ weights  # (m,)
    second = contrast * (shape @ sampling.band_weights) @ weights
    total = flux + contrast
    v2 = _Entries(sampling, shape, first=0)
    own, other = first[sampling.v2], second[sampling.v2]
    v2.constant(data[: v2.end(len(own))] - (np.abs(own) ** 2 + other**2) / total**2)
    v2.waves(sampling.v2, -2 * contrast * np.conj(own)[:, None] * weights / total**2)
    t3 = _Entries(sampling, shape, first=v2.end(len(sampling.v2)))
    pair = _pair(first, second, sampling.t3, sampling.turned)
    across = 1j * np.exp(-1j * data[t3.first : t3.end(len(sampling.t3))]) / pair.size
    t3.constant((across * pair.middle).real)
    t3.pair(sampling.t3, sampling.turned, pair, across, contrast, weights)
    t3amp = _Entries(sampling, shape, first=t3.end(len(sampling.t3)))
    pair = _pair(first, second, sampling.t3amp, sampling.t3amp_turned)
    along = -np.exp(-1j * np.angle(pair.middle)) / total**3
    t3amp.constant(data[t3amp.first : t3amp.end(len(along))] + (along * pair.middle).real)
    t3amp.pair(sampling.t3amp, sampling.t3amp_turned, pair, along, contrast, weights)
    visamp = _Entries(sampling, shape, first=t3amp.end(len(sampling.t3amp)))
    own = first[sampling.visamp]
    end = visamp.end(len(own))
    visamp.constant(data[visamp.first : end] - np.abs(own) / total)
    direction = np.exp(-1j * np.angle(own))
    visamp.waves(sampling.visamp, -contrast * direction[:, None] * weights / total)
    visphi = _Entries(sampling, shape, first=end)
    visphi.constant(null[end:])
    return _response(sampling, v2, t3, t3amp, visamp, visphi)


@dataclass(frozen=True, eq=False)
class _Pair:
    """Bispectra of pairs, times the cube of their flux: middle + sum of ahead w + behind w*."""

    middle: np.ndarray
    ahead: np.ndarray
    behind: np.ndarray
    second: np.ndarray
    """(n, 3) visibilities of the sides of the companion alone, times its contrast."""

    @property
    def size(self) -> np.ndarray:
        """(n,) root-mean-square modulus over all positions."""
        waves = (np.abs(self.ahead) ** 2 + np.abs(self.behind) ** 2).sum(axis=1)
        return np.sqrt(np.abs(self.middle) ** 2 + waves)


def _pair(first: np.ndarray, second: np.ndarray, samples: np.ndarray, turned: np.ndarray) -> _Pair:
    """From the visibilities (m,) of the two stars, each times its flux."""
    a = sides(first[:, None], samples, turned)[..., 0]
    b = second[samples]
    # The product of two sides' waves is the conjugate of the third's as it enters.
    return _Pair(a.prod(axis=1) + b.prod(axis=1), b * _others(a), a * _others(b), b)


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

    def triangles(self, samples: np.ndarray, turned: np.ndarray, factors: np.ndarray) -> None:
        """Add the real parts of `factors` (n, 3, T) times the waves as the sides enter."""
        for side in range(3):
            c, flip = factors[:, side], turned[:, side, None]
            self.waves(samples[:, side], np.where(flip, np.conj(c), c))

    def pair(self, samples, turned, pair: _Pair, factor, contrast: float, weights) -> None:
        """Add the real part of `factor` (n,) times the waves of a pair's bispectra."""
        for side in range(3):
            ahead, behind = factor * pair.ahead[:, side], factor * pair.behind[:, side]
            flip = turned[:, side]
            c = np.where(flip, behind + np.conj(ahead), ahead + np.conj(behind))
            # The wave carries the companion's shape already: take out its mean.
            mean = pair.second[:, side] / contrast
            scale = np.divide(c, mean, out=np.zeros_like(c), where=mean != 0)
            self.waves(samples[:, side], scale[:, None] * weights)

    def end(self, count: int) -> int:
        """Index of the first datum after the `count` of this kind."""
        return self.first + count

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
    n = sum(len(getattr(sampling, name)) for name in OBSERVABLES)
    return Response(u, v, sparse.csr_array((values, (rows, columns)), shape=(n, len(u))))


def _companion(sampling: Sampling, shape: str, diameter: float) -> np.ndarray:
    """(m, T, K) visibility of the companion at every node."""
    return shape_visibility(shape, np.pi * MAS * diameter * sampling.modulus)[0]


def _others(sides: np.ndarray) -> np.ndarray:
    """Product of the other two sides, for each of three along axis 1."""
    return np.stack(
        [sides[:, 1] * sides[:, 2], sides[:, 0] * sides[:, 2], sides[:, 0] * sides[:, 1]], axis=1
    )
