"""From the tables of a file to observations: one target and one night each, as flat arrays."""

from collections.abc import Sequence
from pathlib import Path

import astropy.units as u
import numpy as np

from ..errors import InputError
from ..observation import Observable, Observation
from .joining import join
from .links import plain
from .loading import load
from .model import T3, DataTable, OIFile, Vis2

GAP = 8 * u.hour
"""A pause longer than this starts a new night: no night is without data for so long."""

Paths = str | Path | Sequence[str | Path]


def read(
    paths: Paths,
    *,
    target: str | None = None,
    night: str | None = None,
    gap: u.Quantity = GAP,
    flip_phase: bool = False,
) -> Observation:
    """Read one night of one target from one or several OIFITS files.

    Parameters
    ----------
    target : str, optional
        Name of the target (case and blanks do not matter); needed where there are several.
    night : str, optional
        Date of the night's mean time, UTC, as "2026-03-14" (or with a time, where one date has
        two); needed where there are several.
    gap : Quantity
        A pause longer than this between data starts a new night.
    flip_phase : bool
        Reverse the sign of all phases, for files known to use V = integral I exp(+2 pi i ...).

    Raises
    ------
    InputError
        If a file is unusable, or holds several targets or nights and none was chosen.
    """
    epochs = read_epochs(paths, target=target, gap=gap, flip_phase=flip_phase)
    labels = [label(epoch.mjd) for epoch in epochs]
    if night is not None:
        chosen = [e for e, name in zip(epochs, labels, strict=True) if name.startswith(night)]
        what = f"no night {night!r}" if not chosen else f"{len(chosen)} nights {night!r}"
    else:
        chosen, what = epochs, f"{len(epochs)} nights"
    if len(chosen) != 1:
        raise InputError(
            f"{_names(paths)}: {what} of {epochs[0].target}; choose one of {', '.join(labels)}"
        )
    return chosen[0]


def read_epochs(
    paths: Paths,
    *,
    target: str | None = None,
    gap: u.Quantity = GAP,
    flip_phase: bool = False,
) -> list[Observation]:
    """Read all nights of one target, in time order; the arguments are those of `read`.

    Raises
    ------
    InputError
        If a file is unusable, or holds several targets and none was chosen.
    """
    listed = [paths] if isinstance(paths, str | Path) else list(paths)
    if not listed:
        raise ValueError("no file was given")
    file = join([load(path) for path in listed])
    return observations(file, target=target, gap=gap, flip_phase=flip_phase)


def observations(
    file: OIFile, *, target: str | None = None, gap: u.Quantity = GAP, flip_phase: bool = False
) -> list[Observation]:
    """The nights of one target of a file, in time order; the arguments are those of `read`."""
    name, ids = _target(file, target)
    tables = [t for t in file.data if isinstance(t, Vis2 | T3)]
    tables = [t.select(np.isin(t.target_id, ids)) for t in tables]
    stations = _Stations(file)
    parts = [_flatten(table, file, stations) for table in tables]
    sign = -1.0 if flip_phase else 1.0
    v2 = [p for t, p in zip(tables, parts, strict=True) if isinstance(t, Vis2)]
    t3 = [p for t, p in zip(tables, parts, strict=True) if isinstance(t, T3)]
    observables = {"v2": _stack(v2, 1), "t3": _stack(t3, 2)}
    if flip_phase:
        observables["t3"] = _flipped(observables["t3"], sign)
    times = np.concatenate([o.mjd for o in observables.values()])
    if not times.size:
        raise InputError(f"{file.source}: no usable squared visibility or closure phase of {name}")
    starts = _night_starts(times, gap.to_value(u.day))
    epochs = []
    for number in range(len(starts)):
        kept = {
            key: o.select(np.searchsorted(starts, o.mjd, side="right") - 1 == number)
            for key, o in observables.items()
        }
        epochs.append(
            Observation(
                target=name,
                instruments=tuple(w.insname for w in file.wavelengths),
                stations=tuple(stations.names),
                files=tuple(file.source.split(", ")),
                **kept,
            )
        )
    return epochs


def label(mjd: float) -> str:
    """What a night is called: its mean time, UTC, to the minute."""
    from astropy.time import Time

    return Time(mjd, format="mjd", scale="utc").isot[:16]


