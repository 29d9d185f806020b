"""Nested sampling (Skilling 2006, Bayesian Anal. 1, 833) of the repartitioned problem."""

from dataclasses import dataclass

import numpy as np

from ..progress import SILENT, Silent
from .proposal import Target

IMPOSSIBLE = -1e300
"""ln likelihood where the prior is 0, as dynesty wants it."""
WALK_BELOW = 4.0
"""Acceptance, per cent, below which a walk within ellipsoids finds new points sooner."""
WALK, LONG_WALK = 30, 100
"""Steps of a walk; long where no normal densities lead to a posterior that is narrow and bent."""
REMAINDER = 0.5
"""The run ends when the live points can add no more than this to ln of the evidence."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Run:
    """Weighted points and the evidence of a finished run."""

    points: np.ndarray
    """(n, d)"""
    log_weight: np.ndarray
    """(n,) ln of the posterior weight; the weights sum to 1."""
    log_evidence: float
    log_evidence_error: float
    calls: int
    """Number of likelihood evaluations."""

    @property
    def effective_samples(self) -> float:
        """(sum w)^2 / sum w^2 (Kish 1965)."""
        weight = np.exp(self.log_weight)
        return float(weight.sum() ** 2 / np.square(weight).sum())


def sample(
    target: Target,
    *,
    live_points: int,
    rng: np.random.Generator,
    progress: Silent = SILENT,
) -> Run:
    """Run dynesty on `target` until the evidence is complete.

    While the live points fill more than a few hundredths of the proposal, new ones are drawn from
    all of it; after that they walk within ellipsoids around the live ones.
    """
    import dynesty

    dimensions = target.data.space.dimensions + 1

    def transform(cube: np.ndarray) -> np.ndarray:
        return np.concatenate([cube[:1], target.place(cube[None])[0]])

    def log_weight(parameters: np.ndarray) -> float:
        value = target.log_weight(parameters[None, 1:])[0]
        return float(value) if np.isfinite(value) else IMPOSSIBLE

    sampler = dynesty.NestedSampler(
        log_weight,
        transform,
        dimensions,
        nlive=live_points,
        bound="multi",
        sample="rwalk",
        walks=WALK if len(target.proposal) else LONG_WALK,
        rstate=rng,
        first_update={"min_ncall": 2 * live_points, "min_eff": WALK_BELOW},
    )
    with progress.task("nested sampling") as step:
        for count, _ in enumerate(sampler.sample(dlogz=REMAINDER, save_bounds=False)):
            if count % 100 == 0:
                step(100)
        for _ in sampler.add_live_points():
            pass
    results = sampler.results
    return Run(
        points=results.samples[:, 1:],
        log_weight=results.logwt - results.logz[-1],
        log_evidence=float(results.logz[-1]),
        log_evidence_error=_evidence_error(results, live_points),
        calls=int(np.sum(results.ncall)),
    )


def _evidence_error(results, live_points: int) -> float:
    """Standard error of ln Z: sqrt(H / n) with H the information gained over the proposal.

    Where the proposal is almost the posterior, the estimate of H is lost in its noise; half the
    relative variance of the weights, which H then equals, is the floor.
    """
    log_posterior = results.logwt - results.logz[-1]
    information = float(results.information[-1])
    excess = np.exp(log_posterior) @ np.exp(results.logl - results.logz[-1]) - 1
    return float(np.sqrt(max(information, min(excess, 1.0) / 2, 1e-4) / live_points))
