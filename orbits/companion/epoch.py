"""One observation made ready for the search of a companion: maps, exact fits, significance."""

from dataclasses import replace

import numpy as np

from ..binary import PRIMARY, companion_name, model
from ..errors import InputError, NothingFound
from ..observation import Observation
from ..progress import SILENT, Silent
from ..sampling import Sampling
from .bootstrap import Bootstrap, bootstrap
from .covariance import Covariance, ErrorModel
from .fit import Fit, Problem, fit, polish
from .grid import Grid
from .maps import Field, Maps, single_star
from .result import Candidate, SearchResult, candidates
from .significance import FalseAlarms, noise_maxima, scaled
from .stars import Stars, free_parameters, known_values, priors_of, scene_of

RESOLVED = 16.0
"""Chi-square, scaled as the errors are, that the diameter of a companion must gain to be fitted
without a prior."""
SURFACE = 5.0
"""How many times the light of equal surface brightness the prior gives the disc of a companion."""
KEPT = 25.0
"""Solutions within this chi-square of the best, scaled as the errors are, are kept."""
_PEAKS = 24
"""Peaks of a map that are fitted at most."""
_ROUGH_STEPS = 6
"""Steps of a first fit, after which only hopeful ones go on."""
_BEYOND_LINEAR = 1.5
"""Ratio of the exact to the linear gain that shows that the companion is not faint."""
_BEYOND_NOISE = 50.0
"""A gain that noise does not reach, so that this second statistic does not add to false alarms."""


