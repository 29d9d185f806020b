"""Runs of nested sampling made one, with the evidence and an error that the runs themselves show.

Several runs of fewer live points, each with random numbers of its own, make one of many live points
when their points are put in order of likelihood (Higson, Handley, Hobson & Lasenby 2018, Bayesian
Anal. 13, 873). They can run at the same time, and how far they differ tells how well they did.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from .evidence import Estimate
from .nested import Part

DIFFER = 0.1
"""Of Kish's number: fewer independent samples than this do not come by chance. The scatter of eight
runs is known to a factor, which of five features is below 0.15 in one of 10,000 fits."""
PRIOR_RUNS = 4
"""Runs whose scatter the theory counts for beside the scatter found."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Run:
    """Weighted points and the evidence."""

    points: np.ndarray
    """(n, d)"""
    log_weight: np.ndarray
    """(n,) ln of the posterior weight; the weights sum to 1."""
    log_evidence: float
    log_evidence_error: float
    calls: int
    """Number of likelihood evaluations."""
    independent: np.ndarray
    """(m,) how many independent samples would leave the means of the features as uncertain as the
    scatter of the runs says they are."""

    @property
    def estimate(self) -> Estimate:
        """The evidence."""
        return Estimate(value=self.log_evidence, error=self.log_evidence_error, efficiency=math.nan)

    @property
    def kish(self) -> float:
        """(sum w)^2 / sum w^2 (Kish 1965)."""
        weight = np.exp(self.log_weight)
        return float(weight.sum() ** 2 / np.square(weight).sum())

    @property
    def differ(self) -> np.ndarray:
        """(m,) bool: the features about which the runs differ more than their samples may."""
        return self.independent < DIFFER * self.kish

    @property
    def effective_samples(self) -> float:
        """Kish's number, or where the runs differ what their scatter makes of it."""
        return float(self.independent.min()) if self.differ.any() else self.kish


def merge(parts: Sequence[Part], features: Callable[[np.ndarray], np.ndarray]) -> Run:
    """One run of all the live points of the parts.

    `features` takes points (n, d) to the numbers (n, m) about which the runs should agree.
    """
    points, value, log_weight, log_evidence = _in_order(parts)
    return Run(
        points=points,
        log_weight=log_weight,
        log_evidence=log_evidence,
        log_evidence_error=_error(parts, value, log_weight, log_evidence),
        calls=sum(part.calls for part in parts),
        independent=independent_samples(parts, features),
    )


def independent_samples(
    parts: Sequence[Part], features: Callable[[np.ndarray], np.ndarray]
) -> np.ndarray:
    """(m,) how many independent samples would leave the means of `features` as uncertain.

    The uncertainty is the scatter of the means of the runs, so a run that stayed in a part of the
    posterior shows, of which Kish's number knows nothing.
    """
    means, variances = [], []
    for part in parts:
        points, _, log_weight, _ = _in_order([part])
        weight, values = np.exp(log_weight), features(points)
        means.append(weight @ values)
        variances.append(weight @ np.square(values - means[-1]))
    between = np.var(means, axis=0, ddof=1)
    total = np.mean(variances, axis=0) + between
    return len(parts) * total / np.maximum(between, 1e-300)


def _in_order(parts):
    """Points by rising value, values, ln of their posterior weights, and ln evidence."""
    value = np.concatenate([part.value for part in parts])
    order = np.argsort(value, kind="stable")
    value = value[order]
    log_weight = value + log_widths(value, np.concatenate([part.birth for part in parts]))
    most = log_weight.max()
    log_evidence = float(most + np.log(np.exp(log_weight - most).sum()))
    points = np.concatenate([part.points for part in parts])[order]
    return points, value, log_weight - log_evidence, log_evidence


def log_widths(value: np.ndarray, birth: np.ndarray) -> np.ndarray:
    """(n,) ln of the share of the proposal that each point stands for.

    `value` rises; `birth` holds the values above which the points were drawn, in any order. When a
    point is given up, as many are alive as were born below it, less those given up before; of n of
    them the one with the least value is expected to take 1 / (n + 1) of the volume with it.
    """
    live = np.searchsorted(np.sort(birth), value, side="left") - np.arange(len(value))
    log_volume = np.cumsum(np.log(live / (live + 1.0)))
    volume = np.exp(np.concatenate([[0.0], log_volume]))
    # Half the shell below a point and half the one above; the outer halves go to the ends.
    edges = np.concatenate([volume[:1], (volume[1:-1] + volume[2:]) / 2, [0.0]])
    return np.log(edges[:-1] - edges[1:])


def _error(parts, value, log_weight, log_evidence) -> float:
    """Standard error of ln Z, from theory and from the scatter of the runs.

    Theory says sqrt(H / n) for n live points, H being the information gained over the proposal.
    Where the proposal is almost the posterior, the estimate of H is lost in its noise; half the
    relative variance of the weights, which H then equals, is the floor. The scatter of the runs
    comes by the jackknife; the larger counts, since few runs may agree by chance.
    """
    weight, gain = np.exp(log_weight), value - log_evidence
    count = sum(part.live_points for part in parts)
    excess = weight @ np.exp(gain) - 1
    theory = max(float(weight @ gain), min(float(excess), 1.0) / 2, 1e-4) / count
    runs = len(parts)
    if runs < 2:
        return math.sqrt(theory)
    without = [_in_order([*parts[:k], *parts[k + 1 :]])[3] for k in range(runs)]
    scatter = (runs - 1) * float(np.var(without))
    both = (PRIOR_RUNS * theory + (runs - 1) * scatter) / (PRIOR_RUNS + runs - 1)
    return math.sqrt(max(theory, both))
