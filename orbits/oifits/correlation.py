"""Correlations between data: OI_CORR as a sparse matrix over the data that are kept.

All data that share a CORRNAME are numbered from 1; a row's channels take consecutive numbers from
its CORRINDX. OI_CORR lists pairs of numbers; pairs that are not listed are independent, and every
datum has the correlation 1 with itself (Duvert et al. 2017, A&A 597, A8, section 5.7).
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from .model import Corr, DataTable, OIFile

if TYPE_CHECKING:
    from scipy.sparse import coo_array, csr_array

RIDGE = 0.01
"""Smallest eigenvalue that a repaired matrix has: no combination of data may count for more than
100 times what its own errors say, which is what a matrix that is wrong would make of it."""


MOST_NUMBERS = 2**31 - 1
"""CORRINDX has 32 bits; an NDATA beyond that is a fault of the file."""
ROUNDING = 1e-3
"""Eigenvalues above minus this may be 0 but for the digits that were written. A matrix with zeros
is right as it is: sets of closure phases are redundant."""
LARGE = 1500
"""Groups beyond this size have their smallest eigenvalue found by iteration."""
FILLED = 0.25
"""A large group with more than this part of all correlations is cheaper to factorise than to
iterate on, and the full matrix takes no more memory than a few copies of the sparse one."""


class Lookup:
    """A function of whole numbers given at some points; of equal points the first counts."""

    def __init__(self, points: np.ndarray, values: np.ndarray) -> None:
        order = np.argsort(points, kind="stable")
        self._points, self._values = points[order], values[order]

    def __call__(self, queries: np.ndarray) -> np.ndarray:
        """The values at `queries`; -1 where none is given."""
        if not self._points.size:
            return np.full(queries.shape, -1, dtype=self._values.dtype)
        place = np.searchsorted(self._points, queries).clip(max=self._points.size - 1)
        return np.where(
            self._points[place] == queries, self._values[place], self._values.dtype.type(-1)
        )


class Numbers:
    """Numbers of data through all the OI_CORR tables of a file, from 0."""

    def __init__(self, file: OIFile) -> None:
        self.tables = file.correlations
        sizes = [min(max(table.ndata, 0), MOST_NUMBERS) for table in self.tables]
        starts = np.concatenate([[0], np.cumsum(sizes, dtype=np.int64)])
        self.total = int(starts[-1])
        self._range = {
            table.corrname: (int(start), size)
            for table, start, size in zip(self.tables, starts[:-1], sizes, strict=True)
        }

    def of(self, table: DataTable, index: str) -> np.ndarray | None:
        """(nrow, nwave) numbers of a quantity whose first number is in the column `index`.

        -1 stands for data without correlations; None if that is all of them.
        """
        if table.corrname not in self._range or table[index] is None:
            return None
        start, size = self._range[table.corrname]
        local = table[index].astype(np.int64)[:, None] - 1 + np.arange(table.flag.shape[1])
        return np.where((local >= 0) & (local < size), start + local, -1)

    def pairs(self, table: Corr) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Numbers of the two data of each row of `table`, and which rows name data that exist."""
        start, size = self._range[table.corrname]
        i, j = table.iindx.astype(np.int64) - 1, table.jindx.astype(np.int64) - 1
        valid = (i >= 0) & (i < size) & (j >= 0) & (j < size)
        return start + i, start + j, valid

    def named(self, table: Corr) -> np.ndarray:
        """The numbers that the rows of `table` name, in ascending order."""
        start, size = self._range[table.corrname]
        i, j, valid = self.pairs(table)
        if size > len(table):
            return np.unique(np.concatenate([i[valid], j[valid]]))
        there = np.zeros(size, dtype=bool)
        there[i[valid] - start] = there[j[valid] - start] = True
        return start + np.flatnonzero(there)

    def matrix(self, numbers: np.ndarray) -> "csr_array | None":
        """Correlation matrix of data with these numbers (-1: none); None if all are independent."""
        from scipy.sparse import coo_array

        known = np.flatnonzero(numbers >= 0)
        place = Lookup(numbers[known], known.astype(np.int32))
        parts = []
        for table in self.tables:
            i, j, keep = self.pairs(table)
            # NaN fails the second condition too.
            keep &= (i != j) & (np.abs(table.corr) <= 1) & (table.corr != 0)
            i, j = place(i[keep]), place(j[keep])
            kept = (i >= 0) & (j >= 0)
            parts.append((np.minimum(i, j)[kept], np.maximum(i, j)[kept], table.corr[keep][kept]))
        i, j, r = (np.concatenate(column) for column in zip(*parts, strict=True))
        if not i.size:
            return None
        once = first_of_pairs(i, j)
        if not once.all():
            i, j, r = i[once], j[once], r[once]
        size = len(numbers)
        every = np.arange(size, dtype=np.int32)
        rows, cols = np.concatenate([i, j, every]), np.concatenate([j, i, every])
        r = np.concatenate([r, r, np.ones(size)])
        return coo_array((r, (rows, cols)), shape=(size, size)).tocsr()


def first_of_pairs(low: np.ndarray, high: np.ndarray) -> np.ndarray:
    """(n,) bool: which pairs, `low` not above `high`, were not there before."""
    key = low.astype(np.int64) * 2**32 + high
    if (key[1:] > key[:-1]).all():  # as most writers list them
        return np.ones(key.size, dtype=bool)
    order = np.argsort(key, kind="stable")
    new = np.ones(key.size, dtype=bool)
    new[order[1:]] = key[order[1:]] != key[order[:-1]]
    return new


@dataclass(frozen=True)
class Repair:
    """What it took to make a matrix one of correlations, without negative eigenvalues."""

    blocks: int
    """Groups of correlated data that had to be changed."""
    smallest: float
    """The smallest eigenvalue before."""


