"""Checks for data that are given twice: in one file, or in several that are read together."""

from collections.abc import Iterator

import numpy as np

from ...problems import Log
from ..model import T3, BaselineTable, OIFile, Vis, Vis2

ENOUGH = 16
"""Channels that tell whether two rows are the same."""
SUMS = 2
"""Quantities that are summed: amplitude and phase."""


def within_a_file(file: OIFile, log: Log) -> None:
    """No row of data stands in a file twice."""
    for table, first, count in _repeated(file):
        if table.file == first.file:
            log.suspicious(
                table.label,
                f"{count} rows are the same as in {'itself' if table is first else first.label}",
                "used twice: errors come out too small; remove one",
            )


def between_files(file: OIFile, log: Log) -> None:
    """No row of data stands in two of the files that `file` was joined from."""
    for table, first, count in _repeated(file):
        if table.file != first.file:
            log.suspicious(
                table.label,
                f"{count} rows of {table.file} are the same as in {first.file}",
                "used twice: errors come out too small; leave one out",
            )


def _repeated(file: OIFile) -> Iterator[tuple[BaselineTable, BaselineTable, int]]:
    """Tables with rows that were there before, where the first of them was, and how many."""
    for kind in (Vis, Vis2, T3):
        tables = file.of(kind)
        if not tables:
            continue
        keys = np.concatenate([_keys(file, table) for table in tables])
        source = np.repeat(np.arange(len(tables)), [len(table) for table in tables])
        there = ~np.concatenate([table.flag.all(axis=1) for table in tables])
        there &= (keys[:, -SUMS:] != 0).any(axis=1)  # rows without a number are alike by nature
        keys, source = keys[there], source[there]
        _, first, which = np.unique(keys, axis=0, return_index=True, return_inverse=True)
        first = first[which.ravel()]
        again = np.flatnonzero(first != np.arange(len(keys)))
        if again.size:
            yield tables[source[again[0]]], tables[source[first[again[0]]]], again.size


def _keys(file: OIFile, table: BaselineTable) -> np.ndarray:
    """(nrow, n): time, place and sums of the data, which differ unless everything is the same."""
    instrument = [w.insname for w in file.wavelengths].index(table.insname)
    some = slice(None, None, 1 + table.flag.shape[1] // ENOUGH)
    with np.errstate(over="ignore", invalid="ignore"):  # the numbers can be any
        sums = [np.nansum(table[q[0]][:, some], axis=1) for q in table.quantities[:SUMS]]
    sums += [np.zeros(len(table))] * (SUMS - len(sums))
    where = table.legs.reshape(len(table), -1)
    return np.column_stack(
        [np.full(len(table), instrument), table.target_id, table.mjd, where, *sums]
    )


CHECKS = (within_a_file,)
