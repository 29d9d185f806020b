"""Search one epoch for a companion: maps of the field, exact fits at the peaks, significance."""

import time
from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import astropy.units as u
import numpy as np

from ..binary import PRIMARY, Scene, companion_name, model
from ..constants import MAS
from ..errors import InputError, NothingFound
from ..observation import Observation
from ..progress import SILENT, Silent
from ..sampling import SAMPLED, Sampling
from .bootstrap import Bootstrap, bootstrap
from .covariance import Covariance, ErrorModel
from .fit import Fit, Problem, fit, polish
from .grid import Grid
from .maps import Field, Maps, single_star
from .result import Candidate, SearchResult
from .significance import FalseAlarms, noise_maxima, scaled

FALSE_ALARM = 0.01
"""A companion is claimed when noise alone would look as good less often than this."""
NOISE_SEARCHES = 1000
RESOLVED = 16.0
"""Chi-square, scaled as the errors are, that the diameter of a companion must gain to be fitted."""
KEPT = 25.0
"""Solutions within this chi-square of the best, scaled as the errors are, are kept."""
_STEPS_PER_FRINGE = 4.0
_LARGEST_HALF = 256
"""Most steps from the centre to the edge that a default field has."""
_PEAKS = 24
_BEYOND_LINEAR = 1.5
"""Ratio of the exact to the linear gain that shows that the companion is not faint."""
_ROUGH_STEPS = 6


