"""The normal deviate of a uniform number, compiled."""

import math

from ..compiled import compiled

ROOT_2, ROOT_2PI = math.sqrt(2.0), math.sqrt(2.0 * math.pi)
ROUNDS = 2
"""Each takes the relative error of the probability to its third power; the start has 1e-3."""


@compiled
def deviate(uniform):
    """The number that a standard normal one falls below with probability `uniform`.

    A rational start (Hastings 1955; Abramowitz & Stegun 1964, 26.2.23) and Halley's method.
    """
    if not 0.0 < uniform < 1.0:
        return -math.inf if uniform <= 0.0 else math.inf
    tail = min(uniform, 1.0 - uniform)
    t = math.sqrt(-2.0 * math.log(tail))
    z = t - (2.515517 + t * (0.802853 + t * 0.010328)) / (
        1.0 + t * (1.432788 + t * (0.189269 + t * 0.001308))
    )
    for _ in range(ROUNDS):  # on the side where the probability keeps its digits
        error = (tail - 0.5 * math.erfc(z / ROOT_2)) * ROOT_2PI * math.exp(0.5 * z * z)
        z -= error / (1.0 + 0.5 * z * error)
    return -z if uniform < 0.5 else z
