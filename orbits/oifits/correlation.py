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


class Lookup:
    """A function of whole numbers given at some points; of equal points the first counts."""

    def __init__(self, points: np.ndarray, values: np.ndarray) -> None:
        order = np.argsort(points, kind="stable")
        self._points, self._values = points[order], values[order]

    def __call__(self, queries: np.ndarray) -> np.ndarray:
        """The values at `queries`; -1 where none is given."""
        if not self._points.size:
            return np.full(queries.shape, -1)
        place = np.searchsorted(self._points, queries).clip(max=self._points.size - 1)
        return np.where(self._points[place] == queries, self._values[place], -1)


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

    def matrix(self, numbers: np.ndarray) -> "csr_array | None":
        """Correlation matrix of data with these numbers (-1: none); None if all are independent."""
        from scipy.sparse import coo_array, eye_array

        known = np.flatnonzero(numbers >= 0)
        place = Lookup(numbers[known], known)
        rows, cols, values = [], [], []
        for table in self.tables:
            i, j, keep = self.pairs(table)
            # NaN fails the second condition too.
            keep &= (i != j) & (np.abs(table.corr) <= 1) & (table.corr != 0)
            i, j = place(i[keep]), place(j[keep])
            kept = (i >= 0) & (j >= 0)
            rows.append(i[kept])
            cols.append(j[kept])
            values.append(table.corr[keep][kept])
        i, j, r = (np.concatenate(parts) for parts in (rows, cols, values))
        if not i.size:
            return None
        # A pair that is listed twice, in whichever order, counts once.
        _, first = np.unique(np.minimum(i, j) * len(numbers) + np.maximum(i, j), return_index=True)
        i, j, r = i[first], j[first], r[first]
        shape = (len(numbers), len(numbers))
        upper = coo_array((r, (i, j)), shape=shape)
        return (upper + upper.T + eye_array(len(numbers))).tocsr()


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
        lowest = _lowest_eigenvalues(entries, group, np.flatnonzero(sizes == size), int(size))
        for which, value in lowest.items():
            if value < -ROUNDING:
                factor[group == which] = (1 - RIDGE) / (1 - value)
                smallest, changed = min(smallest, value), changed + 1
    if not changed:
        return matrix, None
    values = np.where(entries.row == entries.col, 1.0, entries.data * factor[entries.row])
    shrunk = matrix.copy()
    shrunk.data = values  # the entries of a csr matrix and of its coo twin are in the same order
    return shrunk, Repair(changed, smallest)


def _lowest_eigenvalues(
    entries: "coo_array", group: np.ndarray, chosen: np.ndarray, size: int
) -> dict[int, float]:
    """The smallest eigenvalue of each of the groups `chosen`, all of `size` data."""
    members = np.flatnonzero(np.isin(group, chosen))
    members = members[np.argsort(group[members], kind="stable")].reshape(-1, size)
    place = np.full(len(group), -1)
    place[members] = np.arange(size)
    if size > LARGE:
        return {int(group[rows[0]]): _lowest_by_iteration(entries, rows) for rows in members}
    block = np.full(len(group), -1)
    block[members] = np.arange(len(members))[:, None]
    inside = block[entries.row] >= 0
    row, col = entries.row[inside], entries.col[inside]
    dense = np.zeros((len(members), size, size))
    dense[block[row], place[row], place[col]] = entries.data[inside]
    lowest = np.linalg.eigvalsh(dense)[:, 0]
    return dict(zip(group[members[:, 0]].tolist(), lowest.tolist(), strict=True))


def _lowest_by_iteration(entries: "coo_array", rows: np.ndarray) -> float:
    from scipy.sparse import eye_array
    from scipy.sparse.linalg import eigsh

    # The tolerance is relative: with 1 added, an eigenvalue near 0 is no harder than any other.
    block = entries.tocsr()[rows][:, rows] + eye_array(rows.size)
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
