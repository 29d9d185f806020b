"""From the tables of a file to observations: one target and one night each, as flat arrays."""

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

import astropy.units as u
import numpy as np

from ..errors import InputError
from ..observation import OBSERVABLES, Observable, Observation
from ..problems import Log, refuse_suspicious
from .checking import check
from .correlation import Numbers, positive_definite
from .flipping import flipped
from .joining import join
from .links import plain
from .loading import load
from .model import DataTable, OIFile
from .observables import KINDS, ErrorBars, Kind, sound, usable
from .selecting import EVERYTHING, Selection, select, target_ids
from .utc import night_label

GAP = 8 * u.hour
"""A pause longer than this starts a new night: within a night data follow each other sooner."""

AS_STATED = ErrorBars()
DEFAULT = ("v2", "t3")

Paths = str | Path | Sequence[str | Path]


def read(
    paths: Paths, *, target: str | None = None, night: str | None = None, **options: object
) -> Observation:
    """Read one night of one target from one or several OIFITS files.

    Parameters
    ----------
    target : str, optional
        Name of the target (case and blanks do not matter); needed where there are several.
    night : str, optional
        Date of the night's mean time, UTC, as "2026-03-14" (with the time, where one date has
        two); needed where there are several.
    **options
        As for `read_epochs`.

    Raises
    ------
    InputError
        If a file is unusable, or holds several targets or nights and none was chosen.
    """
    epochs = read_epochs(paths, target=target, **options)
    chosen = [e for e in epochs if night is None or night_label(e.mjd).startswith(night)]
    if len(chosen) != 1:
        found = f"{len(chosen) or 'no'} night{'s' if len(chosen) != 1 else ''}"
        raise InputError(
            f"{', '.join(map(str, _listed(paths)))}: {found} {night or ''} of {epochs[0].target}; "
            f"choose one of {', '.join(night_label(e.mjd) for e in epochs)}"
        )
    return chosen[0]


def read_epochs(
    paths: Paths,
    *,
    target: str | None = None,
    gap: u.Quantity = GAP,
    flip_phase: bool = False,
    selection: Selection = EVERYTHING,
    errors: ErrorBars = AS_STATED,
    observables: Sequence[str] = DEFAULT,
    strict: bool = False,
) -> list[Observation]:
    """Read all nights of one target from one or several OIFITS files, in time order.

    Parameters
    ----------
    paths : path, or sequence of paths
        Files that are read as one set of data.
    target : str, optional
        Name of the target; needed where there are several.
    gap : Quantity
        A pause longer than this between data starts a new night.
    flip_phase : bool
        Reverse the sign of all phases, for files known to use V = integral I exp(+2 pi i ...).
    selection : Selection
        Which part of the data to take.
    errors : ErrorBars
        Floors and factors for the errors that the files state.
    observables : sequence of str
        Which of v2, t3, t3amp, visamp and visphi to take. What the last three mean depends on the
        instrument and its calibration, so they are left out unless asked for.
    strict : bool
        Refuse what is suspicious.

    Raises
    ------
    InputError
        If a file is unusable, or holds several targets and none was chosen.
    ValueError
        If an observable is unknown.
    """
    unknown = set(observables) - set(OBSERVABLES)
    if unknown:
        raise ValueError(f"unknown observables {sorted(unknown)}; there are {OBSERVABLES}")
    files = [load(path) for path in _listed(paths)]
    for file in files:
        file.problems += check(file)
    if strict:
        refuse_suspicious([problem for file in files for problem in file.problems])
    file = select(join(files), selection, target=target)
    if flip_phase:
        file = flipped(file)
    epochs = observations(file, target=target, gap=gap, errors=errors, observables=observables)
    if strict:
        refuse_suspicious([problem for epoch in epochs for problem in epoch.problems])
    return epochs


def observations(
    file: OIFile,
    *,
    target: str | None = None,
    gap: u.Quantity = GAP,
    errors: ErrorBars = AS_STATED,
    observables: Sequence[str] = DEFAULT,
) -> list[Observation]:
    """The nights of one target of a file, in time order; the arguments are those of `read_epochs`.

    Raises
    ------
    InputError
        If no datum is usable, or there are several targets and none was chosen.
    """
    name, ids = _target(file, target)
    builder = _Builder(file, ids, errors)
    parts = {key: builder.observable(KINDS[key]) for key in OBSERVABLES if key in observables}
    times = np.concatenate([observable.mjd for observable, _ in parts.values()])
    if not times.size:
        words = " or ".join(KINDS[key].words for key in parts)
        raise InputError(f"{file.source}: no usable {words} of {name}")
    starts = night_starts(times, gap.to_value(u.day))
    epochs = []
    for number in range(len(starts)):
        chosen = {
            key: np.searchsorted(starts, observable.mjd, side="right") == number + 1
            for key, (observable, _) in parts.items()
        }
        night = {key: part[0].select(chosen[key]) for key, part in parts.items()}
        numbers = np.concatenate([part[1][chosen[key]] for key, part in parts.items()])
        epochs.append(builder.observation(name, night, numbers))
    return epochs


def _listed(paths: Paths) -> list[str | Path]:
    listed = [paths] if isinstance(paths, str | Path) else list(paths)
    if not listed:
        raise ValueError("no file was given")
    return listed


