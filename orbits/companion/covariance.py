"""The covariance of an epoch's data, in a form that a full-field map can use.

C = S + U U^T: S is block-diagonal (errors, and correlations between a few data each, such as
closure phases that share baselines), U has a column for each error that many data have in common,
such as a calibration that is wrong by the same amount in all channels of a baseline. The inverse is
that of S less a term of the rank of U (Woodbury), so a map with it costs a few transforms more.

The phase of a single baseline holds the piston of the atmosphere, or refers to other channels of
its row: of the phases of an exposure only what is left beside a mean and a slope is measured.
"""

from dataclasses import dataclass, replace

import numpy as np
from scipy import sparse

from ..errors import InputError
from ..observation import OBSERVABLES, Observable, Observation
from ..sampling import Sampling

_SINGULAR = 1e-8
"""Eigenvalues of a correlation block below this part of the largest are taken for zero: sets of
closure phases are redundant, and what their noise cannot reach their signal cannot reach either."""
_MOST_PISTONS = 4 * 10**7
"""Data times what the phases of each exposure may have in common: 1 GB while it is made ready."""
_INDEFINITE = -1e-3
"""An eigenvalue below this part of the largest is no rounding: the matrix is not a correlation."""


@dataclass(frozen=True, kw_only=True)
class ErrorModel:
    """How the errors of an epoch hang together, beyond what its files say."""

    correlated: bool = True
    """Use the correlations that the files list."""
    shared_baselines: bool = False
    """Closure phases get their errors from those of their baselines' phases: two triangles of one
    exposure and channel that share a baseline are correlated by 1/3, or -1/3 where they run through
    it in opposite senses (textbook; e.g. Monnier 2003, Rep. Prog. Phys. 66, 789). Closure phases
    for which the files list correlations keep those."""
    v2_calibration: float = 0.0
    """Error of V2 that all channels of a baseline share through the night, as a part of V2."""
    t3_calibration: float = 0.0
    """Error of the closure phase that all channels of a triangle share, rad."""


@dataclass(frozen=True, eq=False)
class Covariance:
    """Covariance of n data, which become m "whitened" ones with uncorrelated errors of 1."""

    whitener: sparse.csr_array
    """(m, n): turns errors of covariance S into unit white noise."""
    shaper: sparse.csr_array
    """(n, m): turns unit white noise into errors of covariance S."""
    common: np.ndarray
    """(n, k): U."""
    directions: np.ndarray
    """(m, k): orthonormal directions of U among whitened data."""
    excess: np.ndarray
    """(k,): variance along `directions` that U adds to the 1 of S."""
    free: np.ndarray
    """(m, f): orthonormal directions of whitened data about which nothing was measured."""

    @property
    def rank(self) -> int:
        """Number of independent data."""
        return self.whitener.shape[0] - self.free.shape[1]

    @classmethod
    def of(
        cls,
        observation: Observation,
        sampling: Sampling,
        errors: ErrorModel | None = None,
        v2: np.ndarray | None = None,
    ) -> "Covariance":
        """Covariance of the data of `observation`, stacked in the order of `OBSERVABLES`.

        `v2` (n_v2,) are the squared visibilities of which a calibration error is a part: those of
        a model, since noisy ones draw a fit to the low side (Peelle's puzzle; D'Agostini 1994,
        Nucl. Instrum. Methods A 346, 306). By default they are the data.

        Raises
        ------
        InputError
            If the correlations that the files list cannot be those of any errors, or there are too
            many phases of single baselines.
        """
        errors = ErrorModel() if errors is None else errors
        sigma = np.concatenate([getattr(observation, name).error for name in OBSERVABLES])
        return cls.build(
            sigma,
            _correlation(observation, sampling, errors),
            _common(observation, errors, observation.v2.value if v2 is None else v2),
            _pistons(observation),
            name=observation.target,
        )

    @classmethod
    def build(
        cls,
        sigma: np.ndarray,
        correlation: sparse.sparray | None = None,
        common: np.ndarray | None = None,
        free: np.ndarray | None = None,
        *,
        name: str = "data",
    ) -> "Covariance":
        """From errors (n,), a correlation matrix (n, n) (None: independent), and U (n, k).

        The columns of `free` (n, f) can be added to the data without anyone's noticing.
        """
        n = len(sigma)
        whitener, shaper = _factors(sigma, correlation, name)
        common = np.empty((n, 0)) if common is None else common
        directions, size, _ = np.linalg.svd(whitener @ common, full_matrices=False)
        keep = size > _SINGULAR * size.max(initial=1.0)
        tame = cls(
            whitener, shaper, common, directions[:, keep], size[keep] ** 2,
            np.empty((whitener.shape[0], 0)),
        )  # fmt: skip
        if free is None or not free.size:
            return tame
        return replace(tame, free=_orthonormal(tame.whiten(free)))

    def whiten(self, data: np.ndarray) -> np.ndarray:
        """(m, ...) whitened form of `data` (n, ...)."""
        return self._bound(self._tame(self.whitener @ data))

    def back(self, white: np.ndarray) -> np.ndarray:
        """(n, ...) the adjoint of `whiten`: weights of the data from weights of whitened data."""
        return self.whitener.T @ self._tame(self._bound(white))

    def draw(self, rng: np.random.Generator) -> np.ndarray:
        """(n,) one realisation of the errors."""
        white = self.shaper @ rng.standard_normal(self.shaper.shape[1])
        return white + self.common @ rng.standard_normal(self.common.shape[1])

    def white_noise(self, rng: np.random.Generator, count: int) -> np.ndarray:
        """(m, count) realisations of whitened errors."""
        return self._bound(rng.standard_normal((self.whitener.shape[0], count)))

    @property
    def removed(self) -> np.ndarray:
        """(k + f, n) rows z such that the inverse of C is that of S less the sum of z^T z."""
        part = np.sqrt(self.excess / (1 + self.excess))
        rows = [self.directions * part, self._tame(self.free)]
        return (self.whitener.T @ np.concatenate(rows, axis=1)).T

    @property
    def dense(self) -> np.ndarray:
        """(n, n) the covariance itself, for small sets and tests."""
        return (self.shaper @ self.shaper.T).toarray() + self.common @ self.common.T

    def _bound(self, white: np.ndarray) -> np.ndarray:
        """Take out what lies along the directions about which nothing was measured."""
        return white - self.free @ (self.free.T @ white) if self.free.size else white

    def _tame(self, white: np.ndarray) -> np.ndarray:
        """Divide the deviation along each common direction by its size."""
        if not self.excess.size:
            return white
        cut = 1 - 1 / np.sqrt(1 + self.excess)
        along = self.directions.T @ white
        return white - self.directions @ (cut.reshape(-1, *[1] * (along.ndim - 1)) * along)


