"""What a night excludes: the faintest companion that it would have shown, over a whole field.

Three routes, all about the scene without the companion looked for, and they differ by design:

profile
    The contrast at a position that is excluded by the growth of chi-square there. It presumes that
    the position is given: no price is paid for the many positions that a search looks at.
published
    The same by the total chi-square of the closure phases taken as independent, as Absil et al.
    (2011) published it, to compare numbers with the literature. With many data it is far weaker,
    since a companion has to spoil the fit as a whole; under correlated noise it is wrong as well.
recovered
    The contrast that the search itself finds, blind, in a stated share of noise realisations: at
    its place, and above what noise alone reaches with a stated probability anywhere in the field.

A companion that the night shows is fitted first: its parameters are then nuisance parameters like
the diameter of the star, and the limits are those on a further one.
"""

import time
from collections.abc import Sequence
from dataclasses import dataclass, replace

import astropy.units as u
import numpy as np

from ..observation import Observation
from ..progress import SILENT, Silent
from .covariance import ErrorModel
from .exclusion import profile_limit, published_limit
from .grid import Grid
from .limit_result import Limits, bounded
from .night import Night, NightSearch
from .recovery import critical_amplitudes
from .saturation import saturation, unsaturated
from .search import FALSE_ALARM, choose_grid
from .stack import Stack
from .stars import Stars
from .trials import Trial, trial

CONFIDENCE = 0.9973
"""What is called 3 sigma."""
COMPLETENESS = 0.9
INJECTIONS = 200
"""Noise realisations for each place."""
NOISE_SEARCHES = 1000
POSITIONS = 65
"""Most places along a side of the field; each takes a map of its own."""


def limits(
    observations: Observation | Sequence[Observation],
    *,
    field: u.Quantity | None = None,
    step: u.Quantity | None = None,
    diameter: u.Quantity | None = None,
    stars: Stars | None = None,
    errors: ErrorModel | None = None,
    smearing: bool = True,
    confidence: float = CONFIDENCE,
    completeness: float = COMPLETENESS,
    false_alarm: float = FALSE_ALARM,
    positions: int = POSITIONS,
    noise_searches: int = NOISE_SEARCHES,
    injections: int = INJECTIONS,
    trials: int = 0,
    rng: np.random.Generator | None = None,
    progress: Silent = SILENT,
) -> Limits:
    """The contrasts that one night excludes, or several for a companion that does not move.

    Parameters
    ----------
    field, step, diameter, stars, errors, smearing
        As for `search`; several nights share the widest field and the finest step.
    confidence : float
        Of the routes by chi-square, one-sided: above 0.5, the confidence of the best estimate.
    completeness : float
        Share of injected companions that the route by recovery wants found.
    false_alarm : float
        A companion counts as found where noise alone looks as good less often than this.
    positions : int
        Most places along a side of the field.
    noise_searches, injections : int
        Noise realisations for the false alarms, and for each place.
    trials : int
        How many companions of limiting contrast to put into the data of a single night, at places
        drawn at random, and to search for with everything that a search does: the check of the
        route by recovery. Several nights are not searched together, so there are none of them.
    rng : Generator, optional
        By default one with seed 0.

    Raises
    ------
    InputError
        If an observation has no data that can show a companion.
    ValueError
        If a probability is not between 0 and 1, or `confidence` not above 0.5, or there is no
        observation.
    """
    began = time.perf_counter()
    given = [observations] if isinstance(observations, Observation) else list(observations)
    if not given:
        raise ValueError("no observation was given")
    if not 0.5 < confidence < 1:
        raise ValueError(f"confidence must be between 0.5 and 1, got {confidence}")
    for name, value in (("completeness", completeness), ("false_alarm", false_alarm)):
        if not 0 < value < 1:
            raise ValueError(f"{name} must be between 0 and 1, got {value}")
    rng = np.random.default_rng(0) if rng is None else rng
    search = NightSearch(
        grid=_shared_grid(given, field, step), diameter=diameter, stars=stars or Stars(),
        errors=errors or ErrorModel(), smearing=smearing,
    )  # fmt: skip
    made = [
        search.night(
            one,
            search.claimed(
                one, false_alarm=false_alarm, noise_searches=noise_searches, rng=rng,
                progress=progress,
            ),
        )
        for one in given
    ]  # fmt: skip
    wanted = Wanted(confidence, completeness, false_alarm, positions, noise_searches, injections)
    each = []
    for one in made:
        alone = wanted.limits([one], rng, progress)
        each.append(replace(alone, trials=_trials(search, one, alone, trials, rng, progress)))
    if len(made) == 1:
        return replace(each[0], seconds=time.perf_counter() - began)
    together = wanted.limits(made, rng, progress)
    return replace(together, each=tuple(each), seconds=time.perf_counter() - began)


