"""The proposal: a mixture of the prior and of normal densities around the solutions.

Posterior repartitioning (Chen, Hobson, Das & Gelderblom 2019, Stat. Comput. 29, 835) samples from
a proposal q and multiplies the likelihood by prior / q: evidence and posterior stay exactly those
of the prior, whatever q is, and the closer q comes to the posterior the shorter the run. Since q
holds a share of the prior itself, the product is bounded wherever the likelihood is. Each normal
density also comes with twice its width, for the tails.

All densities here are relative to the prior: ln rho = ln(q / prior).
"""

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from ..compiled import compiled
from .deviate import deviate
from .laplace import Normal
from .space import Space, from_chart, from_prior, to_chart

PRIOR_SHARE = 0.1
"""Weight of the prior in the mixture."""
WIDTHS = np.array([1.0, 2.0])
WIDTH_SHARES = np.array([0.8, 0.2])


@dataclass(frozen=True, eq=False, kw_only=True)
class Proposal:
    """Weights, centres and shapes of the normal densities; the prior has the remaining weight."""

    weight: np.ndarray
    """(J,) summing to 1 - PRIOR_SHARE, or empty where the prior is all."""
    chart: np.ndarray
    """(J,) int"""
    mean: np.ndarray
    """(J, d)"""
    covariance: np.ndarray
    """(J, d, d)"""
    solution: np.ndarray
    """(J,) int: the solution each belongs to."""

    @property
    def prior_weight(self) -> float:
        """Weight of the prior."""
        return 1.0 - float(self.weight.sum())

    @classmethod
    def prior(cls, dimensions: int) -> "Proposal":
        """Nothing but the prior: plain nested sampling."""
        return cls.around([], dimensions)

    @classmethod
    def around(cls, solutions: list[Normal], dimensions: int) -> "Proposal":
        """The mixture of `solutions`, weighted by their evidence but none below a thousandth."""
        log_weight = np.array([s.log_weight for s in solutions])
        weight = np.maximum(np.exp(log_weight - log_weight.max(initial=-np.inf)), 1e-3)
        return cls(
            weight=(1 - PRIOR_SHARE) * weight / weight.sum(),
            chart=np.array([s.chart for s in solutions], dtype=np.int64),
            mean=np.array([s.mean for s in solutions]).reshape(-1, dimensions),
            covariance=np.array([s.covariance for s in solutions]).reshape(
                -1, dimensions, dimensions
            ),
            solution=np.arange(len(solutions)),
        )

    def __len__(self) -> int:
        return len(self.weight)


class Mixture(NamedTuple):
    """A proposal as the compiled functions read it."""

    prior_weight: float
    edges: np.ndarray
    """(J,) cumulative weights."""
    offsets: np.ndarray
    """(J,) ln(weight * density at the centre / prior)."""
    charts: np.ndarray
    means: np.ndarray
    roots: np.ndarray
    """(J, d, d) lower triangular roots of the covariances, and their inverses."""
    inverses: np.ndarray
    periodic: np.ndarray
    """(charts, d) bool."""


def mixture_of(proposal: Proposal, space: Space) -> Mixture:
    """The same for compiled functions, which are compiled anew for arrays of another layout."""
    roots = np.linalg.cholesky(proposal.covariance)
    log_determinants = 2 * np.log(np.einsum("jii->ji", roots)).sum(axis=1)
    return Mixture(
        prior_weight=proposal.prior_weight,
        edges=np.cumsum(proposal.weight),
        offsets=np.log(proposal.weight)
        - 0.5 * (log_determinants + space.dimensions * math.log(2 * math.pi))
        - np.array([space.log_density(int(chart)) for chart in proposal.chart]),
        charts=np.ascontiguousarray(proposal.chart),
        means=np.ascontiguousarray(proposal.mean),
        roots=np.ascontiguousarray(roots),
        inverses=np.ascontiguousarray(np.linalg.inv(roots)),
        periodic=np.array([space.periodic(chart) for chart in range(3)]),
    )


@compiled
def place_in_mixture(cube, mixture, region, point):
    """Write the draw (d,) that d + 1 uniform numbers stand for; NaN off the chart.

    The first number chooses the component, the prior where it falls to none.
    """
    size, first = point.size, cube[0]
    j = np.searchsorted(mixture.edges, first, side="right")
    if j >= mixture.edges.size:
        from_prior(cube[1:], region, point)
        return
    # The place within the component's interval chooses between its two widths.
    start = mixture.edges[j - 1] if j else 0.0
    part = (first - start) / (mixture.edges[j] - start)
    width = WIDTHS[0] if part < WIDTH_SHARES[0] else WIDTHS[1]
    chart = mixture.charts[j]
    deviates, coordinates = np.empty(size), np.empty(size)
    for a in range(size):
        deviates[a] = width * deviate(cube[a + 1])
        offset = 0.0
        for b in range(a + 1):
            offset += mixture.roots[j, a, b] * deviates[b]
        if mixture.periodic[chart, a] and abs(offset) > math.pi:
            point[:] = math.nan
            return
        coordinates[a] = mixture.means[j, a] + offset
    from_chart(coordinates, chart, region.columns, point)


@compiled
def log_terms(point, mixture, region, places, terms):
    """Write ln(weight * density / prior) of each component and width (J, 2) at a point.

    `places` (J, d) takes the coordinates of the point in each component's chart, less its mean.
    """
    size = point.size
    prior = 0.0
    for a in range(size):
        if region.normal[a]:
            prior -= 0.5 * point[a] * point[a]
    for j in range(mixture.means.shape[0]):
        chart = mixture.charts[j]
        to_chart(point, chart, region.columns, places[j])
        square = 0.0
        for a in range(size):
            places[j, a] -= mixture.means[j, a]
            if mixture.periodic[chart, a]:
                places[j, a] -= 2 * math.pi * np.rint(places[j, a] / (2 * math.pi))
            value = 0.0
            for b in range(a + 1):
                value += mixture.inverses[j, a, b] * places[j, b]
            square += value * value
        for k in range(2):
            terms[j, k] = (
                mixture.offsets[j] - 0.5 * square / WIDTHS[k] ** 2 - size * math.log(WIDTHS[k])
                + math.log(WIDTH_SHARES[k]) - prior
            )  # fmt: skip


@compiled
def log_total(prior_weight, terms):
    """ln of the proposal's density over the prior's, from its `log_terms`."""
    most = math.log(prior_weight)
    for j in range(terms.shape[0]):
        most = max(most, terms[j, 0], terms[j, 1])
    total = math.exp(math.log(prior_weight) - most)
    for j in range(terms.shape[0]):
        total += math.exp(terms[j, 0] - most) + math.exp(terms[j, 1] - most)
    return most + math.log(total)


@compiled
def mixture_ratio(point, mixture, region):
    """ln of the proposal's density over the prior's at an allowed point."""
    if mixture.means.shape[0] == 0:
        return 0.0
    places, terms = np.empty_like(mixture.means), np.empty((mixture.means.shape[0], 2))
    log_terms(point, mixture, region, places, terms)
    return log_total(mixture.prior_weight, terms)
