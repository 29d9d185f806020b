"""Equally weighted samples from weighted ones."""

import numpy as np


def effective(weight: np.ndarray) -> float:
    """How many samples of equal weight those of `weight` (n,) are worth (Kish 1965)."""
    return float(weight.sum() ** 2 / np.square(weight).sum())


def systematic(weight: np.ndarray, rng: np.random.Generator) -> np.ndarray:
    """Indices of as many equally weighted samples as the weights (n,) are worth, ascending.

    Systematic resampling: evenly spaced steps from one random start (Kitagawa 1996, J. Comput.
    Graph. Stat. 5, 1).
    """
    count = max(int(effective(weight)), 1)
    steps = (np.arange(count) + rng.random()) / count
    chosen = np.searchsorted(np.cumsum(weight / weight.sum()), steps)
    return np.minimum(chosen, len(weight) - 1)
