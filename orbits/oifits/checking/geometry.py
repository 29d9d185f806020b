"""Checks of baselines: against the array, and of triangles against pairs of the same stations."""

import numpy as np

from ...problems import Log
from ..model import T3, BaselineTable, OIFile, Vis, Vis2

ALIKE, SLACK = 0.02, 0.1
"""Relative and absolute (m) difference of baselines that rounding and precession may cause."""
SAME_TIME = 2e-5
"""Rows within this time, d (2 s), were measured together."""


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
    pairs = _pairs(file)
    if pairs is None:
        return
    keys, baselines = pairs
    for table in file.of(T3):
        instrument = _instrument_number(file, table)
        legs = [table.legs[:, 0], table.legs[:, 1], table.legs.sum(axis=1)]
        differs = np.zeros(len(table), dtype=bool)
        for (a, b), leg in zip(((0, 1), (1, 2), (0, 2)), legs, strict=True):
            key, sign = _key(instrument, table, table.sta_index[:, [a, b]])
            place = np.searchsorted(keys, key).clip(max=len(keys) - 1)
            away = np.hypot(*(baselines[place] - sign[:, None] * leg).T)
            differs |= (keys[place] == key) & (away > ALIKE * np.hypot(*leg.T) + SLACK)
        if differs.any():
            log.suspicious(
                table.label,
                f"(u, v) of {np.count_nonzero(differs)} rows (first: row "
                f"{int(np.argmax(differs)) + 1}) are not those of the same stations in OI_VIS2",
                "used as stored",
            )


_KEY = np.dtype([("instrument", "i4"), ("target", "i4"), ("time", "i8"), ("a", "i4"), ("b", "i4")])


def _pairs(file: OIFile) -> tuple[np.ndarray, np.ndarray] | None:
    """Sorted keys of all rows of pairs, and their baselines (n, 2)."""
    keys, baselines = [], []
    for table in (*file.of(Vis2), *file.of(Vis)):
        key, sign = _key(_instrument_number(file, table), table, table.sta_index)
        keys.append(key)
        baselines.append(table.legs[:, 0] * sign[:, None])
    if not keys or not sum(map(len, keys)):
        return None
    unique, first = np.unique(np.concatenate(keys), return_index=True)
    return unique, np.concatenate(baselines)[first]


def _instrument_number(file: OIFile, table: BaselineTable) -> int:
    return [w.insname for w in file.wavelengths].index(table.insname)


def _key(instrument: int, table: BaselineTable, stations: np.ndarray) -> tuple:
    """What rows of the same stations and time share, and the sign that orders the stations."""
    key = np.zeros(len(table), dtype=_KEY)
    key["instrument"], key["target"] = instrument, table.target_id
    time = np.nan_to_num(table.mjd / SAME_TIME, nan=0.0, posinf=0.0, neginf=0.0)
    key["time"] = np.round(np.clip(time, -1e15, 1e15))
    key["a"], key["b"] = stations.min(axis=1), stations.max(axis=1)
    return key, np.where(stations[:, 0] <= stations[:, 1], 1.0, -1.0)


CHECKS = (longer_than_array, triangles_of_pairs)