def _trials(
    search: NightSearch, night: Night, result: Limits, count: int, rng: np.random.Generator,
    progress: Silent,
) -> tuple[Trial, ...]:  # fmt: skip
    """Companions of limiting contrast at random places, put into the data and searched for."""
    rows, columns = np.nonzero(np.isfinite(result.maps["recovered"]))
    if not rows.size:
        return ()
    done = []
    with progress.task("searching for companions put in", count) as tick:
        for k in rng.integers(len(rows), size=count):
            x, y = float(result.axis[columns[k]]), float(result.axis[rows[k]])
            contrast = float(result.maps["recovered"][rows[k], columns[k]])
            there = {"x": x, "y": y, "contrast": contrast}
            done.append(trial(search, night, threshold=result.threshold, **there))
            tick()
    return tuple(done)


@dataclass(frozen=True)
class Wanted:
    """What limits are asked for; see `limits`."""

    confidence: float
    completeness: float
    false_alarm: float
    positions: int
    noise_searches: int
    injections: int

    def limits(
        self, nights: Sequence[Night], rng: np.random.Generator, progress: Silent = SILENT
    ) -> Limits:
        """The limits of `nights` together."""
        began = time.perf_counter()
        stack = Stack([night.field for night in nights])
        grid = stack.grid
        index = self._places(grid)
        here = np.ix_(index, index)
        alarms = stack.false_alarms(self.noise_searches, rng, progress)
        threshold = alarms.threshold(self.false_alarm)
        flat = (index[:, None] * grid.side + index).ravel()
        amplitude = critical_amplitudes(
            stack, flat, threshold, self.injections, rng, progress
        ).reshape(-1, len(index), len(index))
        d = stack.sensitivity[here]
        with np.errstate(divide="ignore"):
            error = 1 / np.sqrt(d)
        critical = amplitude * np.where(np.isfinite(error), error, 1.0).astype(np.float32)
        recovered = np.quantile(critical, self.completeness, axis=0, method="inverted_cdf")
        c = saturation(stack, flat, recovered.ravel(), progress=progress)
        c = c.reshape(recovered.shape)
        linear = profile_limit(stack.signal[here], d, self.confidence)
        maps = {
            "profile": _excluded(stack, flat, linear, progress),
            "recovered": bounded(unsaturated(recovered, c)),
        }
        phases = [night.phases for night in nights if night.phases is not None]
        if phases:
            together = Stack(phases)
            linear = self._published(together)[here]
            maps["published"] = _excluded(together, flat, linear, progress)
        seen = [night.epoch.observation for night in nights]
        return Limits(
            target=seen[0].target,
            nights=tuple((one.mjd, one.instrument) for one in seen),
            axis=grid.axis[index],
            maps=maps,
            expected=bounded(unsaturated(np.sqrt(threshold) * error, c)),
            critical=unsaturated(critical, c.astype(np.float32)),
            threshold=threshold,
            confidence=self.confidence,
            completeness=self.completeness,
            false_alarm=self.false_alarm,
            field=grid.half * grid.step,
            removed=tuple(night.removed for night in nights),
            seconds=time.perf_counter() - began,
        )

    def _places(self, grid: Grid) -> np.ndarray:
        """Indices along an axis of the grid, evenly spaced about its centre."""
        stride = max(1, -(-2 * grid.half // (self.positions - 1)))
        return np.arange(grid.half % stride, grid.side, stride)

    def _published(self, phases: Stack) -> np.ndarray:
        """(side, side) limits from the closure phases, to first order."""
        n, d, chi2, dof = 0.0, 0.0, 0.0, 0
        for field in phases.fields:
            waves = field.waves(field.residual[:, None])[0]
            own = field.residual @ field.residual
            # The errors of each night are scaled for a reduced chi-square of 1.
            scale2 = own / field.covariance.rank
            n = n + field.grid.sum(field.response.u, field.response.v, waves) * field.beam / scale2
            d = d + field.sensitivity / scale2
            chi2, dof = chi2 + own / scale2, dof + field.covariance.rank
        return published_limit(n, d, chi2, dof, self.confidence)


def _excluded(stack: Stack, place: np.ndarray, linear: np.ndarray, progress: Silent) -> np.ndarray:
    """Limits by chi-square at places of the flattened grid, from those to first order."""
    c = saturation(stack, place, linear.ravel(), whole=True, progress=progress)
    return bounded(unsaturated(linear, c.reshape(linear.shape)))


def _shared_grid(
    observations: Sequence[Observation], field: u.Quantity | None, step: u.Quantity | None
) -> Grid:
    grids = [choose_grid(one, field, step) for one in observations]
    if len(grids) == 1:
        return grids[0]
    widest = max(grid.half * grid.step for grid in grids)
    finest = min(grid.step for grid in grids)
    half = int(np.ceil(widest / finest * (1 - 1e-12)))
    return Grid(half, widest / half)
