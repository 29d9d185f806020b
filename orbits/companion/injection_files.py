"""Put a companion into the data of an OIFITS file, or take one out.

Changed are VIS2DATA, T3AMP, T3PHI and, where VISAMP is a visibility, VISAMP, with the errors of all
but the phase. VISPHI and complex visibilities refer to something of the instrument's own, and
fluxes are not a matter of fringes: they stay as they were.
"""

from dataclasses import replace

import numpy as np

from ..binary import Scene
from ..errors import InputError
from ..observation import Observable, Observation
from ..oifits import T3, OIFile, Vis, Vis2, observations
from ..oifits.flattening import channels, exposures
from ..oifits.model import BaselineTable
from ..oifits.observables import sound
from ..oifits.selecting import target_ids
from ..sampling import Sampling
from .covariance import Covariance
from .fit import Problem
from .injection import Companion, exchange
from .maps import single_star

_COLUMNS = {
    Vis2: {"v2": ("vis2data", "vis2err")},
    T3: {"t3": ("t3phi", "t3phierr"), "t3amp": ("t3amp", "t3amperr")},
    Vis: {"visamp": ("visamp", "visamperr")},
}
"""Columns by table and observable."""


def inject_file(file: OIFile, companion: Companion, *, target: str | None = None) -> OIFile:
    """`file` with `companion` beside the star in all nights.

    Parameters
    ----------
    target : str, optional
        Name of the star; needed where the file holds several.

    Raises
    ------
    InputError
        If there is no such target, or there are several and none was chosen.
    """
    return _changed(file, companion, target, put_in=True)


def remove_file(file: OIFile, companion: Companion, *, target: str | None = None) -> OIFile:
    """`file` without `companion`: the inverse of `inject_file`, and as it in all else."""
    return _changed(file, companion, target, put_in=False)


def fitted_diameter(
    file: OIFile, companion: Companion, *, target: str | None = None, present: bool
) -> Companion:
    """`companion` with the diameter of its star as the data have it; 0 where there is no V2.

    `present` says whether the companion is in the data. The nights are fitted one by one, and the
    median is taken.

    Raises
    ------
    InputError
        As for `inject_file`, or if no datum is usable.
    """
    scene = Scene() if present else Scene(companions=0)
    known = vars(companion) if present else {"primary_diameter": companion.primary_diameter}
    found = []
    for night in observations(file, target=target):
        if not len(night.v2):
            continue
        reach = float(np.hypot(companion.x, companion.y)) if present else 0.0
        sampling = Sampling.of(night, radius=reach)
        problem = Problem.of(night, sampling, Covariance.of(night, sampling))
        values = scene.vector(known)
        found.append(abs(single_star(problem, scene, values).values[0]))
    return replace(companion, primary_diameter=float(np.median(found)) if found else 0.0)


def _changed(file: OIFile, companion: Companion, target: str | None, *, put_in: bool) -> OIFile:
    ids = target_ids(file, target)
    used = np.unique(np.concatenate([table.target_id for table in file.data]))
    names = set(file.target.target[np.isin(file.target.target_id, np.intersect1d(used, ids))])
    if len(names) != 1:
        known = ", ".join(repr(name) for name in file.target.target.tolist())
        raise InputError(f"{file.source}: several targets; choose one of {known}")
    views = (companion.without, companion.pair)
    old, new = views if put_in else views[::-1]
    data = []
    for table in file.data:
        rows = np.isin(table.target_id, ids)
        if type(table) in _COLUMNS and rows.any() and _is_visibility(table):
            before = _observation(file, table, rows)
            changes = _columns(table, rows, file, exchange(before, old, new))
            table = replace(table, **changes)
        data.append(table)
    return replace(file, data=data, history=[*file.history, _history(companion, put_in=put_in)])


def _is_visibility(table: BaselineTable) -> bool:
    kind = table.amptyp if isinstance(table, Vis) else None
    return kind is None or kind.strip().lower() == "absolute"


def _history(companion: Companion, *, put_in: bool) -> str:
    what = "Companion put in by nodeline" if put_in else "Companion taken out by nodeline"
    return (
        f"{what}: x {companion.x:.4f} mas East, y {companion.y:.4f} mas North, "
        f"contrast {companion.contrast:.6g}, diameter {companion.diameter:g} mas, "
        f"primary {companion.primary_diameter:g} mas"
    )


def _observation(file: OIFile, table: BaselineTable, rows: np.ndarray) -> Observation:
    """All data of some rows of a table, usable or not, but in channels of known wavelength."""
    spectrum = file.wavelength(table.insname)
    good = sound(spectrum)
    table = table.select(rows, good)
    seen = exposures(table, table.sta_index, 0)
    spectral = channels([spectrum.select(good)])
    parts = {}
    for name, columns in _COLUMNS[type(table)].items():
        value, error = (getattr(table, column).ravel() for column in columns)
        if name == "t3":
            value, error = np.radians(value), np.radians(error)
        parts[name] = Observable.filled(seen, spectral, value=value, error=error)
    return Observation(target="", instruments=(table.insname,), **parts)


def _columns(table, rows, file, after: Observation) -> dict[str, np.ndarray]:
    """The changed columns of a table."""
    here = np.ix_(np.flatnonzero(rows), np.flatnonzero(sound(file.wavelength(table.insname))))
    shape = here[0].size, here[1].size
    changes = {}
    for name, (value, error) in _COLUMNS[type(table)].items():
        new = getattr(after, name)
        turn = np.degrees(1.0) if name == "t3" else 1.0
        for column, values in ((value, new.value * turn), (error, new.error * turn)):
            if name == "t3" and column == error:
                continue  # unchanged, and not to be rounded by way of rad
            changes[column] = getattr(table, column).copy()
            changes[column][here] = values.reshape(shape)
    return changes
