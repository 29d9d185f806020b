"""Move a proposal towards the posterior before the nested sampling starts.

Population Monte Carlo (Cappe, Douc, Guillin, Marin & Robert 2008, Stat. Comput. 18, 447):
weighted draws re-estimate weights, means and covariances as in expectation-maximisation. Where
one normal density per solution is not enough, as for the bent posteriors of short arcs, the
densities are split. Whatever comes out, evidence and posterior are not changed by it.
"""

from dataclasses import replace

import numpy as np

from .data import Data
from .proposal import PRIOR_SHARE, Proposal
from .target import IMPOSSIBLE, Target

DRAWS = 3000
ROUNDS = 8
GOOD = 0.65
"""Efficiency at which there is nothing left to gain; the prior's share alone takes a tenth."""
POOR = 0.5
"""Efficiency below which the densities are split."""
SPLITS = 3
PIECES = 4
MOST = 48
"""Components at most."""


def adapt(data: Data, proposal: Proposal, rng: np.random.Generator) -> Proposal:
    """The adapted mixture: the one whose draws had the best efficiency (sum w)^2 / (n sum w^2)."""
    best, efficiency = _converge(data, proposal, rng)
    for _ in range(SPLITS):
        if efficiency > POOR or 2 * len(best.weight) > MOST:
            break
        finer, new = _converge(data, _split(data, best, rng), rng)
        if new > efficiency:
            best, efficiency = finer, new
    return best


def _converge(data, proposal, rng) -> tuple[Proposal, float]:
    best, best_efficiency = proposal, -1.0
    for _ in range(ROUNDS):
        target = Target(data, proposal)
        points, weight, efficiency = _weighted(target, rng)
        if efficiency > best_efficiency:
            best, best_efficiency = proposal, efficiency
        if efficiency > GOOD or len(proposal.weight) == 0:
            break
        proposal = _updated(target, points, weight)
    return best, best_efficiency


def _weighted(target: Target, rng) -> tuple[np.ndarray, np.ndarray, float]:
    """Draws, their weights (tempered where a few of them would carry all), and the efficiency."""
    points, log_weight = target.draw(DRAWS, rng)
    most = log_weight.max()
    if most <= IMPOSSIBLE:
        return points[:0], np.empty(0), 0.0
    log_weight = log_weight - most
    weight = np.exp(log_weight)
    efficiency = float(weight.sum() ** 2 / np.square(weight).sum() / DRAWS)
    if efficiency < 0.01:
        weight = np.exp(_temperature(log_weight, 0.01 * DRAWS) * log_weight)
    keep = weight > 1e-12
    return points[keep], weight[keep] / weight.sum(), efficiency


def _temperature(log_weight: np.ndarray, wanted: float) -> float:
    """The power of the weights at which the effective number of draws is `wanted`."""
    low, high = 0.0, 1.0
    for _ in range(30):
        power = (low + high) / 2
        weight = np.exp(power * log_weight)
        if weight.sum() ** 2 / np.square(weight).sum() < wanted:
            high = power
        else:
            low = power
    return low


def _updated(target: Target, points: np.ndarray, weight: np.ndarray) -> Proposal:
    """The mixture after one step of expectation-maximisation on weighted points."""
    proposal = target.proposal
    count, size = proposal.mean.shape
    if len(points) == 0:
        return proposal
    share, inverse_square, offsets = target.responsibilities(points)
    share *= weight[:, None]
    total = share.sum(axis=0)
    mean, covariance = proposal.mean.copy(), proposal.covariance.copy()
    for j in range(count):
        # Few effective draws say little about a covariance: the old one counts beside them.
        effective = total[j] ** 2 / max(np.square(share[:, j]).sum(), 1e-300)
        if effective < 3:
            continue
        scaled = share[:, j] * inverse_square[:, j]
        shift = scaled @ offsets[:, j] / scaled.sum()
        centred = offsets[:, j] - shift
        found = (scaled[:, None] * centred).T @ centred / total[j]
        trust = effective / (effective + 3 * size)
        mean[j] = proposal.mean[j] + trust * shift
        covariance[j] = trust * found + (1 - trust) * proposal.covariance[j]
    alive = np.maximum(total, 1e-4)
    return replace(
        proposal, weight=(1 - PRIOR_SHARE) * alive / alive.sum(), mean=mean, covariance=covariance
    )


def _split(data: Data, proposal: Proposal, rng) -> Proposal:
    """Each component that carries posterior becomes several, centred on weighted draws of it."""
    target = Target(data, proposal)
    points, weight, _ = _weighted(target, rng)
    if len(points) == 0:
        return proposal
    share, _, offsets = target.responsibilities(points)
    share *= weight[:, None]
    total = share.sum(axis=0)
    rows, centres, shrink = [], [], []
    for j in np.argsort(total)[::-1]:
        pieces = PIECES if total[j] > 0.02 and len(rows) + PIECES <= MOST else 1
        for _ in range(pieces):
            rows.append(j)
            chosen = rng.choice(len(points), p=share[:, j] / total[j]) if pieces > 1 else None
            centres.append(proposal.mean[j] + (0 if chosen is None else offsets[chosen, j]))
            shrink.append(0.5 if pieces > 1 else 1.0)
    rows = np.array(rows)
    weight = proposal.weight[rows] / np.bincount(rows, minlength=len(total))[rows]
    return replace(
        proposal,
        weight=weight * (1 - PRIOR_SHARE) / weight.sum(),
        chart=proposal.chart[rows],
        mean=np.array(centres),
        covariance=proposal.covariance[rows] * np.array(shrink)[:, None, None],
        solution=proposal.solution[rows],
    )