def _factors(sigma, correlation, name) -> tuple[sparse.csr_array, sparse.csr_array]:
    """Sparse W (rank, n) and L (n, rank) with L L^T = S and W L = 1, block by block."""
    n = len(sigma)
    if correlation is None:
        return (
            sparse.diags_array(1 / sigma, format="csr"),
            sparse.diags_array(sigma, format="csr"),
        )
    count, label = sparse.csgraph.connected_components(correlation, directed=False)
    order = np.argsort(label, kind="stable")
    size = np.bincount(label, minlength=count)
    start = np.concatenate([[0], np.cumsum(size)[:-1]])
    correlation = sparse.csr_array(correlation)
    rows, columns, down, up, rank = [], [], [], [], 0
    for s in np.unique(size):
        members = order[start[size == s][:, None] + np.arange(s)]  # (blocks, s)
        values, vectors = np.linalg.eigh(_blocks(correlation, members))
        largest = values[:, -1:]
        if (values < _INDEFINITE * largest).any():
            raise InputError(
                f"{name}: OI_CORR: the correlations listed are not those of any errors (the matrix "
                "has negative eigenvalues); search without them (--ignore-correlations)"
            )
        block, k = np.nonzero(values > _SINGULAR * largest)
        root = np.sqrt(values[block, k])[:, None]
        vector = vectors[block, :, k]  # (kept, s)
        rows.append(np.repeat(rank + np.arange(len(block)), s))
        columns.append(members[block].ravel())
        down.append((vector / root).ravel())
        up.append((vector * root).ravel())
        rank += len(block)
    i, j = np.concatenate(rows), np.concatenate(columns)
    whitener = sparse.csr_array((np.concatenate(down) / sigma[j], (i, j)), shape=(rank, n))
    shaper = sparse.csr_array((np.concatenate(up) * sigma[j], (j, i)), shape=(n, rank))
    return whitener, shaper