@dataclass(frozen=True, kw_only=True)
class Stars:
    """What the stars may look like, and which of their parameters are fitted.

    Parameters are named as in `orbits.binary.Scene`. The position and contrast of a companion are
    always fitted; everything else is fixed at 0 unless it is named here.
    """

    primary: str = "disc"
    """Shape; see `orbits.visibility.SHAPES`."""
    companion: str = "disc"
    fixed: Mapping[str, float] = field(default_factory=dict)
    free: tuple[str, ...] = ()
    priors: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    """Mean and standard deviation of the Gaussian prior of a parameter, which is then fitted."""
    may_resolve: bool = False
    """Fit the companion's diameter where the data tell it from a point."""
    contrast_per_instrument: bool = False
    fibre_fwhm: float | None = None
    """mas; see `Scene`."""


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
        Of the companion; by default it is fitted where that gains a chi-square of 16 (4 sigma),
        and the companion is a point elsewhere.
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
        If the observation has no data that can show a companion.
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
    tables = [t for t in (getattr(observation, name) for name in SAMPLED) if len(t)]
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
        # There is no model of phases that depend on an instrument's own reference.
        observation = observation.select(visphi=np.zeros(len(observation.visphi), dtype=bool))
        self.observation, self.stars, self.grid, self.smearing = observation, stars, grid, smearing
        self.scene = _scene(observation, stars, count)
        self.before = _scene(observation, stars, count - 1)
        self.last = count - 1
        self.values = self.scene.vector(_known(self.scene, stars))
        self.free = _free(self.scene, stars)
        self.priors = {
            self.scene.names.index(name): prior
            for name, prior in stars.priors.items()
            if name in self.scene.names
        }
        self.errors = errors or ErrorModel()
        self._samplings: dict[float, Sampling] = {}
        self.calibrate(None)

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
        start = self.before.vector(_known(self.before, self.stars))
        priors = {i: prior for i, prior in self.priors.items() if i < len(PRIMARY)}
        problem = self.problem(0.0)
        if 0 in free:
            start = single_star(problem, self.before, diameter=None, values=start).values
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
        fits = self.resolved(self.solutions(faint, maps, null))
        if not fits:
            raise NothingFound(
                f"{self.observation.target}: no companion within "
                f"{self.grid.half * self.grid.step:.4g} mas fits better than none"
            )
        if self.errors.v2_calibration:
            self.calibrate(fits[0])
            null = self._again(null)
            fits = sorted((self._again(one) for one in fits), key=lambda one: one.chi2)
        top = scaled(field, faint.gain, field.chi2)
        looks = 1
        exact = (null.chi2 - fits[0].chi2) / max(1.0, fits[0].reduced)
        if exact > _BEYOND_LINEAR * top:
            # A bright companion, for which the linear statistic is too modest: a second look.
            top, looks = exact, 2
        alarms, chance, extrapolated = None, None, False
        if noise_searches:
            maxima = noise_maxima(field, noise_searches, rng, enough=top, progress=progress)
            alarms = FalseAlarms.fitted(maxima)
            chance, extrapolated = alarms.probability(top)
            chance = min(1.0, looks * chance)
        kept = _candidates(fits, null, self.last, chance)
        return SearchResult(
            target=self.observation.target,
            instrument=self.observation.instrument,
            mjd=self.observation.mjd,
            n_v2=len(self.observation.v2),
            n_t3=len(self.observation.t3),
            n_t3amp=len(self.observation.t3amp),
            n_visamp=len(self.observation.visamp),
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
        best = min((one.chi2 for one in found), default=best)
        kept = [one for one in found if one.chi2 < min(best + KEPT * reduced, null.chi2)]
        return sorted(kept, key=lambda one: one.chi2)

    def resolved(self, fits: list[Fit]) -> list[Fit]:
        """`fits` with the companion's diameter fitted too, where the data tell it from a point."""
        (own,) = self._indices("diameter")
        if not fits or own in self.free or not self.stars.may_resolve:
            return fits
        self.free = tuple(sorted((*self.free, own)))
        best = self._resolve(fits[0])
        if fits[0].chi2 - best.chi2 > RESOLVED * max(1.0, best.reduced):
            larger = [best, *(self._resolve(one) for one in fits[1:])]
            return sorted(filter(self._inside, larger), key=lambda one: one.chi2)
        self.free = tuple(i for i in self.free if i != own)
        return fits

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
        one = polish(self.problem(_extent(rough)), rough)
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
        values = one.values.copy()
        values[contrast] = 1.0
        free = tuple(i for i in self.free if i != contrast)
        bound = fit(self.problem(_extent(one)), self.scene, values, free, self.priors)
        return [*fair, bound]

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


def settled_stars(
    observation: Observation,
    stars: Stars,
    diameter: u.Quantity | None,
    companion_diameter: u.Quantity | None,
) -> Stars:
    """`stars` with the two diameters decided: fixed, or among the free parameters."""
    fixed, free = dict(stars.fixed), set(stars.free) | set(stars.priors)
    names = ("primary_diameter", "diameter")
    shapes = (stars.primary, stars.companion)
    sized = any(len(getattr(observation, name)) for name in ("v2", "t3amp", "visamp"))
    resolve = False
    for name, shape, value in zip(names, shapes, (diameter, companion_diameter), strict=True):
        if value is not None and name not in free:
            fixed.setdefault(name, float(value.to_value(u.mas)))
        elif name == "diameter":
            resolve = shape != "point" and name not in (*fixed, *free)
        elif shape != "point" and name not in fixed and sized:
            free.add(name)
    twice = sorted(free & set(fixed))
    if twice:
        raise ValueError(f"parameter {', '.join(twice)} is both fixed and free")
    return replace(stars, fixed=fixed, free=tuple(sorted(free)), may_resolve=resolve)


def _scene(observation: Observation, stars: Stars, companions: int) -> Scene:
    wavelengths = [getattr(observation, name).wavelength for name in SAMPLED]
    return Scene(
        primary_shape=stars.primary,
        companion_shape=stars.companion,
        companions=companions,
        instruments=len(observation.instruments) if stars.contrast_per_instrument else 1,
        reference=float(np.median(np.concatenate(wavelengths))),
        fibre_fwhm=stars.fibre_fwhm,
    )


def _known(scene: Scene, stars: Stars) -> dict[str, float]:
    """Values fixed or expected beforehand, for all companions of `scene`."""
    given = {**{name: mean for name, (mean, _) in stars.priors.items()}, **stars.fixed}
    known = {}
    for name, value in given.items():
        for i in range(max(scene.companions, 1)):
            each = name if name in PRIMARY else companion_name(name, i)
            if each in scene.names:
                known[each] = value
    return known


def _free(scene: Scene, stars: Stars) -> tuple[int, ...]:
    """Indices of the fitted parameters of `scene`."""
    wanted = {name for name in stars.free if name in PRIMARY}
    every = [name for name in stars.free if name not in PRIMARY]
    if stars.contrast_per_instrument:
        every += [f"ratio_{k}" for k in range(1, scene.instruments)]
    for i in range(scene.companions):
        wanted |= {companion_name(name, i) for name in ("x", "y", "contrast", *every)}
    unknown = sorted(wanted - set(scene.names))
    if unknown:
        raise ValueError(f"no parameter {', '.join(unknown)} to fit; there are {scene.names}")
    return tuple(i for i, name in enumerate(scene.names) if name in wanted)


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


def _candidates(
    fits: list[Fit], null: Fit, companion: int, chance: float | None
) -> tuple[Candidate, ...]:
    """Candidates for solutions, the best first, with their posterior weights."""
    scale2 = max(1.0, fits[0].reduced)
    log_weight = np.array([-0.5 * one.chi2 / scale2 + _log_volume(one) for one in fits])
    weight = np.exp(log_weight - log_weight.max())
    weight /= weight.sum()
    return tuple(
        _candidate(one, null, companion, chance, float(w), scale2)
        for one, w in zip(fits, weight, strict=True)
    )


def _log_volume(one: Fit) -> float:
    """Log of the posterior's volume about a solution (Laplace's approximation)."""
    sign, size = np.linalg.slogdet(one.covariance)
    return 0.5 * size if sign > 0 else 0.0


def _candidate(
    one: Fit, null: Fit, companion: int, chance: float | None, weight: float, scale2: float
) -> Candidate:
    scale = float(np.sqrt(scale2))

    def name(what: str) -> str:
        return companion_name(what, companion)

    places = [one.free.index(one.scene.names.index(name(axis))) for axis in ("x", "y")]
    gain = null.chi2 - one.chi2
    return Candidate(
        x_mas=one.value(name("x")),
        y_mas=one.value(name("y")),
        covariance_xy_mas2=one.covariance[np.ix_(places, places)] * scale2,
        contrast=one.value(name("contrast")),
        contrast_error=one.error(name("contrast")) * scale,
        primary_diameter_mas=abs(one.value("primary_diameter")),
        primary_diameter_error_mas=one.error("primary_diameter") * scale,
        companion_diameter_mas=abs(one.value(name("diameter"))),
        companion_diameter_error_mas=one.error(name("diameter")) * scale,
        error_scale=scale,
        chi2=one.chi2,
        dof=one.dof,
        delta_chi2=gain,
        significance_sigma=float(np.sqrt(max(gain, 0.0) / scale2)),
        false_alarm_probability=chance,
        weight=weight,
        companion=companion,
        fit=one,
    )
