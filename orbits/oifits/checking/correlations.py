"""Checks of the correlations that a file states."""

import numpy as np

from ...problems import Log
from ..correlation import Numbers, first_of_pairs, mended
from ..model import Corr, OIFile


def indices(file: OIFile, log: Log) -> None:
    """IINDX and JINDX name data that exist."""
    for table in file.correlations:
        low, high = np.minimum(table.iindx, table.jindx), np.maximum(table.iindx, table.jindx)
        outside = (low < 1) | (high > table.ndata)
        if outside.any():
            log.unusable(
                table.label,
                f"{np.count_nonzero(outside)} rows name data outside 1 to {table.ndata}",
                "these correlations are left out",
            )


def strengths(file: OIFile, log: Log) -> None:
    """Correlations lie between -1 and 1, and are 1 on the diagonal."""
    for table in file.correlations:
        diagonal = table.iindx == table.jindx
        wrong = np.where(diagonal, table.corr != 1, ~(np.abs(table.corr) <= 1))
        if wrong.any():
            row = int(np.argmax(wrong))
            log.unusable(
                table.label,
                f"column CORR is {table.corr[row]:g} in row {row + 1} (and {wrong.sum() - 1} more)",
                "these correlations are left out",
            )


def repetitions(file: OIFile, log: Log) -> None:
    """No pair is listed twice."""
    for table in file.correlations:
        low, high = np.minimum(table.iindx, table.jindx), np.maximum(table.iindx, table.jindx)
        double = np.count_nonzero(~first_of_pairs(low, high))
        if double:
            log.suspicious(table.label, f"{double} pairs are listed twice", "the first is used")


def ranges(file: OIFile, log: Log) -> None:
    """Tables with a CORRNAME number their data, each with numbers of its own."""
    for corr in file.correlations:
        starts, lengths = _ranges(file, corr, log)
        order = np.argsort(starts, kind="stable")
        ends = starts[order] + lengths[order]
        if (ends[:-1] > starts[order][1:]).any():
            log.suspicious(
                corr.label, "some data have the same number in OI_CORR", "used as they stand"
            )
        if ends.size and (starts.min() < 1 or ends.max() - 1 > corr.ndata):
            log.suspicious(
                corr.label,
                f"some data have numbers outside 1 to {corr.ndata}",
                "taken as independent",
            )


def definite(file: OIFile, log: Log) -> None:
    """Correlations can be those of real data: no combination of them has a negative variance.

    If that is so for the whole matrix, it is for whatever part of it is used.
    """
    numbers = Numbers(file)
    for table in file.correlations:
        matrix = numbers.matrix(numbers.named(table))
        repair = None if matrix is None else mended(matrix)[1]
        if repair is not None:
            log.suspicious(
                table.label,
                f"the correlations of {repair.blocks} groups of data are those of no real data "
                f"(smallest eigenvalue {repair.smallest:.2g})",
                "made smaller until they are",
            )


def _ranges(file: OIFile, corr: Corr, log: Log) -> tuple[np.ndarray, np.ndarray]:
    """First number and number of channels of every row of every quantity."""
    starts, lengths = [np.empty(0, np.int64)], [np.empty(0, np.int64)]
    for table in file.data:
        if table.corrname != corr.corrname:
            continue
        for value, _, index in table.measured:
            if table[index] is None:
                log.suspicious(
                    table.label, f"column {index} is missing", f"{value} is taken as independent"
                )
                continue
            starts.append(table[index].astype(np.int64))
            lengths.append(np.full(len(table), table.flag.shape[1], dtype=np.int64))
    return np.concatenate(starts), np.concatenate(lengths)


CHECKS = (indices, strengths, repetitions, ranges, definite)
