"""Search one epoch for a companion, everywhere in a field and without a start value."""

import time
from dataclasses import replace

import astropy.units as u
import numpy as np

from ..constants import MAS
from ..errors import InputError
from ..observation import OBSERVABLES, Observation
from ..progress import SILENT, Silent
from .covariance import ErrorModel
from .epoch import Epoch
from .grid import Grid
from .result import SearchResult
from .stars import Stars, settled_stars

FALSE_ALARM = 0.01
"""A companion is claimed when noise alone would look as good less often than this."""
NOISE_SEARCHES = 1000
_STEPS_PER_FRINGE = 4.0
_LARGEST_HALF = 256
"""Most steps from the centre to the edge that a default field has."""


def search(
    observation: Observation,
    *,
    field: u.Quantity | None = None,
    step: u.Quantity | None = None,
    diameter: u.Quantity | None = None,
    companion_diameter: u.Quantity | None = None,
    stars: Stars | None = None,
    errors: ErrorModel | None = None,
    companions: int = 1,
    smearing: bool = True,
    noise_searches: int = NOISE_SEARCHES,
    resamplings: int = 0,
    rng: np.random.Generator | None = None,
    progress: Silent = SILENT,
) -> SearchResult:
    """Look for a companion everywhere in a field, without a start value.

    Parameters
    ----------
    field : Quantity, optional
        Half the side of the square field; by default the interferometric field
        wavelength^2 / (longest baseline x bandwidth), at most 256 steps.
    step : Quantity, optional
        Of the grid; by default, and at most, the shortest wavelength over four times the longest
        baseline.
    diameter : Quantity, optional
        Of the primary; by default it is fitted where there are squared visibilities and 0
        elsewhere.
    companion_diameter : Quantity, optional
        Of the companion; by default it is fitted. Unless it gains a chi-square of 16 (4 sigma) over
        a point, its square has a Gaussian prior of mean 0, and as wide as the square of the
        primary's diameter, or of that of a disc of a fifth of the primary's surface brightness
        where that is smaller. The errors of position and contrast include what this leaves open.
    stars : Stars, optional
        Other shapes and parameters.
    errors : ErrorModel, optional
        How the errors are correlated, beyond what the files say.
    companions : int
        1, or 2 to look for a second one around the best solution for the first, which is fitted
        again together with it.
    smearing : bool
        Whether wide channels and long integrations blur distant companions.
    noise_searches : int
        How many noise realisations measure the false-alarm probability; fewer are used where the
        answer is beyond doubt, and with 0 it is not measured.
    resamplings : int
        How many resamplings of the data's independent blocks the best solution is fitted to, for
        errors that do not rest on the stated ones.
    rng : Generator, optional
        Of the noise realisations; by default one with seed 0, so that an epoch has one answer.

    Raises
    ------
    InputError
        If the observation has no data that can show a companion, or too few.
    NothingFound
        If no position in the field fits better than a single star.
    """
    began = time.perf_counter()
    if companions not in (1, 2):
        raise ValueError(f"companions must be 1 or 2, got {companions}")
    rng = np.random.default_rng(0) if rng is None else rng
    stars = settled_stars(observation, stars or Stars(), diameter, companion_diameter)
    grid = choose_grid(observation, field, step)
    result = None
    for count in range(1, companions + 1):
        epoch = Epoch(observation, stars, grid, errors, count, smearing)
        result = epoch.search(result, noise_searches, rng, progress)
    if resamplings:
        resampled = epoch.bootstrap(result.best, resamplings, rng, progress)
        result = replace(result, bootstrap=resampled)
    return replace(result, seconds=time.perf_counter() - began)


def choose_grid(
    observation: Observation, field: u.Quantity | None = None, step: u.Quantity | None = None
) -> Grid:
    """The positions to search: see `search` for `field` and `step`.

    Raises
    ------
    InputError
        If there are no data.
    ValueError
        If `field` or `step` is not positive.
    """
    tables = [t for t in (getattr(observation, name) for name in OBSERVABLES) if len(t)]
    if not tables:
        raise InputError(f"{observation.target}: no usable squared visibility or closure phase")
    finest = min((t.wavelength / t.baselines).min() for t in tables) / MAS
    size = finest / _STEPS_PER_FRINGE
    for name, value in (("field", field), ("step", step)):
        if value is not None and not value.to_value(u.mas) > 0:
            raise ValueError(f"{name} must be positive, got {value}")
    if step is not None:
        size = min(size, step.to_value(u.mas))
    if field is not None:
        half = int(np.ceil(field.to_value(u.mas) / size * (1 - 1e-12)))
        return Grid(half, field.to_value(u.mas) / half)
    with np.errstate(divide="ignore"):  # no field where a file does not state its bandwidth
        coherent = min((t.wavelength**2 / t.baselines / t.bandwidth).min() for t in tables) / MAS
    return Grid(int(min(np.ceil(coherent / size), _LARGEST_HALF)), size)
