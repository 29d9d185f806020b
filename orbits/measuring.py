"""From all nights of a system to one position a night, each with its alternatives."""

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from .companion.covariance import ErrorModel
from .companion.result import Candidate, SearchResult
from .companion.search import FALSE_ALARM, search
from .errors import InputError, NothingFound
from .observation import Observation
from .oifits import ErrorBars, Selection, read_epochs
from .oifits.utc import night_label
from .positions import Positions
from .progress import SILENT, Silent
from .system import System
from .times import tdb_of_utc


@dataclass(frozen=True, eq=False, kw_only=True)
class Night:
    """One epoch, and what the search found in it."""

    observation: Observation
    result: SearchResult | None
    """None where nothing could be found, for the `reason`."""
    reason: str = ""

    @property
    def label(self) -> str:
        """A name that is the same however often the night is measured."""
        return f"{night_label(self.observation.mjd)} {self.observation.instrument}"

    @property
    def candidates(self) -> tuple[Candidate, ...]:
        """The solutions that exclude each other, the best first; none where nothing was found."""
        if self.result is None:
            return ()
        return (self.result.best, *self.result.alternatives)

    @property
    def sources(self) -> tuple[str, ...]:
        """Names of the files it was measured from, without their folders."""
        return tuple(Path(file).name for file in self.observation.files)

    @property
    def detected(self) -> bool:
        """Whether noise alone would look as good less often than one claims a companion for."""
        best = next(iter(self.candidates), None)
        return best is not None and best.false_alarm_probability < FALSE_ALARM


def measure(
    system: System, *, rng: np.random.Generator, progress: Silent = SILENT
) -> tuple[Night, ...]:
    """Search every night of `system`, in order of time.

    Raises
    ------
    InputError
        If the system names no OIFITS files, or one of them cannot be used.
    """
    epochs = observations(system)
    nights = []
    with progress.task("searching nights", total=len(epochs)) as step:
        for observation in epochs:
            nights.append(_measure_night(system, observation, rng))
            step()
    return tuple(nights)


def observations(system: System) -> list[Observation]:
    """The nights of a system, in time order, read as its file says.

    Raises
    ------
    InputError
        If the system names no OIFITS files, or one of them cannot be used.
    """
    import astropy.units as u

    if not system.nights:
        raise InputError(f"{system.path}: no nights; name OIFITS files under [nights]")
    return read_epochs(
        system.nights,
        target=system.target,
        flip_phase=system.flip_phase,
        gap=system.gap * u.hour,
        selection=Selection(
            instrument=system.instrument,
            wavelengths=None if system.wavelengths is None else system.wavelengths * u.um,
            baselines=None if system.baselines is None else system.baselines * u.m,
            stations=system.stations,
        ),
        errors=ErrorBars.of(system.error_scale, system.error_floor),
        observables=system.use,
    )


def positions(nights: Sequence[Night]) -> Positions:
    """One row for each solution of each night with a detection.

    Raises
    ------
    NothingFound
        If no night has one.
    """
    rows = [(night, one) for night in nights if night.detected for one in night.candidates]
    if not rows:
        raise NothingFound(
            f"none of {len(nights)} nights shows a companion at a false-alarm probability "
            f"below {FALSE_ALARM:g}"
        )
    text = {
        "night": [night.label for night, _ in rows],
        "instrument": [night.observation.instrument for night, _ in rows],
        "source": [" ".join(night.sources) for night, _ in rows],
    }
    return Positions(
        mjd=tdb_of_utc([night.observation.mjd for night, _ in rows]),
        xy=np.array([(one.x_mas, one.y_mas) for _, one in rows]),
        covariance=np.array([one.covariance_xy_mas2 for _, one in rows]),
        weight=np.array([one.weight for _, one in rows]),
        contrast=np.array([one.contrast for _, one in rows]),
        contrast_error=np.array([one.contrast_error for _, one in rows]),
        **{name: np.array(values, dtype=object) for name, values in text.items()},
    )


def _measure_night(system: System, observation: Observation, rng: np.random.Generator) -> Night:
    from astropy import units as u

    lengths = {
        name: value * u.mas
        for name, value in (("field", system.field), ("diameter", system.diameter))
        if value is not None
    }
    errors = ErrorModel(
        shared_baselines=system.shared_baselines,
        v2_calibration=system.v2_calibration,
        t3_calibration=float(np.radians(system.t3_calibration)),
    )
    try:
        result = search(observation, errors=errors, rng=rng, **lengths)
    except (NothingFound, InputError) as error:
        # One night with nothing in it, or with too few data, does not hold up the others.
        return Night(observation=observation, result=None, reason=str(error))
    return Night(observation=observation, result=result)
