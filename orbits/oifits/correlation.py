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


class Numbers:
    """Numbers of data through all the OI_CORR tables of a file, from 0."""

    def __init__(self, file: OIFile) -> None:
        self.tables = file.correlations
        sizes = [max(table.ndata, 0) for table in self.tables]
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

        place = np.full(self.total, -1)
        known = numbers >= 0
        place[numbers[known]] = np.flatnonzero(known)
        rows, cols, values = [], [], []
        for table in self.tables:
            i, j, keep = self.pairs(table)
            # NaN fails the second condition too.
            keep &= (i != j) & (np.abs(table.corr) <= 1) & (table.corr != 0)
            i, j = place[i[keep]], place[j[keep]]
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
    """What it took to make a correlation matrix positive definite."""

    blocks: int
    """Groups of correlated data that had to be changed."""
    smallest: float
    """The smallest eigenvalue before."""


def positive_definite(matrix: "csr_array") -> tuple["csr_array", Repair | None]:
    """`matrix` with the correlations of each group that is not positive definite made smaller.

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
            if value < 1e-10 * size:
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
    block = np.full(len(group), -1)
    block[members] = np.arange(len(members))[:, None]
    inside = block[entries.row] >= 0
    row, col = entries.row[inside], entries.col[inside]
    dense = np.zeros((len(members), size, size))
    dense[block[row], place[row], place[col]] = entries.data[inside]
    lowest = np.linalg.eigvalsh(dense)[:, 0]
    return dict(zip(group[members[:, 0]].tolist(), lowest.tolist(), strict=True))


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
    lookup = {c.corrname: np.zeros(max(c.ndata, 0) + 1, dtype=np.int64) for c in correlations}
    count = dict.fromkeys(lookup, 0)
    for cut in cuts:
        table, name = cut.after, cut.after.corrname
        changes: dict[str, np.ndarray] = {}
        for _, _, index in table.quantities if name in lookup else ():
            if table[index] is None:
                continue
            old = table[index].astype(np.int64)[:, None] + cut.channels
            new = count[name] + 1 + np.arange(old.size).reshape(old.shape)
            count[name] += old.size
            valid = (old >= 1) & (old < lookup[name].size)
            lookup[name][old[valid]] = new[valid]
            changes[index.lower()] = new[:, 0]
        tables.append(replace(table, **changes) if changes else table)
    kept: list[Corr] = []
    for table in correlations:
        if not count[table.corrname]:
            continue
        new = lookup[table.corrname]
        inside = (np.minimum(table.iindx, table.jindx) >= 1) & (
            np.maximum(table.iindx, table.jindx) < new.size
        )
        i, j = (new[np.where(inside, index, 0)] for index in (table.iindx, table.jindx))
        rows = (i > 0) & (j > 0)
        kept.append(
            replace(
                table.select(rows),
                ndata=count[table.corrname],
                iindx=np.minimum(i, j)[rows],
                jindx=np.maximum(i, j)[rows],
            )
        )
    return kept, tables
