"""The problem as seen from a proposal: where uniform numbers lead, and what a point weighs."""

from typing import NamedTuple

import numpy as np

from ..compiled import compiled
from .data import Data
from .likelihood import Tables, log_likelihood
from .linear import linear_ratio, place_linear, scales_of
from .proposal import (
    WIDTHS,
    Mixture,
    Proposal,
    log_terms,
    log_total,
    mixture_of,
    mixture_ratio,
    place_in_mixture,
)
from .space import Region, allowed

IMPOSSIBLE = -1e200
"""ln weight where the prior is 0, for nested sampling, which wants numbers."""


class Problem(NamedTuple):
    """A target as the compiled functions read it."""

    tables: Tables
    region: Region
    mixture: Mixture
    scales: np.ndarray
    """(K,) of the linear proposal; empty where the mixture is the proposal."""


class Target:
    """Data and a proposal: a mixture, or with `linear` the prior but for the constants."""

    def __init__(self, data: Data, proposal: Proposal, *, linear: bool = False) -> None:
        self.data, self.proposal, self.linear = data, proposal, linear
        self.problem = Problem(
            tables=data.tables,
            region=data.space.region,
            mixture=mixture_of(proposal, data.space),
            scales=scales_of(data) if linear else np.empty(0),
        )

    @classmethod
    def prior(cls, data: Data, *, linear: bool = False) -> "Target":
        """The target of plain nested sampling, or of the linear proposal."""
        return cls(data, Proposal.prior(data.space.dimensions), linear=linear)

    @property
    def confined(self) -> bool:
        """Whether normal densities lead to the posterior."""
        return len(self.proposal) > 0

    @property
    def turns(self) -> np.ndarray:
        """(d + 1,) bool: uniform numbers whose ends 0 and 1 stand for the same point."""
        space = self.data.space
        angles = {"h_y"} if self.linear else {"h_y", "longitude"}
        if space.has_velocities:
            angles.add("node")
        return np.array([False, *(not self.confined and name in angles for name in space.names)])

    def draw(self, count: int, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
        """(count, d) points drawn from the proposal, and what they weigh (count,).

        The weight is ln(likelihood * prior / proposal). Where the prior is 0, it is IMPOSSIBLE or
        less; the point may be NaN, off the chart that it was drawn in.
        """
        return self.place(rng.uniform(size=(count, self.data.space.dimensions + 1)))

    def place(self, cube: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """The same from (S, d + 1) uniform numbers, the first choosing the component."""
        points, out = np.empty((cube.shape[0], cube.shape[1] - 1)), np.empty(len(cube))
        first_above(np.inf, cube, points, out, self.problem)
        return points, out

    def log_likelihood(self, points: np.ndarray) -> np.ndarray:
        """(S,) ln of the likelihood and further knowledge; -inf where the prior is 0."""
        out = np.empty(len(points))
        _log_likelihoods(points, self.problem, out)
        return out

    def responsibilities(self, points: np.ndarray):
        """Each component's share (S, J) of the proposal at allowed points.

        Returns the shares, the mean 1 / width^2 (S, J) of each component, and the points (S, J, d)
        in the component's chart, less its mean.
        """
        count, size = self.proposal.mean.shape
        share, inverse_square = np.empty((len(points), count)), np.empty((len(points), count))
        offsets = np.empty((len(points), count, size))
        _responsibilities(points, self.problem, share, inverse_square, offsets)
        return share, inverse_square, offsets


# Each compiled function that Python calls takes seconds to compile, with all that it calls in turn:
# hence few of them, and loops where the assignment of arrays would bring in messages of errors.


@compiled
def value_of(cube, problem, point):
    """ln weight of the point that d + 1 uniform numbers stand for, written to `point` (d,).

    Where the prior is 0, it is a number far below all others; by the first of the uniform numbers
    no two of these are alike, lest there be a plateau in nested sampling.
    """
    tables, region = problem.tables, problem.region
    linear = problem.scales.size > 0
    if linear:
        place_linear(cube, problem.scales, tables, region, point)
    else:
        place_in_mixture(cube, problem.mixture, region, point)
    value = IMPOSSIBLE
    if allowed(point, region):
        value = log_likelihood(point, tables)
        if linear:
            value -= linear_ratio(point, problem.scales, tables, region)
        else:
            value -= mixture_ratio(point, problem.mixture, region)
    return value if value > IMPOSSIBLE else IMPOSSIBLE * (1 + cube[0])


@compiled
def first_above(least, cube, points, out, problem):
    """Write points and weights of uniform numbers (S, d + 1) until a weight exceeds `least`.

    Returns the row of that one, or their number if there is none.
    """
    for s in range(cube.shape[0]):
        out[s] = value_of(cube[s], problem, points[s])
        if out[s] > least:
            return s
    return cube.shape[0]


@compiled
def _log_likelihoods(points, problem, out):
    for s in range(points.shape[0]):
        good = allowed(points[s], problem.region)
        out[s] = log_likelihood(points[s], problem.tables) if good else -np.inf


@compiled
def _responsibilities(points, problem, share, inverse_square, places):
    mixture = problem.mixture
    terms = np.empty((mixture.means.shape[0], 2))
    for s in range(points.shape[0]):
        log_terms(points[s], mixture, problem.region, places[s], terms)
        total = log_total(mixture.prior_weight, terms)
        for j in range(mixture.means.shape[0]):
            narrow, wide = np.exp(terms[j, 0] - total), np.exp(terms[j, 1] - total)
            share[s, j] = narrow + wide
            both = max(narrow + wide, 1e-300)
            inverse_square[s, j] = (narrow / WIDTHS[0] ** 2 + wide / WIDTHS[1] ** 2) / both