def mended(matrix: "csr_array") -> tuple["csr_array", Repair | None]:
    """`matrix` with the correlations of each group that cannot be those of any data made smaller.

    Data that correlate with each other, directly or through others, form a group. All correlations
    of such a group are multiplied by the factor that lifts its smallest eigenvalue to `RIDGE`.
    """
    from scipy.sparse.csgraph import connected_components

    _, group = connected_components(matrix, directed=False)
    entries = matrix.tocoo()
    factor = np.ones(len(group))
    smallest, changed = np.inf, 0
    sizes = np.bincount(group)
    for size in np.unique(sizes[sizes > 1]):
        chosen = np.flatnonzero(np.isin(group, np.flatnonzero(sizes == size)))
        members = chosen[np.argsort(group[chosen], kind="stable")].reshape(-1, size)
        if size > LARGE:
            lowest = [_lowest_of_large(matrix, rows) for rows in members]
        else:
            lowest = _lowest_of_small(_dense(entries, members))
        found = zip(group[members[:, 0]].tolist(), lowest, strict=True)
        for which, value in found:
            if value >= -ROUNDING:
                continue
            factor[group == which] = (1 - RIDGE) / (1 - value)
            smallest, changed = min(smallest, value), changed + 1
    if not changed:
        return matrix, None
    values = np.where(entries.row == entries.col, 1.0, entries.data * factor[entries.row])
    shrunk = matrix.copy()
    shrunk.data = values  # the entries of a csr matrix and of its coo twin are in the same order
    return shrunk, Repair(changed, smallest)


def _dense(entries: "coo_array", members: np.ndarray) -> np.ndarray:
    """(blocks, size, size) matrices of the data `members` (blocks, size)."""
    count, size = members.shape
    place, block = np.full((2, entries.shape[0]), -1)
    place[members] = np.arange(size)
    block[members] = np.arange(count)[:, None]
    row, col, data = entries.row, entries.col, entries.data
    if members.size < len(block):
        inside = block[row] >= 0
        row, col, data = row[inside], col[inside], data[inside]
    dense = np.zeros((count, size, size))
    dense[block[row], place[row], place[col]] = data
    return dense


def _positive(dense: np.ndarray) -> bool:
    """Whether no eigenvalue of any of the blocks is below -`ROUNDING`.

    Then, and only then, there is a Cholesky factor after adding that much to the diagonals, which
    takes a small part of the time of eigenvalues.
    """
    diagonal = np.arange(dense.shape[-1])
    dense[:, diagonal, diagonal] += ROUNDING
    try:
        np.linalg.cholesky(dense)
    except np.linalg.LinAlgError:
        return False
    finally:
        dense[:, diagonal, diagonal] -= ROUNDING
    return True


def _lowest_of_small(dense: np.ndarray) -> list[float]:
    """The smallest eigenvalue of each block, or 0 for all if none is below -`ROUNDING`."""
    return [0.0] * len(dense) if _positive(dense) else np.linalg.eigvalsh(dense)[:, 0].tolist()


def _lowest_of_large(matrix: "csr_array", rows: np.ndarray) -> float:
    """The smallest eigenvalue of a block, to a part in a thousand, or 0 if it is not below
    -`ROUNDING`."""
    from scipy.sparse import eye_array
    from scipy.sparse.linalg import eigsh

    block = matrix[rows][:, rows] if rows.size < matrix.shape[0] else matrix
    if block.nnz > FILLED * rows.size**2 and _positive(block.toarray()[None]):
        return 0.0
    # The tolerance is relative: with 1 added, an eigenvalue near 0 is no harder than any other.
    block = block + eye_array(rows.size, format="csr")
    start = np.cos(np.arange(rows.size))  # any start without symmetry, the same in every run
    lowest = eigsh(block, k=1, which="SA", v0=start, tol=1e-3, ncv=60, return_eigenvectors=False)
    return float(lowest[0]) - 1


@dataclass(frozen=True)
class Cut:
    """What remained of a table of data, with CORRINDX still as they were before."""

    after: DataTable
    channels: np.ndarray
    """Which channels they were, in the order they have now."""


def renumbered(
    correlations: Sequence[Corr], cuts: Sequence[Cut]
) -> tuple[list[Corr], list[DataTable]]:
    """The tables that remained, numbered anew, and their correlations in the new numbers."""
    tables: list[DataTable] = []
    old: dict[str, list[np.ndarray]] = {c.corrname: [] for c in correlations}
    count = dict.fromkeys(old, 0)
    for cut in cuts:
        table, name = cut.after, cut.after.corrname
        changes: dict[str, np.ndarray] = {}
        for _, _, index in table.quantities if name in old else ():
            if table[index] is None:
                continue
            before = table[index].astype(np.int64)[:, None] + cut.channels
            changes[index.lower()] = count[name] + 1 + len(cut.channels) * np.arange(len(table))
            count[name] += before.size
            old[name].append(before.ravel())
        tables.append(replace(table, **changes) if changes else table)
    kept: list[Corr] = []
    for table in correlations:
        if not count[table.corrname]:
            continue
        before = np.concatenate(old[table.corrname])
        new = Lookup(before, np.arange(1, before.size + 1))
        exist = (np.minimum(table.iindx, table.jindx) >= 1) & (
            np.maximum(table.iindx, table.jindx) <= table.ndata
        )
        i, j = new(table.iindx), new(table.jindx)
        rows = exist & (i > 0) & (j > 0)
        kept.append(
            replace(
                table.select(rows),
                ndata=before.size,
                iindx=np.minimum(i, j)[rows],
                jindx=np.maximum(i, j)[rows],
            )
        )
    return kept, tables
