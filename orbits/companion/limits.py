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
from typing import Any

import astropy.units as u
import numpy as np

from ..errors import NothingFound
from ..observation import Observation
from ..progress import SILENT, Silent
from .covariance import ErrorModel
from .epoch import Epoch
from .exclusion import profile_limit, published_limit
from .grid import Grid
from .maps import Field
from .recovery import critical_amplitudes, lobes
from .result import Candidate, SearchResult
from .search import FALSE_ALARM, choose_grid, search
from .stack import Stack
from .stars import Stars, settled_stars
from .trials import Trial, same_lobe, with_companion

CONFIDENCE = 0.9973
"""What is called 3 sigma."""
COMPLETENESS = 0.9
INJECTIONS = 200
"""Noise realisations for each place."""
NOISE_SEARCHES = 1000
POSITIONS = 65
"""Most places along a side of the field; each takes a map of its own."""
ANNULI = 20
ROUTES = ("profile", "published", "recovered")


@dataclass(frozen=True, eq=False, kw_only=True)
class Limits:
    """Contrasts that one night, or several together, exclude."""

    target: str
    nights: tuple[tuple[float, str], ...]
    """MJD and instrument of each night."""
    axis: np.ndarray
    """(side,) coordinates of the places along either axis, mas; maps are indexed [y, x]."""
    maps: dict[str, np.ndarray]
    """(side, side) limit by each of `ROUTES`; inf where nothing up to a contrast of 1 is excluded.
    "published" is absent where no night has closure phases."""
    expected: np.ndarray
    """(side, side) contrast whose expected chi-square gain equals the threshold of a claim."""
    critical: np.ndarray
    """(injections, side, side): contrast from which on the search finds a companion in each noise
    realisation."""
    threshold: float
    """Chi-square gain that noise alone reaches with probability `false_alarm` over the field."""
    confidence: float
    completeness: float
    false_alarm: float
    field: float
    """Half the side of the searched field, mas."""
    removed: tuple[Candidate | None, ...]
    """For each night the companion that it shows and that is no part of the limits."""
    trials: tuple[Trial, ...] = ()
    """Companions of the contrast `maps["recovered"]` put into the data and searched for."""
    each: tuple["Limits", ...] = ()
    """Those of the nights by themselves, where there are several."""
    seconds: float

    @property
    def separation(self) -> np.ndarray:
        """(side, side) distance of each place from the star, mas."""
        return np.hypot(self.axis[:, None], self.axis)

    @property
    def separations(self) -> np.ndarray:
        """(ANNULI,) middles of the annuli that make the rows of the curve, mas."""
        return self.field * (np.arange(ANNULI) + 0.5) / ANNULI

    def ring(self, separation: float) -> np.ndarray:
        """(side, side) bool: the places of the annulus about `separation` (mas).

        It is as wide as the rows of the curve are apart; where the map is too coarse to have a
        place in it, the nearest ones are taken.

        Raises
        ------
        ValueError
            If the separation lies beyond the field.
        """
        if not 0 <= separation <= self.field:
            raise ValueError(f"separation must be within 0 and {self.field:g} mas")
        off = np.abs(self.separation - separation)
        return off <= max(self.field / ANNULI / 2, float(off.min())) * (1 + 1e-9)

    def found(self, separation: float, contrast: np.ndarray) -> np.ndarray:
        """Completeness: the share of companions of each `contrast` (m,) that the search finds.

        Over all position angles in the annulus about `separation` (mas), and over noise.
        """
        critical = np.sort(self.critical[:, self.ring(separation)].ravel())
        return np.searchsorted(critical, contrast, side="right") / critical.size

    def reaching(self, separation: float, completeness: float) -> float:
        """The contrast found with `completeness` in the annulus about `separation` (mas)."""
        critical = self.critical[:, self.ring(separation)]
        return float(np.quantile(critical, completeness, method="inverted_cdf"))

    def curve(self) -> dict[str, np.ndarray]:
        """Limits against separation, (ANNULI,) arrays by name.

        `separation` (mas, middle of the annulus), for each route `<route>_median` and
        `<route>_worst` over the position angles, `expected_median`, and `recovered`, the contrast
        found with the completeness asked for over all position angles together. inf where nothing
        is excluded.
        """
        rings = [self.ring(separation) for separation in self.separations]
        columns = {"separation": self.separations}
        for name, values in {**self.maps, "expected": self.expected}.items():
            columns[f"{name}_median"] = np.array([np.median(values[ring]) for ring in rings])
            if name != "expected":
                columns[f"{name}_worst"] = np.array([values[ring].max() for ring in rings])
        columns["recovered"] = _bounded(
            np.array([
                np.quantile(self.critical[:, ring], self.completeness, method="inverted_cdf")
                for ring in rings
            ])
        )  # fmt: skip
        return columns

    def to_json(self) -> dict[str, Any]:
        """One object of plain numbers and words; null where nothing is excluded."""
        columns = self.curve()
        rows = [
            {
                "separation_mas" if name == "separation" else f"contrast_{name}": _plain(values[k])
                for name, values in columns.items()
            }
            for k in range(ANNULI)
        ]
        result = {
            "target": self.target,
            "nights": [{"mjd": mjd, "instrument": name} for mjd, name in self.nights],
            "confidence": self.confidence,
            "completeness": self.completeness,
            "false_alarm_probability": self.false_alarm,
            "threshold": self.threshold,
            "injections": len(self.critical),
            "field_mas": self.field,
            "trials": {
                "searched": len(self.trials),
                "found": sum(one.found for one in self.trials),
            },
            "removed": [None if one is None else one.to_json() for one in self.removed],
            "curve": rows,
            "seconds": self.seconds,
        }
        if self.each:
            result["each_night"] = [one.to_json() for one in self.each]
        return result


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
        Of the routes by chi-square, one-sided.
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
        If a probability is not between 0 and 1, or there is no observation.
    """
    began = time.perf_counter()
    given = [observations] if isinstance(observations, Observation) else list(observations)
    if not given:
        raise ValueError("no observation was given")
    for name, value in (
        ("confidence", confidence), ("completeness", completeness), ("false_alarm", false_alarm)
    ):  # fmt: skip
        if not 0 < value < 1:
            raise ValueError(f"{name} must be between 0 and 1, got {value}")
    rng = np.random.default_rng(0) if rng is None else rng
    grid = _shared_grid(given, field, step)
    night = _NightMaker(grid, diameter, stars or Stars(), errors or ErrorModel(), smearing)
    made = [night.of(one, false_alarm, noise_searches, rng, progress) for one in given]
    wanted = _Wanted(confidence, completeness, false_alarm, positions, noise_searches, injections)
    each = []
    for one in made:
        alone = wanted.limits([one], rng, progress)
        each.append(replace(alone, trials=night.trials(one, alone, trials, rng, progress)))
    if len(made) == 1:
        return replace(each[0], seconds=time.perf_counter() - began)
    together = wanted.limits(made, rng, progress)
    return replace(together, each=tuple(each), seconds=time.perf_counter() - began)


@dataclass(frozen=True, eq=False)
class Night:
    """One observation about the scene that it is known to show."""

    epoch: Epoch
    """The search for one companion more than it shows."""
    field: Field
    phases: Field | None
    """Of its closure phases alone, taken as independent."""
    removed: Candidate | None


@dataclass(frozen=True)
class _NightMaker:
    grid: Grid
    diameter: u.Quantity | None
    stars: Stars
    errors: ErrorModel
    smearing: bool

    def of(
        self, observation: Observation, false_alarm: float, noise_searches: int,
        rng: np.random.Generator, progress: Silent,
    ) -> Night:  # fmt: skip
        """Search the night, and take what it shows for granted."""
        found = self._shown(observation, false_alarm, noise_searches, rng, progress)
        # The companion to be excluded is a point: its diameter would not show.
        stars = settled_stars(observation, self.stars, self.diameter, 0.0 * u.mas)
        count = 1 if found is None else 2
        epoch = Epoch(observation, stars, self.grid, self.errors, count, self.smearing)
        null = epoch.null(found)
        field = epoch.field(null)
        phases = None
        if len(observation.t3):
            alone = observation.select(v2=np.zeros(len(observation.v2), dtype=bool))
            known = ErrorModel(correlated=False)
            independent = Epoch(alone, stars, self.grid, known, count, self.smearing)
            phases = independent.field(
                replace(null, free=(), priors={}, covariance=np.empty((0, 0)))
            )
        return Night(epoch, field, phases, None if found is None else found.best)

    def trials(
        self, night: Night, result: Limits, count: int, rng: np.random.Generator, progress: Silent
    ) -> tuple[Trial, ...]:
        """Companions of limiting contrast at random places, searched for in the data."""
        rows, columns = np.nonzero(np.isfinite(result.maps["recovered"]))
        if not rows.size:
            return ()
        done = []
        with progress.task("searching for companions put in", count) as tick:
            for k in rng.integers(len(rows), size=count):
                x, y = float(result.axis[columns[k]]), float(result.axis[rows[k]])
                contrast = float(result.maps["recovered"][rows[k], columns[k]])
                done.append(self.trial(night, result.threshold, x, y, contrast))
                tick()
        return tuple(done)

    def trial(self, night: Night, threshold: float, x: float, y: float, contrast: float) -> Trial:
        """Put one companion in and search."""
        lit = with_companion(night.epoch, night.field.null, x, y, contrast)
        try:
            result = self._search(lit, companions=1 + night.epoch.last)
        except NothingFound:
            return Trial(x, y, contrast, claimed=False, in_place=False)
        place = result.best.x_mas, result.best.y_mas
        return Trial(
            x, y, contrast, result.statistic >= threshold, same_lobe(night.field, (x, y), place)
        )

    def _shown(self, observation, false_alarm, noise_searches, rng, progress):
        """What a search finds that can be claimed, or None."""
        try:
            result = self._search(
                observation, noise_searches=noise_searches, rng=rng, progress=progress
            )
        except NothingFound:
            return None
        return result if result.best.false_alarm_probability < false_alarm else None

    def _search(self, observation: Observation, **options: Any) -> SearchResult:
        return search(
            observation,
            field=self.grid.half * self.grid.step * u.mas,
            step=self.grid.step * u.mas,
            diameter=self.diameter,
            stars=self.stars,
            errors=self.errors,
            smearing=self.smearing,
            **{"noise_searches": 0, **options},
        )


@dataclass(frozen=True)
class _Wanted:
    confidence: float
    completeness: float
    false_alarm: float
    positions: int
    noise_searches: int
    injections: int

    def limits(self, nights: Sequence[Night], rng: np.random.Generator, progress: Silent) -> Limits:
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
            stack, lobes(stack, flat, progress), threshold, self.injections, rng, progress
        ).reshape(-1, len(index), len(index))
        d = stack.sensitivity[here]
        with np.errstate(divide="ignore"):
            error = 1 / np.sqrt(d)
        critical = amplitude * np.where(np.isfinite(error), error, 1.0).astype(np.float32)
        maps = {
            "profile": profile_limit(stack.signal[here], d, self.confidence),
            "published": self._published(nights, here),
            "recovered": np.quantile(critical, self.completeness, axis=0, method="inverted_cdf"),
        }
        seen = [night.epoch.observation for night in nights]
        return Limits(
            target=seen[0].target,
            nights=tuple((one.mjd, one.instrument) for one in seen),
            axis=grid.axis[index],
            maps={name: _bounded(m) for name, m in maps.items() if m is not None},
            expected=_bounded(np.sqrt(threshold) * error),
            critical=critical,
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

    def _published(self, nights: Sequence[Night], here: tuple) -> np.ndarray | None:
        fields = [night.phases for night in nights if night.phases is not None]
        if not fields:
            return None
        n, d, chi2, dof = 0.0, 0.0, 0.0, 0
        for field in fields:
            waves = field.waves(field.residual[:, None])[0]
            own = field.residual @ field.residual
            # The errors of each night are scaled for a reduced chi-square of 1.
            scale2 = own / field.covariance.rank
            n = n + field.grid.sum(field.response.u, field.response.v, waves) * field.beam / scale2
            d = d + field.sensitivity / scale2
            chi2, dof = chi2 + own / scale2, dof + field.covariance.rank
        return published_limit(n[here], d[here], chi2, dof, self.confidence)


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


def _bounded(contrast: np.ndarray) -> np.ndarray:
    """Contrasts above 1, which are no companion's, as inf."""
    return np.where(contrast <= 1, contrast, np.inf)


def _plain(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None