def _blocks(matrix: sparse.csr_array, members: np.ndarray) -> np.ndarray:
    """(blocks, s, s) dense blocks of `matrix` at rows and columns `members` (blocks, s)."""
    blocks, s = members.shape
    if s == 1:
        return np.ones((blocks, 1, 1))
    place = np.full(matrix.shape[0], -1)
    place[members.ravel()] = np.tile(np.arange(s), blocks)
    owner = np.full(matrix.shape[0], -1)
    owner[members.ravel()] = np.repeat(np.arange(blocks), s)
    entries = matrix.tocoo()
    mine = owner[entries.row] >= 0
    row, column = entries.row[mine], entries.col[mine]
    dense = np.zeros((blocks, s, s))
    dense[owner[row], place[row], place[column]] = entries.data[mine]
    return dense


def _correlation(observation, sampling, errors) -> sparse.sparray | None:
    listed = observation.correlation if errors.correlated else None
    if not errors.shared_baselines or not len(observation.t3):
        return listed
    sizes = [len(getattr(observation, name)) for name in OBSERVABLES]
    n = sum(sizes)
    blocks = [sparse.eye_array(size) for size in sizes]
    blocks[1] = _shared_baselines(observation.t3, sampling)
    shared = sparse.block_diag([b for b in blocks if b.shape[0]], format="csr")
    if listed is None:
        return shared
    told = np.diff(sparse.csr_array(listed).indptr) > 1  # data with any listed correlation
    free = sparse.diags_array((~told).astype(float))
    off = shared - sparse.eye_array(n)
    return sparse.csr_array(listed + free @ off @ free)


def _shared_baselines(t3: Observable, sampling: Sampling) -> sparse.csr_array:
    """(n_t3, n_t3) correlations of closure phases through the baselines they share."""
    moment = np.unique(
        np.column_stack([t3.mjd, t3.instrument, t3.channel]), axis=0, return_inverse=True
    )[1].ravel()
    side = moment[:, None] * len(sampling) + sampling.t3
    _, column = np.unique(side, return_inverse=True)
    sense = np.where(sampling.turned, -1.0, 1.0)
    row = np.repeat(np.arange(len(t3)), 3)
    through = sparse.csr_array((sense.ravel(), (row, column.ravel())))
    return sparse.csr_array(through @ through.T) / 3


def _orthonormal(columns: np.ndarray) -> np.ndarray:
    """(m, f) orthonormal basis of the span of `columns` (m, p)."""
    directions, size, _ = np.linalg.svd(columns, full_matrices=False)
    directions[~columns.any(axis=1)] = 0.0  # but for rounding they are
    return directions[:, size > _SINGULAR * size.max()]


def _pistons(observation: Observation) -> np.ndarray:
    """(n, f) what the phases of each exposure may have in common: mean, slopes, polynomials."""
    table = observation.visphi
    n = sum(len(getattr(observation, name)) for name in OBSERVABLES)
    if not len(table):
        return np.empty((n, 0))
    wave = table.wavelength / table.wavelength.mean()
    shapes = [wave**power for power in (0, -1, *range(1, observation.phase_order + 1))]
    rows, row = np.unique(table.row, return_inverse=True)
    if n * len(rows) * len(shapes) > _MOST_PISTONS:
        raise InputError(
            f"{observation.target}: phases of {len(rows)} exposures among {n} data are more than "
            "memory holds; take a part of the channels (nodeline inspect --convert --wavelengths), "
            "or no VISPHI"
        )
    columns = np.zeros((n, len(shapes), len(rows)))
    for place, shape in enumerate(shapes):
        columns[n - len(table) + np.arange(len(table)), place, row] = shape
    return columns.reshape(n, -1)


def _common(observation: Observation, errors: ErrorModel, v2: np.ndarray) -> np.ndarray:
    """(n, k) one column for each baseline, and each triangle, of a night."""
    n2, n = len(observation.v2), sum(len(getattr(observation, name)) for name in OBSERVABLES)
    columns = []
    for table, first, scale in (
        (observation.v2, 0, errors.v2_calibration * np.abs(v2)),
        (observation.t3, n2, np.full(len(observation.t3), errors.t3_calibration)),
    ):
        if not scale.any():
            continue
        known = (table.stations >= 0).all(axis=1)
        label = np.column_stack(
            [table.instrument, table.stations, np.where(known, 0, table.row + 1)]
        )
        _, group = np.unique(label, axis=0, return_inverse=True)
        member = np.zeros((n, group.max() + 1))
        member[first + np.arange(len(table)), group.ravel()] = scale
        columns.append(member)
    return np.concatenate(columns, axis=1) if columns else np.empty((n, 0))
