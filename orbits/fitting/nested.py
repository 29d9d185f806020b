"""Nested sampling (Skilling 2006, Bayesian Anal. 1, 833) of the repartitioned problem."""

from dataclasses import dataclass

import numpy as np

from .target import Target, value_of

WALK_BELOW = 1.0
"""Acceptance, per cent, below which a walk within ellipsoids finds new points sooner."""
WALK, LONG_WALK = 30, 200
"""Steps of a walk; long where no normal densities lead to a posterior that is narrow and bent."""
REMAINDER = 0.5
"""The run ends when the live points can add no more than this to ln of the evidence."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Part:
    """The points of one run, in the order in which they were given up."""

    points: np.ndarray
    """(n, d)"""
    value: np.ndarray
    """(n,) ln likelihood of the repartitioned problem."""
    birth: np.ndarray
    """(n,) the value above which each was drawn."""
    live_points: int
    calls: int
    """Number of likelihood evaluations."""


def sample(
    target: Target,
    *,
    live_points: int,
    rng: np.random.Generator,
) -> Part:
    """Run dynesty on `target` until the evidence is complete.

    While the live points fill more than a few hundredths of the proposal, new ones are drawn from
    all of it; after that they walk within ellipsoids around the live ones.
    """
    import dynesty

    from .walk import Everywhere, Walk

    dimensions = target.data.space.dimensions + 1

    # dynesty takes values from the points: the uniform numbers themselves are the points here.
    def value(cube: np.ndarray) -> float:
        return value_of(cube, target.problem, np.empty(dimensions - 1))

    walk = Walk(walks=WALK if target.confined else LONG_WALK, ndim=dimensions, target=target)
    sampler = dynesty.NestedSampler(
        value,
        np.copy,
        dimensions,
        nlive=live_points,
        bound="multi",
        sample=walk,
        rstate=rng,
        first_update={"min_ncall": 2 * live_points, "min_eff": WALK_BELOW},
    )
    sampler.internal_sampler = Everywhere(ndim=dimensions, target=target)
    for _ in sampler.sample(dlogz=REMAINDER, save_bounds=False):
        pass
    for _ in sampler.add_live_points():
        pass
    results = sampler.results
    born = np.concatenate([[-np.inf], results.logl])[results.samples_it]
    return Part(
        points=target.place(results.samples)[0],
        value=results.logl,
        birth=born,
        live_points=live_points,
        calls=int(np.sum(results.ncall)),
    )
