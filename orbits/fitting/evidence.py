"""A second estimate of the evidence, from plain draws of a proposal."""

import math
from dataclasses import dataclass

import numpy as np

from .target import IMPOSSIBLE, Target

DISAGREE = 4.0
"""Standard errors beyond which two estimates of the evidence cannot both be right."""
AT_ONCE = 2_000


@dataclass(frozen=True, kw_only=True)
class Estimate:
    """ln evidence, its standard error, and how well the proposal suits the posterior."""

    value: float
    error: float
    efficiency: float
    """(sum w)^2 / (n sum w^2): the share of the draws that independent samples would be.

    The median over groups of draws, since the rare draw of great weight would rule a mean.
    """


def importance(target: Target, rng: np.random.Generator, count: int) -> Estimate:
    """The evidence by importance sampling; from few draws of large weight it comes out too low."""
    parts = [target.draw(AT_ONCE, rng)[1] for _ in range(count // AT_ONCE)]
    log_weight = np.array(parts)
    most = log_weight.max()
    if most <= IMPOSSIBLE:
        return Estimate(value=-1e300, error=1e300, efficiency=0.0)
    weight = np.exp(log_weight - most)
    mean, groups = weight.mean(), np.square(weight).mean(axis=1)
    efficiency = np.where(groups > 0, weight.mean(axis=1) ** 2 / np.maximum(groups, 1e-300), 0.0)
    return Estimate(
        value=float(most + np.log(mean)),
        error=float(weight.std() / mean / np.sqrt(weight.size)),
        efficiency=float(np.median(efficiency)),
    )


def exceeds(one: Estimate, other: Estimate) -> bool:
    """Whether one way of sampling finds more evidence than the other, beyond their errors."""
    return one.value - other.value > DISAGREE * math.hypot(one.error, other.error)


def disagreement(one: Estimate, other: Estimate) -> list[str]:
    """A sentence where two ways of sampling find different ln of the evidence."""
    if not exceeds(one, other) and not exceeds(other, one):
        return []
    return [
        f"Nested sampling found ln evidence {one.value:.2f} +- {one.error:.2f}, a second way "
        f"{other.value:.2f} +- {other.error:.2f}: weights of solutions and odds are no surer than "
        "that; more live points help."
    ]
