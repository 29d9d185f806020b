"""From the tables of a file to observations: one target and one night each, as flat arrays."""

from collections.abc import Sequence
from pathlib import Path

import astropy.units as u
import numpy as np

from ..errors import InputError
from ..observation import DEFAULT, OBSERVABLES, Observation
from ..problems import refuse_suspicious
from .checking import check, check_together
from .flattening import observation, shares
from .flipping import flipped
from .joining import join
from .links import plain
from .loading import load
from .model import OIFile
from .observables import KINDS, ErrorBars
from .selecting import EVERYTHING, Selection, select, target_ids
from .utc import night_label

GAP = 8 * u.hour
"""A pause longer than this starts a new night: within a night data follow each other sooner."""

AS_STATED = ErrorBars()

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
    return one_night(read_epochs(paths, target=target, **options), night)


def one_night(epochs: Sequence[Observation], night: str | None) -> Observation:
    """The one of `epochs` whose date begins with `night`, or the only one.

    Raises
    ------
    InputError
        If there is none, or several.
    """
    chosen = [e for e in epochs if night is None or night_label(e.mjd).startswith(night)]
    if len(chosen) != 1:
        found = f"{len(chosen) or 'no'} night{'s' if len(chosen) != 1 else ''}"
        files = dict.fromkeys(name for epoch in epochs for name in epoch.files)
        raise InputError(
            f"{', '.join(files)}: {found} {night or ''} of {epochs[0].target}; "
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
    for name in observables:
        if name not in OBSERVABLES:
            raise ValueError(f"unknown observable {name!r}; there are {', '.join(OBSERVABLES)}")
    files = [load(path) for path in _listed(paths)]
    for file in files:
        file.problems += check(file)
    file = join(files)
    if len(files) > 1:
        file.problems += check_together(file)
    if strict:
        refuse_suspicious(file.problems)
    file = select(file, selection, target=target)
    if flip_phase:
        file = flipped(file)
    return observations(file, target=target, gap=gap, errors=errors, observables=observables)


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
    given = shares(file, ids, observables)
    with_data = [share.keep.any(axis=1) for share in given]
    times = [share.table.mjd[rows] for share, rows in zip(given, with_data, strict=True)]
    if not sum(map(len, times)):
        words = " or ".join(KINDS[key].words for key in observables)
        others = shares(file, ids, [key for key in OBSERVABLES if key not in observables])
        there = dict.fromkeys(share.kind for share in others if share.keep.any())
        remedy = "".join(
            f"; it has {kind.words}: ask for them (--use {kind.name})" for kind in there
        )
        raise InputError(f"{file.source}: no usable {words} of {name}{remedy}")
    starts = night_starts(np.concatenate(times), gap.to_value(u.day))
    epochs = []
    for start, end in zip(starts, [*starts[1:], np.inf], strict=True):
        night = []
        for share, rows in zip(given, with_data, strict=True):
            here = rows & (share.table.mjd >= start) & (share.table.mjd < end)
            if here.any():
                night.append(share.select(here))
        epochs.append(observation(file, name, night, errors))
    return epochs


def _listed(paths: Paths) -> list[str | Path]:
    listed = [paths] if isinstance(paths, str | Path) else list(paths)
    if not listed:
        raise ValueError("no file was given")
    # A file that is named twice, as by two patterns, is read once.
    return list({Path(path).resolve(): path for path in listed}.values())


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
        why = "".join(f" ({problem.what})" for problem in file.clashes)
        raise InputError(f"{file.source}: {what}{why}; choose one of {known}")
    return next(iter(names.values())), ids


def night_starts(times: np.ndarray, gap: float) -> np.ndarray:
    """The first time of each night."""
    ordered = np.unique(times)
    return ordered[np.concatenate([[True], np.diff(ordered) > gap])]
