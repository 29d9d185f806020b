"""Differential phases: which channels each channel of a row is referred to (VISREFMAP).

The phase of a channel against the mean of all N - 1 others is N / (N - 1) times its phase against
the mean of all N; against channels that are the same for all it differs by a constant. Beside a
free mean for every row the two are one, up to that factor.
"""

from dataclasses import replace

import numpy as np

from .model import Vis


def is_differential(table: Vis) -> bool:
    """Whether the phases are said to be differential."""
    return (table.phityp or "").strip().lower() == "differential"


def scale(table: Vis) -> np.ndarray:
    """(nrow,) what brings the phases of each row to a reference common to all its channels."""
    channels = table.visphi.shape[1]
    others = _to_all_others(table) if _mapped(table) else np.zeros(len(table), dtype=bool)
    return np.where(others, (channels - 1) / channels, 1.0)


def before_a_cut(table: Vis) -> Vis:
    """`table` with phases that any of its channels may be taken from.

    Phases against all others are brought to the mean of all, and the map says so: against how many
    they were could not be told from a part of it.
    """
    factor = scale(table)[:, None]
    if (factor == 1).all():
        return table
    everyone = np.where(factor[:, :, None] == 1, table.visrefmap, True)
    return replace(
        table, visphi=table.visphi * factor, visphierr=table.visphierr * factor, visrefmap=everyone
    )


def referred(table: Vis, phase: np.ndarray) -> np.ndarray:
    """Phases (nrow, nwave) less what those of `table` are less: the mean over their references."""
    if not is_differential(table):
        return phase
    if not _mapped(table):
        return phase - phase.mean(axis=1, keepdims=True)
    known = table.visrefmap
    if not known.any(axis=2).all():
        known = known.swapaxes(1, 2)
    count = np.maximum(known.sum(axis=2), 1)
    return phase - np.einsum("rkj,rj->rk", known, phase) / count


def understood(table: Vis) -> np.ndarray:
    """(nrow,) whether the reference is one that `scale` allows for.

    The standard leaves open which axis of VISREFMAP is the channel and which its reference; the
    answer holds for either.
    """
    if not _mapped(table):
        return np.ones(len(table), dtype=bool)
    known = table.visrefmap
    same = (known == known[:, :1]).all(axis=(1, 2)) | (known == known[:, :, :1]).all(axis=(1, 2))
    return same | _to_all_others(table)


def _mapped(table: Vis) -> bool:
    return is_differential(table) and table.visrefmap is not None and table.visphi.shape[1] > 1


def _to_all_others(table: Vis) -> np.ndarray:
    """(nrow,) whether each channel is referred to all but itself."""
    return (table.visrefmap != np.eye(table.visphi.shape[1], dtype=bool)).all(axis=(1, 2))