def _target(file: OIFile, wanted: str | None) -> tuple[str, list[int]]:
    """Name and ids of the target that is meant, among those that have data."""
    ids = target_ids(file, wanted)
    used = set(np.concatenate([table.target_id for table in file.data]).tolist())
    names = {
        plain(name): name
        for number, name in zip(
            reversed(file.target.target_id.tolist()),
            reversed(file.target.target.tolist()),
            strict=True,
        )
        if number in used and number in ids
    }
    if len(names) != 1:
        known = ", ".join(repr(name) for name in file.target.target.tolist())
        what = "several targets" if names else f"no data of {wanted!r}"
        raise InputError(f"{file.source}: {what}; choose one of {known}")
    return next(iter(names.values())), ids


def night_starts(times: np.ndarray, gap: float) -> np.ndarray:
    """The first time of each night."""
    ordered = np.unique(times)
    return ordered[np.concatenate([[True], np.diff(ordered) > gap])]


class _Builder:
    """Makes observables, and observations of them, of one target of a file."""

    def __init__(self, file: OIFile, ids: list[int], errors: ErrorBars) -> None:
        self.file, self.ids, self.errors = file, ids, errors
        self.numbers = Numbers(file)
        self.instruments = [w.insname for w in file.wavelengths]
        self.stations: list[str] = []
        self.station_numbers: dict[str | None, dict[int, int]] = {}
        for array in file.arrays:
            prefix = f"{array.arrname} " if len(file.arrays) > 1 else ""
            numbers = self.station_numbers.setdefault(array.arrname, {})
            for index, name in zip(array.sta_index.tolist(), array.sta_name.tolist(), strict=True):
                numbers[index] = len(self.stations)
                self.stations.append(prefix + (name or str(index)))

    def observable(self, kind: Kind) -> tuple[Observable, np.ndarray]:
        """All data of a kind, and their numbers in the correlation matrices (-1: none)."""
        parts, numbers, first = [], [], 0
        for table in self.file.of(kind.table):
            part, number = self._flat(table, kind, first)
            first += len(table)
            parts.append(part)
            numbers.append(number)
        if not parts:
            return Observable.empty(kind.legs), np.empty(0, dtype=np.int64)
        if len(parts) == 1:
            return parts[0], numbers[0]
        return Observable.concatenate(parts), np.concatenate(numbers)

    def observation(
        self, target: str, night: dict[str, Observable], numbers: np.ndarray
    ) -> Observation:
        """One night as an observation, with only the instruments and stations that took part."""
        log = Log(self.file.source)
        correlation = None
        if self.numbers.total:
            correlation = self.numbers.matrix(numbers)
        if correlation is not None:
            correlation, repair = positive_definite(correlation)
            if repair is not None:
                log.suspicious(
                    "OI_CORR",
                    f"the correlations of {repair.blocks} groups of data are not positive definite "
                    f"(smallest eigenvalue {repair.smallest:.2g})",
                    "made smaller until they are",
                )
        instruments = np.unique(np.concatenate([o.instrument for o in night.values()]))
        stations = np.unique(np.concatenate([o.stations.ravel() for o in night.values()]))
        stations = stations[stations >= 0]
        night = {
            name: replace(
                o,
                instrument=np.searchsorted(instruments, o.instrument).astype(np.int32),
                stations=np.where(o.stations < 0, -1, np.searchsorted(stations, o.stations)).astype(
                    np.int32
                ),
            )
            for name, o in night.items()
        }
        return Observation(
            target=target,
            instruments=tuple(self.instruments[i] for i in instruments),
            stations=tuple(self.stations[i] for i in stations),
            correlation=correlation,
            files=self.file.files,
            problems=(*self.file.problems, *log.problems),
            **night,
        )

    def _flat(self, table: DataTable, kind: Kind, first: int) -> tuple[Observable, np.ndarray]:
        """The usable data of a table, whose rows are numbered from `first`."""
        spectrum = self.file.wavelength(table.insname)
        keep = usable(table, kind) & sound(spectrum)
        keep &= np.isin(table.target_id, self.ids)[:, None]
        row, channel = (index.astype(np.int32) for index in np.nonzero(keep))
        value, error = table[kind.value][keep], table[kind.error][keep]
        if kind.phase:
            value = np.radians(value - 360.0 * np.round(value / 360.0))
            error = np.radians(error)
        wave, band = (a.astype(np.float64) for a in (spectrum.eff_wave, spectrum.eff_band))
        band = np.where((band > 0) & (band < wave), band, 0.0)
        time = np.where(table.int_time > 0, table.int_time, 0.0)
        numbers = self.numbers.of(table, kind.index)
        observable = Observable(
            legs=table.legs[row],
            wavelength=wave[channel],
            bandwidth=band[channel],
            value=value,
            error=self.errors.apply(kind.name, error),
            mjd=table.mjd[row],
            integration=time[row],
            stations=self._stations(table)[row],
            row=row + np.int32(first),
            channel=channel,
            instrument=np.full(row.size, self.instruments.index(table.insname), dtype=np.int32),
        )
        return observable, np.full(row.size, -1) if numbers is None else numbers[keep]

    def _stations(self, table: DataTable) -> np.ndarray:
        """Positions in `self.stations` of the stations of each row; -1 where unknown."""
        known = self.station_numbers.get(table.arrname, {})
        old, where = np.unique(table.sta_index, return_inverse=True)
        new = np.array([known.get(i, -1) for i in old.tolist()], dtype=np.int32)
        return new[where].reshape(table.sta_index.shape)
