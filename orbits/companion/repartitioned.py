"""The problem of an epoch's posterior, repartitioned for sampling.

Nested sampling (Skilling 2006, Bayesian Anal. 1, 833) would find a peak that fills 1e-8 of a field
only by long walks. So points are drawn from a mixture q of the prior and of normal densities about
known solutions, and their likelihood is multiplied by prior / q, which leaves posterior and
evidence as they are (Chen et al. 2018, Stat. Comput. 29, 835). The part of the prior looks after
what is not known.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from ..binary import model
from ..progress import Silent
from .fit import Fit, Problem
from .posterior_result import SQUARE, Mode

_PRIOR_SHARE = 0.1
"""Of the prior in the mixture."""
_LEAST_SHARE = 0.01
"""Of a solution in the mixture, however small the search thinks its weight."""
_WIDER = (1.1, 2.5)
"""Widths of the normal densities over those of the solutions: tails must not be cut."""
_REMAINDER = 0.3
"""The run ends when the live points can add no more than this to ln of the evidence."""
_IMPOSSIBLE = -1e300


@dataclass(frozen=True, eq=False)
class Prior:
    """Flat within bounds, or normal about 0."""

    names: tuple[str, ...]
    """Of the p parameters."""
    low: np.ndarray
    """(p,)"""
    high: np.ndarray
    """(p,)"""
    sigma: np.ndarray
    """(p,) standard deviation; inf where the prior is flat."""

    @classmethod
    def of(cls, best: Fit, ranges: dict[str, tuple[float, float]], scale: float) -> "Prior":
        """For what `best` fits: `ranges` by name, and for squares the prior that it has.

        `scale` enlarges the latter, as the search enlarges all errors.
        """
        free = [best.scene.names[i] for i in best.free]
        width = np.array([scale * best.priors[i][1] for i in best.squares])
        bounds = [ranges[name] for name in free] + [(-np.inf, np.inf)] * len(width)
        squares = [best.scene.names[i] + SQUARE for i in best.squares]
        low, high = np.array(bounds).T
        return cls((*free, *squares), low, high, np.append(np.full(len(free), np.inf), width))

    @cached_property
    def flat(self) -> np.ndarray:
        """(p,) bool: where it is flat."""
        return np.isinf(self.sigma)

    @cached_property
    def spread(self) -> np.ndarray:
        """(p,) half its range, or its standard deviation."""
        return np.where(self.flat, (self.high - self.low) / 2, self.sigma)

    @cached_property
    def _log_height(self) -> float:
        """ln of its greatest density."""
        normal = np.log(self.sigma[~self.flat] * np.sqrt(2 * np.pi)).sum()
        return -float(np.log((self.high - self.low)[self.flat]).sum() + normal)

    def place(self, uniform: np.ndarray) -> np.ndarray:
        """(p,) a point of it, from numbers between 0 and 1."""
        from scipy.special import ndtri

        flat, point = self.flat, np.empty(len(self.names))
        low, high = self.low[flat], self.high[flat]
        point[flat] = low + uniform[flat] * (high - low)
        point[~flat] = self.sigma[~flat] * ndtri(uniform[~flat])
        return point

    def log_density(self, point: np.ndarray) -> float:
        """ln of its density; -inf outside."""
        if not ((point >= self.low) & (point <= self.high)).all():
            return -np.inf
        deviate = point / self.sigma  # 0 where it is flat
        return self._log_height - 0.5 * float(deviate @ deviate)


class Target:
    """Likelihood times prior over the proposal, and the proposal itself."""

    def __init__(
        self, problem: Problem, best: Fit, prior: Prior, scale2: float, modes: Sequence[Mode]
    ):
        self.problem, self.prior, self.scale2 = problem, prior, scale2
        self.scene, self.values = best.scene, best.values.copy()
        self.free, self.squares = list(best.free), list(best.squares)
        self.means = np.array([one.mean for one in modes for _ in _WIDER])
        self.roots = np.array(
            [_root(w**2 * one.covariance, prior.spread) for one in modes for w in _WIDER]
        )
        weight = np.maximum([one.weight for one in modes for _ in _WIDER], _LEAST_SHARE)
        weight *= (1 - _PRIOR_SHARE) / weight.sum()
        self.edges = np.concatenate([[_PRIOR_SHARE], _PRIOR_SHARE + np.cumsum(weight)])
        normal = len(prior.names) / 2 * np.log(2 * np.pi)
        self.log_scale = np.log(weight) - np.linalg.slogdet(self.roots)[1] - normal
        self.inverse = np.linalg.inv(self.roots)

    def place(self, cube: np.ndarray) -> np.ndarray:
        """(p,) a point of the proposal from (p + 1,) numbers between 0 and 1."""
        from scipy.special import ndtri

        k = int(np.searchsorted(self.edges, cube[0], side="right"))
        uniform = np.clip(cube[1:], 1e-15, 1 - 1e-15)
        if k == 0:
            return self.prior.place(uniform)
        k = min(k, len(self.means)) - 1
        return self.means[k] + self.roots[k] @ ndtri(uniform)

    def log_weight(self, point: np.ndarray) -> float:
        """ln of likelihood x prior / proposal."""
        log_prior = self.prior.log_density(point)
        if not np.isfinite(log_prior):
            return _IMPOSSIBLE
        deviates = np.einsum("kij,kj->ki", self.inverse, point - self.means)
        terms = self.log_scale - 0.5 * (deviates**2).sum(axis=1)
        proposal = np.logaddexp.reduce([np.log(_PRIOR_SHARE) + log_prior, *terms])
        square = point[len(self.free) :]
        self.values[self.free] = point[: len(self.free)]
        self.values[self.squares] = np.copysign(np.sqrt(np.abs(square)), square)
        fits = log_likelihood(self.problem, self.scene, self.values, self.scale2)
        return fits + log_prior - float(proposal)


def log_likelihood(problem: Problem, scene, values: np.ndarray, scale2: float) -> float:
    """-chi-square / 2 of a scene, for errors whose squares are `scale2` times as large."""
    predicted, _ = model(scene, values, problem.sampling)
    white = problem.covariance.whiten(problem.residual(predicted))
    return -0.5 * float(white @ white) / scale2


def draw(
    target: Target, count: int, rng: np.random.Generator, progress: Silent
) -> tuple[np.ndarray, np.ndarray]:
    """`count` independent points of the proposal, (count, p), and ln of their weights."""
    cube = rng.random((count, len(target.prior.names) + 1))
    points, log_weight = np.empty((count, len(target.prior.names))), np.empty(count)
    with progress.task("weighing", count) as tick:
        for k in range(count):
            points[k] = target.place(cube[k])
            log_weight[k] = target.log_weight(points[k])
            tick()
    return points, log_weight


def explore(
    target: Target, live_points: int, rng: np.random.Generator, progress: Silent
) -> tuple[np.ndarray, np.ndarray, int]:
    """Points (n, p) of a nested run, ln of their weights, and the number of calls."""
    import dynesty

    def transform(cube: np.ndarray) -> np.ndarray:
        return np.concatenate([cube[:1], target.place(cube)])

    sampler = dynesty.NestedSampler(
        lambda parameters: target.log_weight(parameters[1:]),
        transform,
        len(target.prior.names) + 1,
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


def _root(covariance: np.ndarray, spread: np.ndarray) -> np.ndarray:
    """Cholesky factor of a covariance, made no wider than the prior in any parameter."""
    size = np.sqrt(np.diag(covariance))
    cut = np.minimum(1.0, spread / np.maximum(size, 1e-300))
    scaled = covariance * np.outer(cut, cut)
    ridge = 1e-10 * np.diag(np.diag(scaled))
    return np.linalg.cholesky(scaled + ridge)
