"""Flattening: from rows and channels of tables to the plain arrays of an observation."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Self

import numpy as np

from ..observation import OBSERVABLES, Observable, Observation
from .correlation import Numbers, mended
from .model import BaselineTable, OIFile, Wavelength
from .observables import KINDS, ErrorBars, Kind, sound, usable

if TYPE_CHECKING:
    from scipy.sparse import csr_array


@dataclass(frozen=True)
class Share:
    """What a table has to give of one observable."""

    kind: Kind
    table: BaselineTable
    keep: np.ndarray
    """(nrow, nwave) bool: the data that are used."""
    rows: np.ndarray
    """(nrow,) number of each row through all tables of the observable."""

    def select(self, rows: np.ndarray) -> Self:
        """Only these rows, a boolean array."""
        if rows.all():
            return self
        return replace(
            self, table=self.table.select(rows), keep=self.keep[rows], rows=self.rows[rows]
        )


def shares(file: OIFile, ids: list[int], observables: Sequence[str]) -> list[Share]:
    """What each table of `file` gives of each of the observables, for targets with these ids."""
    found = []
    for name in OBSERVABLES:
        first = 0
        for table in file.of(KINDS[name].table) if name in observables else ():
            keep = usable(table, KINDS[name]) & sound(file.wavelength(table.insname))
            keep &= np.isin(table.target_id, ids)[:, None]
            rows = np.arange(first, first + len(table), dtype=np.int32)
            found.append(Share(KINDS[name], table, keep, rows))
            first += len(table)
    return found


def observation(
    file: OIFile, target: str, given: Sequence[Share], errors: ErrorBars
) -> Observation:
    """The shares of one night as an observation, with the instruments and stations they involve."""
    used = {share.table.insname for share in given}
    sources = {share.table.file for share in given}
    instruments = tuple(w.insname for w in file.wavelengths if w.insname in used)
    stations = _Stations(file, given)
    parts: dict[str, Observable] = {}
    for name in OBSERVABLES:
        flat = [
            _flat(share, file.wavelength(share.table.insname), instruments, stations, errors)
            for share in given
            if share.kind.name == name
        ]
        if flat:
            parts[name] = flat[0] if len(flat) == 1 else Observable.concatenate(flat)
    return Observation(
        target=target,
        instruments=instruments,
        stations=tuple(stations.names),
        correlation=_correlation(file, given),
        files=tuple(name for name in file.files if name in sources),
        problems=tuple(file.problems),
        **parts,
    )


def _flat(
    share: Share,
    spectrum: Wavelength,
    instruments: tuple[str, ...],
    stations: "_Stations",
    errors: ErrorBars,
) -> Observable:
    table, kind, keep = share.table, share.kind, share.keep
    count = np.count_nonzero(keep, axis=1)
    value, error = table[kind.value][keep], table[kind.error][keep]
    if kind.phase:
        value = np.radians(value - 360.0 * np.round(value / 360.0))
        error = np.radians(error)
    wave, band = (a.astype(np.float64) for a in (spectrum.eff_wave, spectrum.eff_band))
    band = np.where((band > 0) & (band < wave), band, 0.0)
    time = np.where(table.int_time > 0, table.int_time, 0.0)
    number = instruments.index(table.insname)

    # Without arrays of indices, which would be as large as the data.
    def by_row(values: np.ndarray) -> np.ndarray:
        return np.repeat(values, count, axis=0)

    def by_channel(values: np.ndarray) -> np.ndarray:
        return np.broadcast_to(values, keep.shape)[keep]

    return Observable(
        legs=by_row(table.legs),
        wavelength=by_channel(wave),
        bandwidth=by_channel(band),
        value=value,
        error=errors.apply(kind.name, error),
        mjd=by_row(table.mjd),
        integration=by_row(time),
        stations=by_row(stations.of(table)),
        row=by_row(share.rows),
        channel=by_channel(np.arange(len(spectrum), dtype=np.int32)),
        instrument=np.full(value.size, number, dtype=np.int16),
    )


class _Stations:
    """The stations that take part, and the numbers they get."""

    def __init__(self, file: OIFile, given: Sequence[Share]) -> None:
        arrays = [a for a in file.arrays if any(s.table.arrname == a.arrname for s in given)]
        self.names: list[str] = []
        self._numbers: dict[str | None, dict[int, int]] = {}
        for array in arrays:
            used = [
                share.table.sta_index[share.keep.any(axis=1)].ravel()
                for share in given
                if share.table.arrname == array.arrname
            ]
            present = np.isin(array.sta_index, np.concatenate(used))
            prefix = f"{array.arrname} " if len(arrays) > 1 else ""
            numbers = self._numbers.setdefault(array.arrname, {})
            for row in np.flatnonzero(present):
                index = int(array.sta_index[row])
                numbers[index] = len(self.names)
                self.names.append(prefix + (str(array.sta_name[row]) or str(index)))

    def of(self, table: BaselineTable) -> np.ndarray:
        """Positions in `names` of the stations of each row of `table`; -1 where unknown."""
        known = self._numbers.get(table.arrname, {})
        old, where = np.unique(table.sta_index, return_inverse=True)
        new = np.array([known.get(index, -1) for index in old.tolist()], dtype=np.int16)
        return new[where].reshape(table.sta_index.shape)


def _correlation(file: OIFile, given: Sequence[Share]) -> "csr_array | None":
    """Correlation matrix of all the data, mended if need be; None if they are independent."""
    numbers = Numbers(file)
    if not numbers.total or not given:
        return None
    parts = []
    for share in given:
        found = numbers.of(share.table, share.kind.index)
        none = np.full(np.count_nonzero(share.keep), -1)
        parts.append(none if found is None else found[share.keep])
    matrix = numbers.matrix(np.concatenate(parts))
    return None if matrix is None else mended(matrix)[0]
