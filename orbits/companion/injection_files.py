"""Put a companion into the data of an OIFITS file, or take one out.

Changed are VIS2DATA, T3AMP, T3PHI, VISPHI and, where VISAMP is a visibility, VISAMP, with the
errors of all but the phases. Differential phases change by what the companion does to a channel
more than to those it is referred to. Complex visibilities have units of the instrument's own, and
fluxes are not a matter of fringes: they stay as they were.
"""

from collections.abc import Sequence
from dataclasses import replace

import astropy.units as u
import numpy as np

from ..errors import InputError
from ..observation import Observable, Observation
from ..oifits import OIFile, Vis, observations
from ..oifits.flattening import channels, exposures
from ..oifits.model import BaselineTable, DataTable
from ..oifits.observables import KINDS, Kind, is_visibility, sound
from ..oifits.references import referred
from ..oifits.selecting import target_ids
from ..progress import SILENT, Silent
from ..sampling import Sampling
from .covariance import Covariance, ErrorModel
from .fit import Problem
from .injection import Companion, View, exchange
from .maps import single_star
from .night import NightSearch
from .search import FALSE_ALARM, choose_grid
from .stars import Stars

Nights = Sequence[tuple[float, View]]
_NOISE_SEARCHES = 200
"""Enough to tell a chance of one in a hundred."""


def inject_file(
    file: OIFile, companion: Companion, nights: Nights | None = None, *, target: str | None = None
) -> OIFile:
    """`file` with `companion` in all nights.

    Parameters
    ----------
    nights : sequence of (float, View), optional
        First MJD of each night and what stands beside the companion then, see `shown`; by default a
        star of the primary diameter of `companion`.
    target : str, optional
        Name of the star; needed where the file holds several.

    Raises
    ------
    InputError
        If there is no such target, or there are several and none was chosen.
    """
    return _changed(file, companion, nights, target, put_in=True)


def remove_file(
    file: OIFile, companion: Companion, nights: Nights | None = None, *, target: str | None = None
) -> OIFile:
    """`file` without `companion`: the inverse of `inject_file`, and as it in all else."""
    return _changed(file, companion, nights, target, put_in=False)


def shown(
    file: OIFile, *, target: str | None = None, diameter: u.Quantity | None = None,
    rng: np.random.Generator, progress: Silent = SILENT,
) -> list[tuple[float, View]]:  # fmt: skip
    """What each night of a file shows: its star, with a companion where one can be claimed.

    Parameters
    ----------
    diameter : Quantity, optional
        Of the primary; by default it is fitted.

    Returns
    -------
    list of (float, View)
        First MJD of each night, and its scene.

    Raises
    ------
    InputError
        As for `inject_file`, or if there are too few usable data.
    """
    nights = []
    for night in observations(file, target=target):
        search = NightSearch(
            grid=choose_grid(night), diameter=diameter, stars=Stars(), errors=ErrorModel()
        )
        found = search.claimed(
            night, false_alarm=FALSE_ALARM, noise_searches=_NOISE_SEARCHES, rng=rng,
            progress=progress,
        )  # fmt: skip
        start = min(table.mjd.min() for table in (night.v2, night.t3) if len(table))
        nights.append((float(start), View.of(search.night(night, found).field.null)))
    return nights


def beside(
    file: OIFile, companion: Companion, *, target: str | None = None,
    diameter: u.Quantity | None = None, rng: np.random.Generator, progress: Silent = SILENT,
) -> list[tuple[float, View]]:  # fmt: skip
    """What each night of a file that has `companion` in it shows without: as `shown`."""
    known = replace(companion, primary_diameter=_diameter(file, companion, target))
    if diameter is not None:
        known = replace(companion, primary_diameter=diameter.to_value(u.mas))
    options = {"target": target, "diameter": diameter, "rng": rng, "progress": progress}
    nights = shown(remove_file(file, known, target=target), **options)
    if any(view.scene.companions for _, view in nights):
        # The other companion, unknown at first, is told better once it is taken into account.
        nights = shown(remove_file(file, companion, nights, target=target), **options)
    return nights


