"""Selection: the part of a file that belongs to a target, an instrument, nights or stations."""

from collections.abc import Iterable
from dataclasses import dataclass, replace

import astropy.units as u
import numpy as np
from astropy.time import Time

from ..errors import InputError
from ..times import iso_utc, mjd_utc
from .correlation import Cut, renumbered
from .links import plain
from .model import DataTable, Flux, OIFile, Vis, Wavelength
from .references import before_a_cut


@dataclass(frozen=True, kw_only=True)
class Selection:
    """What to keep of a file; what is not given does not restrict it."""

    instrument: str | None = None
    """INSNAME of a spectral set-up, without regard to case."""
    dates: tuple[Time, Time] | None = None
    """First and last time."""
    wavelengths: u.Quantity | None = None
    """(2,) shortest and longest effective wavelength."""
    baselines: u.Quantity | None = None
    """(2,) shortest and longest projected baseline; every side of a triangle must lie between."""
    stations: tuple[str, ...] = ()
    """Names of stations: only data that involve no other station are kept."""

    def __str__(self) -> str:
        """What is selected, in words for the history of a file."""
        parts = []
        if self.instrument is not None:
            parts.append(f"instrument {self.instrument}")
        if self.dates is not None:
            parts.append("dates {} to {}".format(*map(iso_utc, self.dates)))
        if self.wavelengths is not None:
            parts.append("wavelengths {:g} to {:g} um".format(*self.wavelengths.to_value(u.um)))
        if self.baselines is not None:
            parts.append("baselines {:g} to {:g} m".format(*self.baselines.to_value(u.m)))
        if self.stations:
            parts.append(f"stations {' '.join(self.stations)}")
        return ", ".join(parts)


EVERYTHING = Selection()
COMMON_REFERENCE = "VISPHI brought from all other channels to the mean of all as reference"


def select(file: OIFile, selection: Selection = EVERYTHING, *, target: str | None = None) -> OIFile:
    """The part of `file` that is selected, complete in itself and with correlations renumbered.

    Raises
    ------
    InputError
        If a name is not in the file, or nothing remains.
    """
    if selection == EVERYTHING and target is None:
        return file
    ids = target_ids(file, target)
    channels = _channels(file, selection)
    stations = _station_ids(file, selection.stations)
    cuts: list[Cut] = []
    brought = False
    for table in file.data:
        if table.insname not in channels:
            continue
        rows = np.isin(table.target_id, ids) & _rows(table, selection, stations)
        chosen = channels[table.insname]
        if rows.any() and chosen.any():
            if isinstance(table, Vis) and not chosen.all():
                before, table = table, before_a_cut(table)
                brought |= table is not before
            whole = rows.all() and chosen.all()
            after = table if whole else table.select(rows, chosen)
            cuts.append(Cut(after, np.flatnonzero(chosen)))
    if not cuts:
        raise InputError(f"{file.source}: nothing remains of it after the selection ({selection})")
    correlations, data = renumbered(file.correlations, cuts)
    used = {table.insname for table in data}
    present = np.unique(np.concatenate([table.target_id for table in data]))
    arrays = [a for a in file.arrays if a.arrname in {table.arrname for table in data}]
    return replace(
        file,
        target=file.target.select(np.isin(file.target.target_id, present)),
        wavelengths=[w.select(channels[w.insname]) for w in file.wavelengths if w.insname in used],
        data=data,
        arrays=arrays or file.arrays,
        correlations=correlations,
        history=[*file.history, COMMON_REFERENCE] if brought else file.history,
        polarisations=list(_polarisations(file, present, channels, used)),
    )


def target_ids(file: OIFile, target: str | None) -> list[int]:
    """The ids of the target of that name, or of all.

    Raises
    ------
    InputError
        If there is no such target.
    """
    names = file.target.target.tolist()
    numbers = file.target.target_id.tolist()
    if target is None:
        return numbers
    ids = [i for i, name in zip(numbers, names, strict=True) if plain(name) == plain(target)]
    if not ids:
        raise InputError(f"{file.source}: no target {target!r}; there is {_listed(names)}")
    return ids


def _channels(file: OIFile, selection: Selection) -> dict[str, np.ndarray]:
    """For each instrument that is selected, which of its channels are."""
    chosen = file.wavelengths
    if selection.instrument is not None:
        wanted = plain(selection.instrument)
        chosen = [w for w in chosen if plain(w.insname) == wanted]
        if not chosen:
            names = [w.insname for w in file.wavelengths]
            raise InputError(
                f"{file.source}: no instrument {selection.instrument!r}; there is {_listed(names)}"
            )
    return {w.insname: _inside_range(w, selection.wavelengths) for w in chosen}


def _inside_range(table: Wavelength, limits: u.Quantity | None) -> np.ndarray:
    if limits is None:
        return np.ones(len(table), dtype=bool)
    # The standard's wavelengths are single precision: so are the limits, lest 1.6 um miss itself.
    low, high = np.float32(limits.to_value(u.m))
    return (table.eff_wave >= low) & (table.eff_wave <= high)


def _station_ids(file: OIFile, wanted: tuple[str, ...]) -> dict[str | None, list[int]] | None:
    """For each array, the STA_INDEX of the stations wanted; None if all are.

    Where tables have no array, stations go by that number.
    """
    if not wanted:
        return None
    names = {plain(name) for name in wanted}
    found: dict[str | None, list[int]] = {}
    seen: set[str] = set()
    for array in file.arrays:
        pairs = zip(array.sta_index.tolist(), map(plain, array.sta_name.tolist()), strict=True)
        known = [(index, name) for index, name in pairs if name in names]
        found[array.arrname] = [index for index, _ in known]
        seen |= {name for _, name in known}
    if any(file.array(table.arrname) is None for table in file.data):
        found[None] = [int(name) for name in names if name.isdigit()]
        seen |= {name for name in names if name.isdigit()}
    missing = [name for name in wanted if plain(name) not in seen]
    if missing:
        known = [name for array in file.arrays for name in array.sta_name.tolist()]
        there = f"there is {_listed(known)}" if known else "there is no OI_ARRAY: give STA_INDEX"
        raise InputError(f"{file.source}: no station {missing[0]!r}; {there}")
    return found


def _rows(
    table: DataTable, selection: Selection, stations: dict[str | None, list[int]] | None
) -> np.ndarray:
    keep = np.ones(len(table), dtype=bool)
    if selection.dates is not None:
        first, last = map(mjd_utc, selection.dates)
        keep &= (table.mjd >= first) & (table.mjd <= last)
    if selection.baselines is not None and not isinstance(table, Flux):
        low, high = selection.baselines.to_value(u.m)
        keep &= ((table.sides >= low) & (table.sides <= high)).all(axis=1)
    if stations is not None and table.sta_index is not None:
        inside = np.isin(table.sta_index, stations.get(table.arrname, []))
        keep &= inside if inside.ndim == 1 else inside.all(axis=1)
    return keep


def _polarisations(file: OIFile, ids: np.ndarray, channels, used: set[str]) -> Iterable:
    """The rows of OI_INSPOL for what remains; one table an instrument where channels were cut."""
    for table in file.polarisations:
        rows = np.isin(table.target_id, ids)
        for name in sorted(used & set(table.insname.tolist())):
            here = rows & (table.insname == name)
            if here.any() and table.jxx.shape[1] == channels[name].size:
                yield table.select(here, channels[name])


def _listed(names: Iterable[str]) -> str:
    return ", ".join(repr(name) for name in dict.fromkeys(names))