def _names(paths: Paths) -> str:
    return str(paths) if isinstance(paths, str | Path) else ", ".join(map(str, paths))


def _target(file: OIFile, wanted: str | None) -> tuple[str, list[int]]:
    """Name and ids of the target that is meant."""
    names = file.target.target.tolist()
    used = set(np.concatenate([table.target_id for table in file.data]).tolist())
    groups: dict[str, list[int]] = {}
    for number, name in zip(file.target.target_id.tolist(), names, strict=True):
        if number in used:
            groups.setdefault(plain(name), []).append(number)
    shown = {plain(name): name for name in reversed(names)}
    known = ", ".join(repr(shown[key]) for key in groups)
    if wanted is None and len(groups) > 1:
        raise InputError(f"{file.source}: several targets; choose one of {known}")
    key = next(iter(groups)) if wanted is None else plain(wanted)
    if key not in groups:
        raise InputError(f"{file.source}: no target {wanted!r}; there is {known}")
    return shown[key], groups[key]


class _Stations:
    """Names of the stations of all arrays of a file, and the numbers they get."""

    def __init__(self, file: OIFile) -> None:
        self.names: list[str] = []
        self._numbers: dict[str, dict[int, int]] = {}
        for array in file.arrays:
            prefix = f"{array.arrname} " if len(file.arrays) > 1 else ""
            numbers = self._numbers.setdefault(array.arrname, {})
            for index, name in zip(array.sta_index.tolist(), array.sta_name.tolist(), strict=True):
                numbers[index] = len(self.names)
                self.names.append(prefix + (name or str(index)))

    def indices(self, arrname: str | None, sta_index: np.ndarray) -> np.ndarray:
        """Positions in `names` of the stations of a table; -1 where unknown."""
        numbers = self._numbers.get(arrname, {})
        old, where = np.unique(sta_index, return_inverse=True)
        new = np.array([numbers.get(i, -1) for i in old.tolist()], dtype=np.int32)
        return new[where].reshape(sta_index.shape)


def _flatten(table: DataTable, file: OIFile, stations: _Stations) -> Observable:
    """The usable data of a table, one row and one channel each."""
    value_name, error_name, _ = table.quantities[-1]  # T3PHI of T3AMP, T3PHI
    value = table[value_name]
    error = table[error_name]
    keep = ~table.flag & np.isfinite(value) & np.isfinite(error) & (error > 0)
    keep &= np.isfinite(table.mjd)[:, None]
    row, channel = np.nonzero(keep)
    if isinstance(table, T3):
        legs = np.stack(
            [
                np.stack([table.u1coord, table.v1coord], axis=-1),
                np.stack([table.u2coord, table.v2coord], axis=-1),
            ],
            axis=1,
        )
        value = np.radians(np.remainder(value[keep] + 180.0, 360.0) - 180.0)
        error = np.radians(error[keep])
    else:
        legs = np.stack([table.ucoord, table.vcoord], axis=-1)[:, None, :]
        value, error = value[keep], error[keep]
    spectrum = file.wavelength(table.insname)
    number = [w.insname for w in file.wavelengths].index(table.insname)
    return Observable(
        legs=legs[row],
        wavelength=spectrum.eff_wave.astype(np.float64)[channel],
        bandwidth=np.nan_to_num(spectrum.eff_band.astype(np.float64))[channel],
        value=value,
        error=error,
        mjd=table.mjd[row],
        integration=np.nan_to_num(table.int_time)[row],
        stations=stations.indices(table.arrname, table.sta_index)[row],
        row=row.astype(np.int32),
        channel=channel.astype(np.int32),
        instrument=np.full(row.size, number, dtype=np.int32),
    )


def _stack(parts: list[Observable], legs: int) -> Observable:
    """All parts after each other, their rows numbered through."""
    if not parts:
        return Observable.empty(legs)
    first = 0
    for part in parts:
        part.row[:] += first
        first = int(part.row.max(initial=first - 1)) + 1
    return Observable.concatenate(parts)


def _flipped(observable: Observable, sign: float) -> Observable:
    from dataclasses import replace

    return replace(observable, value=sign * observable.value)


def _night_starts(times: np.ndarray, gap: float) -> np.ndarray:
    """The first time of each night."""
    ordered = np.unique(times)
    return ordered[np.concatenate([[True], np.diff(ordered) > gap])]
