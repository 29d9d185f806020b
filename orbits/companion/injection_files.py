"""Put a companion into the data of an OIFITS file, or take one out.

Changed are VIS2DATA, T3AMP, T3PHI, VISPHI and, where VISAMP is a visibility, VISAMP, with the
errors of all but the phases. Differential phases change by what the companion does to a channel
more than to those it is referred to. Complex visibilities have units of the instrument's own, and
fluxes are not a matter of fringes: they stay as they were.
"""

from dataclasses import replace

import numpy as np

from ..binary import Scene
from ..errors import InputError
from ..observation import Observable, Observation
from ..oifits import OIFile, Vis, observations
from ..oifits.flattening import channels, exposures
from ..oifits.model import BaselineTable, DataTable
from ..oifits.observables import KINDS, Kind, sound
from ..oifits.references import referred
from ..oifits.selecting import target_ids
from ..sampling import Sampling
from .covariance import Covariance
from .fit import Problem
from .injection import Companion, exchange
from .maps import single_star


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
        if _kinds(table) and rows.any():
            after = exchange(_observation(file, table, rows), old, new)
            table = replace(table, **_columns(table, rows, file, after))
        data.append(table)
    return replace(file, data=data, history=[*file.history, _history(companion, put_in=put_in)])


def _kinds(table: DataTable) -> list[Kind]:
    """The observables of a table that a companion changes in a known way."""
    units = table.amptyp if isinstance(table, Vis) else None
    visibility = units is None or units.strip().lower() == "absolute"
    return [
        kind
        for kind in KINDS.values()
        if type(table) is kind.table and (visibility or kind.name != "visamp")
    ]


def _history(companion: Companion, *, put_in: bool) -> str:
    what = "Companion put in by nodeline" if put_in else "Companion taken out by nodeline"
    return (
        f"{what}: x {companion.x:.4f} mas East, y {companion.y:.4f} mas North, "
        f"contrast {companion.contrast:.6g}, diameter {companion.diameter:g} mas, "
        f"primary {companion.primary_diameter:g} mas"
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
