"""The whole posterior of an epoch: every place where the companion may be, with its share.

Nested sampling with the exact model, of a problem repartitioned about the solutions of a search
(see `repartitioned`). It finds the parts of the posterior; its walks do not pass between them, so
their shares are uncertain by more than it says. They, and the evidence, are therefore taken from
independent draws of a mixture fitted to its samples, weighted by likelihood x prior / mixture:
importance sampling, whose error is known (Kish 1965).

Priors are flat: places in the field, contrasts from 0 to 1, diameters up to `LARGEST` times the
resolution; the square of the diameter of a companion that is not resolved has the normal prior
that it has in the search. The evidence against the single star depends on them, as it must: a field
or a range of contrasts twice as large halves it.
"""

import time

import astropy.units as u
import numpy as np

from ..observation import Observation
from ..progress import SILENT, Silent
from ..resampling import effective, systematic
from .covariance import ErrorModel
from .epoch import Epoch
from .fit import Fit, Problem
from .posterior_result import EpochPosterior, Mode
from .repartitioned import Prior, Target, draw, explore, log_likelihood
from .result import SearchResult
from .search import choose_grid, search
from .stars import Stars, settled_stars

LIVE_POINTS = 200
LARGEST = 3.0
"""Of a diameter, in units of the shortest wavelength over the longest baseline."""
_DRAWS = 50
"""Independent draws for each live point."""
_SPREAD = 10.0
"""Standard errors over which the evidence of a star is integrated."""


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
    best, scale = found.best.fit, found.best.error_scale
    prior = _prior(observation, best, grid.half * grid.step, scale)
    first = _solutions(found, prior)
    problem, near = epoch.problem(grid.radius), 2 * grid.step
    target = Target(problem, best, prior, scale**2, first)
    points, log_weight, calls = explore(target, live_points, rng, progress)
    explored = points[systematic(np.exp(log_weight), rng)]
    parts, _ = _modes(explored, _nearest(explored, first, prior, near))
    target = Target(problem, best, prior, scale**2, parts or first)
    count = _DRAWS * live_points
    points, log_weight = draw(target, count, rng, progress)
    weight = np.exp(log_weight - log_weight.max())
    log_evidence = float(np.log(weight.mean()) + log_weight.max())
    star = _star_evidence(epoch.problem(0.0), epoch.null(None), prior, scale**2)
    samples = points[systematic(weight, rng)]
    mode = _nearest(samples, first, prior, near)
    modes, order = _modes(samples, mode)
    return EpochPosterior(
        target=observation.target,
        instrument=observation.instrument,
        mjd=observation.mjd,
        names=prior.names,
        samples=samples,
        mode=order[mode],
        modes=modes,
        log_evidence=log_evidence - star,
        log_evidence_error=float(np.sqrt(1 / effective(weight) - 1 / count)),
        error_scale=scale,
        calls=calls + count,
        seconds=time.perf_counter() - began,
        search=found,
    )


def _prior(observation: Observation, best: Fit, half: float, scale: float) -> Prior:
    largest = LARGEST * 4 * choose_grid(observation).step
    ranges = {
        "x": (-half, half),
        "y": (-half, half),
        "contrast": (0.0, 1.0),
        "primary_diameter": (0.0, largest),
        "diameter": (0.0, largest),
    }
    return Prior.of(best, ranges, scale)


def _solutions(found: SearchResult, prior: Prior) -> tuple[Mode, ...]:
    """The solutions of a search as modes."""
    modes = []
    for one in (found.best, *found.alternatives):
        fitted = one.fit
        squares = fitted.values[list(fitted.squares)]
        mean = np.append(fitted.values[list(fitted.free)], squares * np.abs(squares))
        for k, name in enumerate(prior.names):
            if name.endswith("diameter"):
                mean[k] = abs(mean[k])
        covariance = one.fit.joint * found.best.error_scale**2
        modes.append(Mode(weight=one.weight, mean=mean, covariance=covariance))
    return tuple(modes)


def _star_evidence(problem: Problem, null: Fit, prior: Prior, scale2: float) -> float:
    """ln of the mean likelihood of a single star over the prior of its diameter."""
    if not null.free:
        return -0.5 * null.chi2 / scale2
    k = prior.names.index("primary_diameter")
    error = null.error("primary_diameter") * np.sqrt(scale2)
    middle = abs(null.value("primary_diameter"))
    low = max(prior.low[k], middle - _SPREAD * error)
    high = min(prior.high[k], middle + _SPREAD * error)
    nodes, weights = np.polynomial.legendre.leggauss(60)
    values, terms = null.values.copy(), []
    for node in (high + low) / 2 + (high - low) / 2 * nodes:
        values[0] = node
        terms.append(log_likelihood(problem, null.scene, values, scale2))
    part = np.log(weights / 2 * (high - low) / (prior.high[k] - prior.low[k]))
    return float(np.logaddexp.reduce(part + terms))


def _nearest(
    samples: np.ndarray, solutions: tuple[Mode, ...], prior: Prior, within: float
) -> np.ndarray:
    """The solution nearest to each sample, by place; -1 where none is within `within` mas."""
    place = [prior.names.index(name) for name in ("x", "y")]
    means = np.array([one.mean for one in solutions])
    apart = np.linalg.norm(samples[:, None, place] - means[None, :, place], axis=2)
    return np.where(apart.min(axis=1) <= within, apart.argmin(axis=1), -1)


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
