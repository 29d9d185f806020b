"""Checks of baselines: against the array, and of triangles against pairs of the same stations."""

import numpy as np

from ...problems import Log
from ..model import T3, BaselineTable, OIFile, Vis, Vis2

ALIKE, SLACK = 0.02, 0.1
"""Relative and absolute (m) difference of baselines that rounding and precession may cause."""
SAME_TIME = 2e-5
"""Rows within this time, d (2 s), were measured together."""


def no_baselines(file: OIFile, log: Log) -> None:
    """Baselines have a length, but for rows of which nothing counts."""
    for table in file.data:
        if not isinstance(table, BaselineTable):
            continue
        none = (table.legs == 0).all(axis=(1, 2)) & ~table.flag.all(axis=1)
        if none.any():
            log.suspicious(
                table.label,
                f"(u, v) are 0, 0 in {np.count_nonzero(none)} rows (first: row "
                f"{int(np.argmax(none)) + 1})",
                "used as stored: a model has visibility 1 there, whatever the companion",
            )


def longer_than_array(file: OIFile, log: Log) -> None:
    """No projected baseline is longer than the distance of its stations."""
    for table in file.data:
        array = file.array(table.arrname) if isinstance(table, BaselineTable) else None
        if array is None or not len(array) or not len(table):
            continue
        order = np.argsort(array.sta_index, kind="stable")
        place = np.searchsorted(array.sta_index[order], table.sta_index).clip(max=len(array) - 1)
        row = order[place]
        known = (array.sta_index[row] == table.sta_index).all(axis=1)
        position = array.staxyz[row]
        ends = [(0, 1)] if position.shape[1] == 2 else [(0, 1), (1, 2), (0, 2)]
        with np.errstate(over="ignore"):  # a position can be any number
            real = np.stack(
                [np.linalg.norm(position[:, b] - position[:, a], axis=1) for a, b in ends]
            )
        # Stations at one place, or nowhere (NaN), stand for unknown positions.
        long = (real * (1 + ALIKE) + SLACK < table.sides.T) & (real > 0) & known
        if long.any():
            side, first = np.argwhere(long)[0]
            log.suspicious(
                table.label,
                f"{np.count_nonzero(long.any(axis=0))} rows have baselines longer than the "
                f"distance of their stations, such as {table.sides[first, side]:.2f} m "
                f"over {real[side, first]:.2f} m in row {first + 1}",
                "u and v are used as stored",
            )


def triangles_of_pairs(file: OIFile, log: Log) -> None:
    """The sides of a triangle are the baselines that OI_VIS2 and OI_VIS have at the same time."""
    pairs = [(table, (0, 1), table.legs[:, 0]) for table in (*file.of(Vis2), *file.of(Vis))]
    if not sum(len(leg) for _, _, leg in pairs):
        return
    for table in file.of(T3):
        legs = (table.legs[:, 0], table.legs[:, 1], table.legs.sum(axis=1))
        sides = [(table, *side) for side in zip(((0, 1), (1, 2), (0, 2)), legs, strict=True)]
        keys, baselines = zip(*(_oriented(file, *one) for one in (*pairs, *sides)), strict=True)
        count = sum(len(leg) for _, _, leg in pairs)
        key, baseline = np.concatenate(keys), np.concatenate(baselines)
        differs = np.zeros(3 * len(table), dtype=bool)
        # Rows of about the same time are in the same interval, or else in the same when all the
        # intervals are shifted by half.
        for shift in (0.0, 0.5):
            like = _first_alike(np.column_stack([key[:, :-1], np.floor(key[:, -1] + shift)]))
            like = like[count:]
            away = np.hypot(*(baseline[like] - baseline[count:]).T)
            far = away > ALIKE * np.hypot(*baseline[count:].T) + SLACK
            differs |= (like < count) & far
        differs = differs.reshape(3, len(table)).any(axis=0)
        if differs.any():
            log.suspicious(
                table.label,
                f"(u, v) of {np.count_nonzero(differs)} rows (first: row "
                f"{int(np.argmax(differs)) + 1}) are not those of the same stations in OI_VIS2",
                "used as stored",
            )


def _oriented(
    file: OIFile, table: BaselineTable, ends: tuple[int, int], leg: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """What tells the stations and time of rows, (nrow, 5), and the baseline, (nrow, 2).

    The baseline is that from the station of lower index to the other. Times come last, in
    intervals of which each is two times `SAME_TIME` long.
    """
    a, b = table.sta_index[:, ends].T
    time = np.nan_to_num(table.mjd / (2 * SAME_TIME), nan=0.0, posinf=0.0, neginf=0.0)
    instrument = [w.insname for w in file.wavelengths].index(table.insname)
    key = [
        np.full(len(table), instrument), table.target_id,
        np.minimum(a, b), np.maximum(a, b), np.clip(time, -1e15, 1e15),
    ]  # fmt: skip
    return np.column_stack(key), np.where(a <= b, 1.0, -1.0)[:, None] * leg


def _first_alike(keys: np.ndarray) -> np.ndarray:
    """For each row of `keys` the first row that is the same."""
    order = np.lexsort(keys.T)
    new = np.concatenate([[True], (keys[order[1:]] != keys[order[:-1]]).any(axis=1)])
    first = np.empty(len(keys), dtype=int)
    first[order] = order[new][np.cumsum(new) - 1]
    return first


CHECKS = (no_baselines, longer_than_array, triangles_of_pairs)
