"""The whole posterior of an epoch: every place where the companion may be, with its share.

Nested sampling (Skilling 2006, Bayesian Anal. 1, 833) with the exact model. A peak fills 1e-8 of a
field and would be found only by long walks, so the prior is repartitioned: points are drawn from a
mixture q of the prior and of normal densities about the solutions of the search, and their
likelihood is multiplied by prior / q, which leaves posterior and evidence as they are (Chen et al.
2018, Stat. Comput. 29, 835). The part of the prior looks after what the search has missed.

Nested sampling finds the parts of the posterior; its walks do not pass between them, so their
shares are uncertain by more than it says. They, and the evidence, are therefore taken from
independent draws of a mixture fitted to its samples, weighted by likelihood x prior / mixture:
importance sampling, whose error is known (Kish 1965).

Priors are flat: places in the field, contrasts from 0 to 1, diameters up to `LARGEST` times the
resolution. The evidence against the single star depends on them, as it must: a field or a range of
contrasts twice as large halves it.
"""

import time
from dataclasses import dataclass
from typing import Any

import astropy.units as u
import numpy as np

from ..binary import Scene, model
from ..observation import Observation
from ..positions import Positions
from ..progress import SILENT, Silent
from ..times import tdb_of_utc
from .covariance import ErrorModel
from .epoch import Epoch
from .fit import Fit, Problem
from .result import SearchResult
from .search import choose_grid, search
from .stars import Stars, settled_stars