def _diameter(file: OIFile, companion: Companion, target: str | None) -> float:
    """Median over the nights of the diameter of the star of `companion`, mas; 0 without V2."""
    found = []
    for night in observations(file, target=target):
        if not len(night.v2):
            continue
        sampling = Sampling.of(night, radius=companion.pair.reach)
        problem = Problem.of(night, sampling, Covariance.of(night, sampling))
        pair = companion.pair
        found.append(abs(single_star(problem, pair.scene, pair.values).values[0]))
    return float(np.median(found)) if found else 0.0


def _changed(
    file: OIFile, companion: Companion, nights: Nights | None, target: str | None, *, put_in: bool
) -> OIFile:
    ids = target_ids(file, target)
    used = np.unique(np.concatenate([table.target_id for table in file.data]))
    names = set(file.target.target[np.isin(file.target.target_id, np.intersect1d(used, ids))])
    if len(names) != 1:
        known = ", ".join(repr(name) for name in file.target.target.tolist())
        raise InputError(f"{file.source}: several targets; choose one of {known}")
    nights = nights or [(-np.inf, companion.without)]
    starts = [start for start, _ in nights]
    data = []
    for table in file.data:
        mine = np.isin(table.target_id, ids)
        if _kinds(table) and mine.any():
            # What comes before the first usable datum is of the first night.
            night = np.maximum(np.searchsorted(starts, table.mjd, side="right") - 1, 0)
            for number, (_, alone) in enumerate(nights):
                views = alone, companion.added_to(alone)
                rows = mine & (night == number)
                if rows.any():
                    after = exchange(
                        _observation(file, table, rows), *(views if put_in else views[::-1])
                    )
                    table = replace(table, **_columns(table, rows, file, after))
        data.append(table)
    line = _history(companion, nights, put_in=put_in)
    return replace(file, data=data, history=[*file.history, line])


def _kinds(table: DataTable) -> list[Kind]:
    """The observables of a table that a companion changes in a known way."""
    return [
        kind
        for kind in KINDS.values()
        if type(table) is kind.table and (kind.name != "visamp" or is_visibility(table))
    ]


def primary_diameter(nights: Nights) -> float:
    """Median over the nights of the diameter of the primary, mas."""
    return float(np.median([abs(view.values[0]) for _, view in nights]))


def _history(companion: Companion, nights: Nights, *, put_in: bool) -> str:
    what = "Companion put in by nodeline" if put_in else "Companion taken out by nodeline"
    return (
        f"{what}: x {companion.x:.4f} mas East, y {companion.y:.4f} mas North, "
        f"contrast {companion.contrast:.6g}, diameter {companion.diameter:g} mas, "
        f"primary {primary_diameter(nights):g} mas"
    )


def _observation(file: OIFile, table: BaselineTable, rows: np.ndarray) -> Observation:
    """All data of some rows of a table, usable or not, but in channels of known wavelength.

    Phases are 0, so that what becomes of them is their change.
    """
    spectrum = file.wavelength(table.insname)
    good = sound(spectrum)
    table = table.select(rows, good)
    seen = exposures(table, table.sta_index, 0)
    spectral = channels([spectrum.select(good)])
    parts = {}
    for kind in _kinds(table):
        value = 0.0 if kind.phase else table[kind.value].ravel()
        error = table[kind.error].ravel()
        parts[kind.name] = Observable.filled(seen, spectral, value=value, error=error)
    return Observation(target="", instruments=(table.insname,), **parts)


def _columns(table, rows, file, after: Observation) -> dict[str, np.ndarray]:
    """The changed columns of a table."""
    here = np.ix_(np.flatnonzero(rows), np.flatnonzero(sound(file.wavelength(table.insname))))
    shape = here[0].size, here[1].size
    changes = {}
    for kind in _kinds(table):
        new, value = getattr(after, kind.name), table[kind.value].copy()
        if kind.phase:
            rise = np.zeros(value.shape)
            rise[here] = np.degrees(new.value).reshape(shape)
            if isinstance(table, Vis):
                rise = referred(table, rise)
            value[here] = (value[here] + rise[here] + 180) % 360 - 180
        else:
            error = table[kind.error].copy()
            value[here], error[here] = new.value.reshape(shape), new.error.reshape(shape)
            changes[kind.error.lower()] = error
        changes[kind.value.lower()] = value
    return changes