class Epoch:
    """One observation, prepared for the search of its companion number `count`."""

    def __init__(
        self,
        observation: Observation,
        stars: Stars,
        grid: Grid,
        errors: ErrorModel | None,
        count: int,
        smearing: bool,
    ):
        self.observation, self.stars, self.grid, self.smearing = observation, stars, grid, smearing
        self.scene = scene_of(observation, stars, count)
        self.before = scene_of(observation, stars, count - 1)
        self.last = count - 1
        self.values = self.scene.vector(known_values(self.scene, stars))
        self.free = free_parameters(self.scene, stars)
        self.priors = priors_of(self.scene, stars)
        self.errors = errors or ErrorModel()
        self._samplings: dict[float, Sampling] = {}
        self.calibrate(None)
        known = self.covariance.rank + len(self.priors)
        if known <= len(self.free):
            raise InputError(
                f"{observation.target}: {known} independent data are too few to fit "
                f"{len(self.free)} parameters; add nights or data, or fix the primary's diameter "
                "(--diameter)"
            )

    def problem(self, radius: float) -> Problem:
        """The data, sampled finely enough for companions within `radius` mas."""
        reach = self.grid.step
        while reach < radius:
            reach *= 2
        return Problem.of(self.observation, self._sampled(reach), self.covariance)

    def _sampled(self, reach: float) -> Sampling:
        if reach not in self._samplings:
            self._samplings[reach] = Sampling.of(
                self.observation, radius=reach, smearing=self.smearing
            )
        return self._samplings[reach]

    def calibrate(self, by: Fit | None) -> None:
        """Make calibration errors a part of the V2 of the fit `by`, or of the data without one."""
        v2 = None
        if by is not None:
            v2 = model(by.scene, by.values, self.problem(_extent(by)).sampling)[0]
            v2 = v2[: len(self.observation.v2)]
        still = self._sampled(0.0)
        self.covariance = Covariance.of(self.observation, still, self.errors, v2)

    def null(self, previous: SearchResult | None) -> Fit:
        """The scene without the companion to be found: a star, or the best solution so far."""
        null = self._null(previous)
        if self.errors.v2_calibration:
            self.calibrate(null)
            null = self._again(null)
        return null

    def _null(self, previous: SearchResult | None) -> Fit:
        if previous is not None:
            return previous.best.fit
        free = tuple(i for i in self.free if i < len(PRIMARY))
        start = self.before.vector(known_values(self.before, self.stars))
        priors = {i: prior for i, prior in self.priors.items() if i < len(PRIMARY)}
        problem = self.problem(0.0)
        if 0 in free:
            start = single_star(problem, self.before, start).values
        return fit(problem, self.before, start, free, priors)

    def _again(self, one: Fit) -> Fit:
        """Fit anew from `one`, as the covariance is now."""
        return polish(self.problem(_extent(one)), one)

    def field(self, null: Fit) -> Field:
        """The maps' side of the search, about the scene `null`."""
        companion = (self.stars.companion, self.stars.fixed.get("diameter", 0.0))
        return Field(
            self.observation, self.covariance, null, self.grid, companion, smearing=self.smearing
        )

    def search(
        self,
        previous: SearchResult | None,
        noise_searches: int,
        rng: np.random.Generator,
        progress: Silent = SILENT,
    ) -> SearchResult:
        """Maps, fits at their peaks, and what noise would do."""
        null = self.null(previous)
        # What the search for the first companion found worth fitting is fitted again.
        self.free = tuple(sorted({*self.free, *null.free}))
        field = self.field(null)
        faint = field.faint()
        maps = field.all_contrasts(faint) if self.last == 0 else faint
        fits = self.resolved(self.solutions(faint, maps, null), null)
        if not fits:
            raise NothingFound(
                f"{self.observation.target}: no companion within "
                f"{self.grid.half * self.grid.step:.4g} mas fits better than none"
            )
        if self.errors.v2_calibration:
            self.calibrate(fits[0])
            null = self._again(null)
            again: list[Fit] = []
            for one in fits:
                self._keep(again, one)
            fits = self._best(again, null)
        top = scaled(field, faint.gain, field.chi2)
        looks = 1
        exact = (null.chi2 - fits[0].chi2) / max(1.0, fits[0].reduced)
        if exact > max(_BEYOND_LINEAR * top, _BEYOND_NOISE):
            # A bright companion, for which the linear statistic is too modest: a second look.
            top, looks = exact, 2
        alarms, chance, extrapolated = None, None, False
        if noise_searches:
            maxima = noise_maxima(field, noise_searches, rng, enough=top, progress=progress)
            alarms = FalseAlarms.fitted(maxima)
            chance, extrapolated = alarms.probability(top)
            chance = min(1.0, looks * chance)
        kept = candidates(fits, null, self.last, chance)
        return SearchResult(
            target=self.observation.target,
            instrument=self.observation.instrument,
            mjd=self.observation.mjd,
            n_v2=len(self.observation.v2),
            n_t3=len(self.observation.t3),
            n_t3amp=len(self.observation.t3amp),
            n_visamp=len(self.observation.visamp),
            n_visphi=len(self.observation.visphi),
            best=kept[0],
            alternatives=kept[1:],
            kept_chi2=KEPT,
            null=null,
            maps=maps,
            statistic=top,
            false_alarms=alarms,
            extrapolated=extrapolated,
            seconds=0.0,
            previous=previous,
        )

    def bootstrap(
        self, best: Candidate, count: int, rng: np.random.Generator, progress: Silent = SILENT
    ) -> Bootstrap:
        """Refit a solution to `count` resamplings of the data."""
        problem = self.problem(_extent(best.fit))
        return bootstrap(
            self.observation, problem, best.fit,
            companion=self.last, count=count, rng=rng, progress=progress,
        )  # fmt: skip

    def solutions(self, faint: Maps, maps: Maps, null: Fit) -> list[Fit]:
        """Distinct exact solutions from every peak that could be the answer, the best first.

        Where the primary is resolved out, neither the maps `faint` nor those of all contrasts,
        `maps`, are exact: the peaks of both are asked.
        """
        rough = self._rough(null, _peaks(faint, 0), _peaks(maps, 0))
        if not rough:
            # The higher peaks all led out of the field: the lower ones are asked.
            rough = self._rough(null, _peaks(faint, 1), _peaks(maps, 1))
        if not rough:
            return []
        found: list[Fit] = []
        lowest = min(rough, key=lambda one: one.chi2)
        self._keep(found, lowest)
        best = min((one.chi2 for one in found), default=lowest.chi2)
        reduced = max(1.0, best / max(lowest.dof, 1))
        # A few steps leave the chi-square of a good start far less above its minimum than this.
        hopeful = best + max(4 * KEPT * reduced, 0.3 * (null.chi2 - best))
        for one in sorted(rough, key=lambda one: one.chi2):
            if one is not lowest and one.chi2 < hopeful:
                self._keep(found, one)
        best = min((one.chi2 for one in found), default=best)
        for one in [one for one in found if one.chi2 < best + 4 * KEPT * reduced]:
            self._keep(found, self._fit(self._opposite(one.values), steps=_ROUGH_STEPS))
        return self._best(found, null)

    def _best(self, found: list[Fit], null: Fit) -> list[Fit]:
        """Those of the fits that are kept, the best first."""
        found = sorted((one for one in found if one.chi2 < null.chi2), key=lambda one: one.chi2)
        if not found:
            return []
        limit = found[0].chi2 + KEPT * max(1.0, found[0].reduced)
        return [one for one in found if one.chi2 < limit]

    def resolved(self, fits: list[Fit], null: Fit) -> list[Fit]:
        """`fits` with the companion's diameter fitted too.

        Where the data do not tell the companion from a point, the square of its diameter has a
        Gaussian prior of mean 0. So the contrast is neither drawn to that of a point, nor is its
        error that of one, and a faint companion is not made less certain by impossible diameters.
        """
        (own,) = self._indices("diameter")
        if not fits or own in self.free or not self.stars.may_resolve:
            return fits
        self.free = tuple(sorted((*self.free, own)))
        best = self._resolve(fits[0])
        gain = (fits[0].chi2 - best.chi2) / max(1.0, best.reduced)
        if gain > RESOLVED and best.values[own] > 0:
            larger = [best, *(self._resolve(one) for one in fits[1:])]
            return self._best([one for one in larger if self._inside(one)], null)
        self.free = tuple(i for i in self.free if i != own)
        return self._best([self._unresolved(one, own) for one in fits], null)

    def _unresolved(self, one: Fit, own: int) -> Fit:
        """`one` with the square of its companion's diameter fitted within its prior.

        One standard deviation is the square of the primary's diameter, or of the disc that a
        companion `SURFACE` times below the primary in surface brightness has, if that is smaller.
        """
        (contrast,) = self._indices("contrast")
        primary = abs(one.values[0]) * (abs(one.values[0]) + 2 * one.error("primary_diameter"))
        width = primary * min(1.0, SURFACE * one.values[contrast])
        if width == 0:
            return one
        priors = {**one.priors, own: (0.0, width)}
        wider = polish(self.problem(_extent(one)), replace(one, priors=priors, squares={own: 0.0}))
        return wider if wider.values[contrast] <= 1 else self._at_limit(wider)

    def _resolve(self, one: Fit) -> Fit:
        bright = self._fit(one.values)
        (contrast,) = self._indices("contrast")
        return bright if bright.values[contrast] <= 1 else self._no_brighter(bright)[0]

    def _rough(self, null: Fit, *peaks: tuple[Maps, list[tuple[int, int]]]) -> list[Fit]:
        """Fits of a few steps from each different peak that stay in the field."""
        starts = {}
        for maps, places in peaks:
            for place in places:
                start = self._start(null, maps, *place)
                starts[start.tobytes()] = start
        fits = (self._fit(start, steps=_ROUGH_STEPS) for start in starts.values())
        return [one for one in fits if self._inside(one)]

    def _start(self, null: Fit, maps: Maps, row: int, column: int) -> np.ndarray:
        """Start values at a position of the map."""
        values = self.values.copy()
        values[: len(null.values)] = null.values
        if 0 in self.free:
            values[0] = maps.diameter[row, column]
        axis = maps.grid.axis
        x, y, contrast = self._indices("x", "y", "contrast")
        values[[x, y]] = axis[column], axis[row]
        values[contrast] = max(maps.contrast[row, column], 1e-6)
        return values

    def _fit(self, start: np.ndarray, *, steps: int | None = None) -> Fit:
        x, y, own = self._indices("x", "y", "diameter")
        start = start.copy()
        for diameter in {0, own} & set(self.free):
            # A fit cannot leave a diameter of 0, where the visibility has no slope.
            start[diameter] = max(abs(start[diameter]), 2 * self.grid.step)
        problem = self.problem(1.2 * np.hypot(start[x], start[y]))
        options = {} if steps is None else {"steps": steps}
        return fit(problem, self.scene, start, self.free, self.priors, **options)

    def _keep(self, found: list[Fit], rough: Fit) -> None:
        """Polish a fit and add it to those `found`, once, as a companion fainter than its star."""
        if not self._inside(rough):
            return
        one = self._again(rough)
        for fair in self._no_brighter(one):
            if self._inside(fair) and not any(self._same(fair, other) for other in found):
                found.append(fair)

    def _no_brighter(self, one: Fit) -> list[Fit]:
        """`one`, or where its companion outshines the primary what comes nearest to it."""
        (contrast,) = self._indices("contrast")
        if one.values[contrast] <= 1:
            return [one]
        turned = self._fit(self._opposite(one.values))
        fair = [turned] if turned.values[contrast] <= 1 else []
        return [*fair, self._at_limit(one)]

    def _at_limit(self, one: Fit) -> Fit:
        """`one` with a companion as bright as the primary.

        The contrast has the error that it would have without the limit.
        """
        (contrast,) = self._indices("contrast")
        values = one.values.copy()
        values[contrast] = 1.0
        free = tuple(i for i in one.free if i != contrast)
        problem, squares = self.problem(_extent(one)), tuple(one.squares)
        bound = fit(problem, one.scene, values, free, one.priors, squares=squares)
        return fit(problem, one.scene, bound.values, one.free, one.priors, squares=squares, steps=0)

    def _opposite(self, values: np.ndarray) -> np.ndarray:
        """The two stars exchanged, where their parameters can be; else the companion opposite."""
        x, y, contrast, own = self._indices("x", "y", "contrast", "diameter")
        turned = values.copy()
        turned[[x, y]] *= -1
        if values[contrast] > 0.5 and self.last == 0:
            turned[contrast] = min(1 / values[contrast], 1.5)
            if 0 in self.free and own in self.free:
                turned[[0, own]] = values[[own, 0]]
        return turned

    def _inside(self, one: Fit) -> bool:
        x, y, contrast = self._indices("x", "y", "contrast")
        edge = (self.grid.half + 1) * self.grid.step
        return (
            one.values[contrast] > 0
            and abs(one.values[x]) <= edge
            and abs(one.values[y]) <= edge
            and np.isfinite(one.chi2)
        )

    def _same(self, one: Fit, other: Fit) -> bool:
        x, y = self._indices("x", "y")
        apart = np.hypot(*(one.values[[x, y]] - other.values[[x, y]]))
        return apart < self.grid.step / 2

    def _indices(self, *names: str) -> list[int]:
        return [self.scene.names.index(companion_name(name, self.last)) for name in names]


def _extent(one: Fit) -> float:
    """Distance within which all stars of a scene lie, with room for a fit to move, mas."""
    places = (
        np.hypot(one.value(companion_name("x", i)), one.value(companion_name("y", i)))
        for i in range(one.scene.companions)
    )
    return 1.2 * float(max(places, default=0.0))


def _peaks(maps: Maps, part: int) -> tuple[Maps, list[tuple[int, int]]]:
    """Local maxima that could be the best once the exact model judges (0), or lower ones (1)."""
    from scipy.ndimage import maximum_filter

    gain = maps.gain
    rows, columns = np.nonzero((gain == maximum_filter(gain, size=3)) & (gain > 0))
    height = gain[rows, columns]
    order = np.argsort(height)[::-1][:_PEAKS]
    places = list(zip(rows[order].tolist(), columns[order].tolist(), strict=True))
    top = height.max(initial=0.0)
    high = int((height[order] > min(0.4 * top, top - KEPT)).sum())
    return maps, places[high:] if part else places[:high]