LIVE_POINTS = 200
LARGEST = 3.0
"""Of a diameter, in units of the shortest wavelength over the longest baseline."""
_PRIOR_SHARE = 0.1
"""Of the prior in the mixture."""
_LEAST_SHARE = 0.01
"""Of a solution in the mixture, however small the search thinks its weight."""
_WIDER = (1.1, 2.5)
"""Widths of the normal densities over those of the solutions: tails must not be cut."""
_DRAWS = 50
"""Independent draws for each live point."""
_REMAINDER = 0.3
"""The run ends when the live points can add no more than this to ln of the evidence."""
_IMPOSSIBLE = -1e300
_SPREAD = 10.0
"""Standard errors over which the evidence of a star is integrated."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Mode:
    """A normal density in place of one of the separate parts of a posterior."""

    weight: float
    """Its share of the posterior."""
    mean: np.ndarray
    """(p,)"""
    covariance: np.ndarray
    """(p, p)"""


@dataclass(frozen=True, eq=False, kw_only=True)
class EpochPosterior:
    """What one epoch says of its companion."""

    target: str
    instrument: str
    mjd: float
    names: tuple[str, ...]
    """Of the p parameters, as in `orbits.binary.Scene`; mas."""
    samples: np.ndarray
    """(n, p) of equal weight."""
    mode: np.ndarray
    """(n,) the mode of each sample; -1 where it lies at none of them."""
    modes: tuple[Mode, ...]
    """The heaviest first; their weights and the share of samples at none of them sum to 1."""
    log_evidence: float
    """ln of the mean likelihood of a pair over the prior, less that of the single star."""
    log_evidence_error: float
    error_scale: float
    """Root of the reduced chi-square where that exceeds 1; errors are scaled by it."""
    calls: int
    """Evaluations of the model."""
    seconds: float
    search: SearchResult

    def column(self, name: str) -> np.ndarray:
        """(n,) samples of a parameter."""
        return self.samples[:, self.names.index(name)]

    def positions(self, night: str, *, least: float = 1e-3) -> Positions:
        """The modes as alternatives of one night, for the fit of an orbit.

        Those with a share below `least` are left out, and the others weighted anew.
        """
        kept = [one for one in self.modes if one.weight >= least]
        x, y, f = (self.names.index(name) for name in ("x", "y", "contrast"))
        n, weight = len(kept), np.array([one.weight for one in kept])
        return Positions(
            mjd=np.full(n, tdb_of_utc(self.mjd)),
            xy=np.array([one.mean[[x, y]] for one in kept]),
            covariance=np.array([one.covariance[np.ix_([x, y], [x, y])] for one in kept]),
            weight=weight / weight.sum(),
            night=np.full(n, night, dtype=object),
            instrument=np.full(n, self.instrument, dtype=object),
            source=np.full(n, "posterior", dtype=object),
            contrast=np.array([one.mean[f] for one in kept]),
            contrast_error=np.array([one.covariance[f, f] ** 0.5 for one in kept]),
        )

    def table(self):
        """The samples as a table with units."""
        from astropy.table import Table

        table = Table(meta={"target": self.target, "mjd": self.mjd})
        for name in self.names:
            values = self.column(name)
            table[name] = values if name == "contrast" else values * u.mas
        table["mode"] = self.mode
        return table

    def to_json(self) -> dict[str, Any]:
        """One object of plain numbers and words."""
        return {
            "target": self.target,
            "instrument": self.instrument,
            "mjd": self.mjd,
            "parameters": list(self.names),
            "modes": [
                {
                    "weight": one.weight,
                    "mean": one.mean.tolist(),
                    "covariance": one.covariance.tolist(),
                }
                for one in self.modes
            ],
            "elsewhere": float(np.mean(self.mode < 0)),
            "log_evidence_against_single_star": self.log_evidence,
            "log_evidence_err": self.log_evidence_error,
            "samples": len(self.samples),
            "error_scale": self.error_scale,
            "seconds": self.seconds,
        }


def posterior(
    observation: Observation,
    *,
    field: u.Quantity | None = None,
    step: u.Quantity | None = None,
    diameter: u.Quantity | None = None,
    companion_diameter: u.Quantity | None = None,
    errors: ErrorModel | None = None,
    smearing: bool = True,
    live_points: int = LIVE_POINTS,
    rng: np.random.Generator | None = None,
    progress: Silent = SILENT,
) -> EpochPosterior:
    """Sample the posterior of a companion in one epoch; the arguments are those of `search`.

    A companion that the search does not resolve keeps the diameter that it has there.

    Raises
    ------
    InputError
        If the observation has no data that can show a companion.
    NothingFound
        If no position in the field fits better than a single star.
    """
    began = time.perf_counter()
    rng = np.random.default_rng(0) if rng is None else rng
    found = search(
        observation, field=field, step=step, diameter=diameter,
        companion_diameter=companion_diameter, errors=errors, smearing=smearing, noise_searches=0,
    )  # fmt: skip
    stars = settled_stars(observation, Stars(), diameter, companion_diameter)
    grid = choose_grid(observation, field, step)
    epoch = Epoch(observation, stars, grid, errors, 1, smearing)
    null = epoch.null(None)
    box = _Box.of(observation, found.best.fit, grid.half * grid.step)
    scale2 = found.best.error_scale**2
    means, first = _solutions(found, box, scale2)
    target = _Target(epoch.problem(grid.radius), found.best.fit, box, scale2, first)
    points, log_weight, calls = _run(target, live_points, rng, progress)
    explored = points[_systematic(np.exp(log_weight), rng)]
    parts, _ = _modes(explored, _nearest(explored, means, box, 2 * grid.step))
    target = _Target(epoch.problem(grid.radius), found.best.fit, box, scale2, parts or first)
    count = _DRAWS * live_points
    points, log_weight = _draw(target, count, rng, progress)
    weight = np.exp(log_weight - log_weight.max())
    log_evidence = float(np.log(weight.mean()) + log_weight.max())
    error = float(np.sqrt((weight**2).sum() / weight.sum() ** 2 - 1 / count))
    star = _star_evidence(epoch.problem(0.0), null, box, scale2)
    samples = points[_systematic(weight, rng)]
    mode = _nearest(samples, means, box, 2 * grid.step)
    modes, order = _modes(samples, mode)
    return EpochPosterior(
        target=observation.target,
        instrument=observation.instrument,
        mjd=observation.mjd,
        names=box.names,
        samples=samples,
        mode=order[mode],
        modes=modes,
        log_evidence=log_evidence - star,
        log_evidence_error=error,
        error_scale=found.best.error_scale,
        calls=calls + count,
        seconds=time.perf_counter() - began,
        search=found,
    )


@dataclass(frozen=True, eq=False)
class _Box:
    """The flat prior."""

    names: tuple[str, ...]
    low: np.ndarray
    high: np.ndarray

    @classmethod
    def of(cls, observation: Observation, best: Fit, half: float) -> "_Box":
        finest = 4 * choose_grid(observation).step
        ranges = {
            "x": (-half, half),
            "y": (-half, half),
            "contrast": (0.0, 1.0),
            "primary_diameter": (0.0, LARGEST * finest),
            "diameter": (0.0, LARGEST * finest),
        }
        names = tuple(best.scene.names[i] for i in best.free)
        low, high = np.array([ranges[name] for name in names]).T
        return cls(names, low, high)

    @property
    def log_volume(self) -> float:
        return float(np.log(self.high - self.low).sum())

    def holds(self, point: np.ndarray) -> bool:
        return bool((point >= self.low).all() and (point <= self.high).all())


class _Target:
    """Likelihood times prior over the proposal, and the proposal itself."""

    def __init__(
        self, problem: Problem, best: Fit, box: _Box, scale2: float, modes: tuple[Mode, ...]
    ):
        self.problem, self.box, self.scale2 = problem, box, scale2
        self.scene: Scene = best.scene
        self.values, self.free = best.values.copy(), list(best.free)
        spread = (box.high - box.low) / 2
        self.means = np.array([one.mean for one in modes for _ in _WIDER])
        self.roots = np.array(
            [_root(w**2 * one.covariance, spread) for one in modes for w in _WIDER]
        )
        weight = np.maximum([one.weight for one in modes for _ in _WIDER], _LEAST_SHARE)
        weight *= (1 - _PRIOR_SHARE) / weight.sum()
        self.edges = np.concatenate([[_PRIOR_SHARE], _PRIOR_SHARE + np.cumsum(weight)])
        normal = len(box.names) / 2 * np.log(2 * np.pi)
        self.log_scale = np.log(weight) - np.linalg.slogdet(self.roots)[1] - normal
        self.inverse = np.linalg.inv(self.roots)
        self.log_prior = -box.log_volume

    def place(self, cube: np.ndarray) -> np.ndarray:
        """(d,) a point of the proposal from (d + 1,) numbers between 0 and 1."""
        from scipy.special import ndtri

        k = int(np.searchsorted(self.edges, cube[0], side="right"))
        if k == 0:
            return self.box.low + cube[1:] * (self.box.high - self.box.low)
        k = min(k, len(self.means)) - 1
        return self.means[k] + self.roots[k] @ ndtri(np.clip(cube[1:], 1e-15, 1 - 1e-15))

    def log_weight(self, point: np.ndarray) -> float:
        """ln of likelihood x prior / proposal."""
        if not self.box.holds(point):
            return _IMPOSSIBLE
        deviates = np.einsum("kij,kj->ki", self.inverse, point - self.means)
        terms = self.log_scale - 0.5 * (deviates**2).sum(axis=1)
        proposal = np.logaddexp.reduce([np.log(_PRIOR_SHARE) + self.log_prior, *terms])
        self.values[self.free] = point
        return _log_likelihood(self.problem, self.scene, self.values, self.scale2) + (
            self.log_prior - float(proposal)
        )


def _log_likelihood(problem: Problem, scene: Scene, values: np.ndarray, scale2: float) -> float:
    predicted, _ = model(scene, values, problem.sampling)
    white = problem.covariance.whiten(problem.residual(predicted))
    return -0.5 * float(white @ white) / scale2


def _root(covariance: np.ndarray, spread: np.ndarray) -> np.ndarray:
    """Cholesky factor of a covariance, made no wider than the prior in any parameter."""
    size = np.sqrt(np.diag(covariance))
    cut = np.minimum(1.0, spread / np.maximum(size, 1e-300))
    scaled = covariance * np.outer(cut, cut)
    ridge = 1e-10 * np.diag(np.diag(scaled))
    return np.linalg.cholesky(scaled + ridge)


def _solutions(
    found: SearchResult, box: _Box, scale2: float
) -> tuple[np.ndarray, tuple[Mode, ...]]:
    """The solutions of a search, (k, p), and as modes."""
    fits = (found.best, *found.alternatives)
    means = np.array([one.fit.values[list(one.fit.free)] for one in fits])
    diameters = [k for k, name in enumerate(box.names) if name.endswith("diameter")]
    means[:, diameters] = np.abs(means[:, diameters])
    modes = tuple(
        Mode(weight=one.weight, mean=mean, covariance=one.fit.covariance * scale2)
        for one, mean in zip(fits, means, strict=True)
    )
    return means, modes


def _draw(target: _Target, count: int, rng: np.random.Generator, progress: Silent):
    """`count` independent points of the proposal, (count, p), and ln of their weights."""
    cube = rng.random((count, len(target.box.names) + 1))
    points, log_weight = np.empty((count, len(target.box.names))), np.empty(count)
    with progress.task("weighing", count) as tick:
        for k in range(count):
            points[k] = target.place(cube[k])
            log_weight[k] = target.log_weight(points[k])
            tick()
    return points, log_weight


def _run(target: _Target, live_points: int, rng: np.random.Generator, progress: Silent):
    """Points, ln of their weights, and the number of calls."""
    import dynesty

    def transform(cube: np.ndarray) -> np.ndarray:
        return np.concatenate([cube[:1], target.place(cube)])

    sampler = dynesty.NestedSampler(
        lambda parameters: target.log_weight(parameters[1:]),
        transform,
        len(target.box.names) + 1,
        nlive=live_points,
        bound="multi",
        sample="rwalk",
        rstate=rng,
        first_update={"min_ncall": 2 * live_points, "min_eff": 4.0},
    )
    with progress.task("nested sampling") as tick:
        for count, _ in enumerate(sampler.sample(dlogz=_REMAINDER, save_bounds=False)):
            if count % 100 == 0:
                tick(100)
        for _ in sampler.add_live_points():
            pass
    results = sampler.results
    log_weight = results.logwt - results.logz[-1]
    return results.samples[:, 1:], log_weight, int(np.sum(results.ncall))


def _star_evidence(problem: Problem, null: Fit, box: _Box, scale2: float) -> float:
    """ln of the mean likelihood of a single star over the prior of its diameter."""
    if not null.free:
        return -0.5 * null.chi2 / scale2
    k = box.names.index("primary_diameter")
    error = null.error("primary_diameter") * np.sqrt(scale2)
    middle = abs(null.value("primary_diameter"))
    low = max(box.low[k], middle - _SPREAD * error)
    high = min(box.high[k], middle + _SPREAD * error)
    nodes, weights = np.polynomial.legendre.leggauss(60)
    values, terms = null.values.copy(), []
    for node in (high + low) / 2 + (high - low) / 2 * nodes:
        values[0] = node
        terms.append(_log_likelihood(problem, null.scene, values, scale2))
    part = np.log(weights / 2 * (high - low) / (box.high[k] - box.low[k]))
    return float(np.logaddexp.reduce(part + terms))


def _systematic(weight: np.ndarray, rng: np.random.Generator) -> np.ndarray:
    """Indices of as many equally weighted samples as the weights are worth (Kish 1965)."""
    weight = weight / weight.sum()
    count = max(int(1 / (weight**2).sum()), 1)
    steps = (rng.random() + np.arange(count)) / count
    return np.minimum(np.searchsorted(np.cumsum(weight), steps), weight.size - 1)


def _nearest(samples: np.ndarray, means: np.ndarray, box: _Box, within: float) -> np.ndarray:
    """The solution nearest to each sample, by place; -1 where none is within `within` mas."""
    x, y = box.names.index("x"), box.names.index("y")
    apart = np.hypot(*(samples[:, None, k] - means[None, :, k] for k in (x, y)))
    nearest = apart.argmin(axis=1)
    return np.where(apart.min(axis=1) <= within, nearest, -1)


def _modes(samples: np.ndarray, mode: np.ndarray) -> tuple[tuple[Mode, ...], np.ndarray]:
    """The modes, the heaviest first, and the new number of each old one (the last entry: none)."""
    count = max(int(mode.max(initial=-1)) + 1, 0)
    made = {}
    for k in range(count):
        mine = samples[mode == k]
        if len(mine) > samples.shape[1] + 1:
            made[k] = Mode(
                weight=len(mine) / len(samples),
                mean=mine.mean(axis=0),
                covariance=np.cov(mine, rowvar=False),
            )
    ranked = sorted(made, key=lambda k: -made[k].weight)
    order = np.full(count + 1, -1)
    order[ranked] = np.arange(len(ranked))
    return tuple(made[k] for k in ranked), order
