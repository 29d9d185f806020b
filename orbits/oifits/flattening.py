"""Flattening: from rows and channels of tables to the plain arrays of an observation."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Self

import numpy as np

from ..observation import OBSERVABLES, Channels, Exposures, Observable, Observation
from . import references
from .correlation import Numbers, mended
from .delays import without_delay
from .model import BaselineTable, OIFile, Vis, Wavelength
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

    def select(self, rows: np.ndarray) -> Self:
        """Only these rows, a boolean array."""
        if rows.all():
            return self
        return replace(self, table=self.table.select(rows), keep=self.keep[rows])


def shares(file: OIFile, ids: list[int], observables: Sequence[str]) -> list[Share]:
    """What each table of `file` gives of each of the observables, for targets with these ids."""
    found = []
    for name in OBSERVABLES:
        for table in file.of(KINDS[name].table) if name in observables else ():
            keep = usable(table, KINDS[name]) & sound(file.wavelength(table.insname))
            keep &= np.isin(table.target_id, ids)[:, None]
            found.append(Share(KINDS[name], table, keep))
    return found


def observation(
    file: OIFile, target: str, given: Sequence[Share], errors: ErrorBars
) -> Observation:
    """The shares of one night as an observation, with the instruments and stations they involve."""
    used = {share.table.insname for share in given}
    sources = {share.table.file for share in given}
    spectra = _Spectra([w for w in file.wavelengths if w.insname in used])
    stations = _Stations(file, given)
    parts: dict[str, Observable] = {}
    for name in OBSERVABLES:
        flat = [
            _flat(share, spectra, stations, errors) for share in given if share.kind.name == name
        ]
        if flat:
            parts[name] = Observable.concatenate(flat)
    return Observation(
        target=target,
        instruments=spectra.names,
        stations=tuple(stations.names),
        phase_order=max((_order(s.table) for s in given if s.kind.name == "visphi"), default=0),
        correlation=_correlation(file, given),
        files=tuple(name for name in file.files if name in sources),
        problems=tuple(file.problems),
        **parts,
    )


def _flat(
    share: Share, spectra: "_Spectra", stations: "_Stations", errors: ErrorBars
) -> Observable:
    table, kind, keep = share.table, share.kind, share.keep
    number = spectra.names.index(table.insname)
    value, error = table[kind.value], table[kind.error]
    # Indices of 64 bits would be as large as the data.
    rows = np.arange(len(table), dtype=np.int32)
    width = np.arange(keep.shape[1], dtype=np.int32) + spectra.first[number]
    if kind.name == "visphi":
        value, error = _differences(table, keep, spectra.channels.wavelength[width])
    if keep.all():
        value, error = value.ravel(), error.ravel()  # views
    else:
        value, error = value[keep], error[keep]
    if kind.phase:
        value, error = np.radians(within_a_turn(value)), np.radians(error)
    return Observable(
        exposures=exposures(table, stations.of(table), number),
        channels=spectra.channels,
        row=np.repeat(rows, np.count_nonzero(keep, axis=1)),
        channel=np.broadcast_to(width, keep.shape)[keep],
        value=value,
        error=errors.apply(kind.name, error),
    )


def _differences(
    table: Vis, keep: np.ndarray, wavelength: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """VISPHI and its errors, deg, without group delays and about a reference common to a row."""
    phase, factor = table.visphi.copy(), references.scale(table)[:, None]
    used = np.flatnonzero(keep.any(axis=0))
    straight = without_delay(np.radians(phase[:, used]), keep[:, used], wavelength[used])
    phase[:, used] = np.degrees(straight)
    return phase * factor, table.visphierr * factor


def _order(table: Vis) -> int:
    """Order of the polynomial in wavelength that was taken out of the phases of `table`."""
    return max(table.phiorder or 0, 0) if references.is_differential(table) else 0


def within_a_turn(degrees: np.ndarray) -> np.ndarray:
    """Phases brought into -180 to 180 deg."""
    if not degrees.size or (degrees.min() >= -180 and degrees.max() <= 180):
        return degrees
    return degrees - 360.0 * np.round(degrees / 360.0)


def exposures(table: BaselineTable, stations: np.ndarray, instrument: int) -> Exposures:
    """The rows of a table, for stations (nrow, k + 1) and an instrument of these numbers."""
    return Exposures(
        legs=table.legs,
        mjd=table.mjd,
        integration=np.where(table.int_time > 0, table.int_time, 0.0),
        stations=stations,
        instrument=np.full(len(table), instrument, dtype=np.int16),
    )


def channels(spectra: Sequence[Wavelength]) -> Channels:
    """The channels of spectral set-ups, one after the other; bands wider than sense as unknown."""
    wave, band = (
        np.concatenate([w[name].astype(np.float64) for w in spectra])
        for name in ("EFF_WAVE", "EFF_BAND")
    )
    return Channels(
        wavelength=wave,
        bandwidth=np.where((band > 0) & (band < wave), band, 0.0),
        instrument=np.repeat(np.arange(len(spectra)), [len(w) for w in spectra]),
    )


class _Spectra:
    """The spectral set-ups that take part, and where the channels of each begin."""

    def __init__(self, spectra: Sequence[Wavelength]) -> None:
        self.names = tuple(w.insname for w in spectra)
        self.channels = channels(spectra)
        self.first = np.cumsum([0, *(len(w) for w in spectra)], dtype=np.int32)


class _Stations:
    """The stations that take part, and the numbers they get.

    Where no OI_ARRAY names them, STA_INDEX does, unless it is the same at both ends of a baseline.
    """

    def __init__(self, file: OIFile, given: Sequence[Share]) -> None:
        self.names: list[str] = []
        self._numbers: dict[str | None, dict[int, int]] = {}
        taken = list(dict.fromkeys(share.table.arrname for share in given))
        for arrname in taken:
            used = [
                s.table.sta_index[s.keep.any(axis=1)] for s in given if s.table.arrname == arrname
            ]
            array = file.array(arrname)
            if array is None:
                real = [pairs[_differ(pairs)].ravel() for pairs in used]
                named = {int(index): str(index) for index in np.unique(np.concatenate(real))}
            else:
                present = np.isin(array.sta_index, np.concatenate([u.ravel() for u in used]))
                rows = zip(array.sta_index[present], array.sta_name[present], strict=True)
                named = {int(index): str(name) or str(index) for index, name in rows}
            prefix = f"{arrname} " if len(taken) > 1 and arrname else ""
            numbers = self._numbers.setdefault(arrname, {})
            for index, name in named.items():
                numbers[index] = len(self.names)
                self.names.append(prefix + name)

    def of(self, table: BaselineTable) -> np.ndarray:
        """Positions in `names` of the stations of each row of `table`; -1 where unknown."""
        known = self._numbers.get(table.arrname, {})
        old, where = np.unique(table.sta_index, return_inverse=True)
        new = np.array([known.get(index, -1) for index in old.tolist()], dtype=np.int16)
        found = new[where].reshape(table.sta_index.shape)
        return np.where(_differ(table.sta_index)[:, None], found, np.int16(-1))


def _differ(stations: np.ndarray) -> np.ndarray:
    """(nrow,) whether the two or three stations of a row are all different."""
    ordered = np.sort(stations, axis=1)
    return (np.diff(ordered) != 0).all(axis=1)


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
