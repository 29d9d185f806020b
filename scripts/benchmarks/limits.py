"""A full detection limit against one least-squares fit for each injection, in the same run.

Standard epoch: 4 stations, 200 channels, 3 exposures (3600 V2, 2400 closure phases), 129 x 129
places, of each the contrasts at which 200 noise realisations show a companion; that is what 20
contrasts with 200 injections each would sample. The fits start at the truth, which no search does,
and their time is that of a sample, times the number of injections.
"""

import time

import astropy.units as u
import numpy as np

from orbits.binary import Scene
from orbits.companion.covariance import Covariance
from orbits.companion.fit import Problem, fit
from orbits.companion.injection import Companion, inject
from orbits.companion.limits import limits
from orbits.companion.search import choose_grid
from orbits.sampling import Sampling

from . import row
from .search import STAR, standard_epoch

PLACES, CONTRASTS, REALISATIONS = 129, 20, 200
SAMPLE = 10


def run() -> None:
    """Print ratios of times."""
    observation = standard_epoch(channels=200, exposures=3)
    small = standard_epoch(channels=2, exposures=1)
    limits(small, field=10 * u.mas, positions=9, injections=20, noise_searches=100)  # compiles
    field = (PLACES // 2) * choose_grid(observation).step * u.mas
    start = time.perf_counter()
    result = limits(observation, field=field, positions=PLACES, injections=REALISATIONS)
    taken = time.perf_counter() - start
    injections = result.axis.size**2 * CONTRASTS * REALISATIONS
    one = np.mean([time_fit(observation, result, seed) for seed in range(SAMPLE)])
    row("one fit for each injection, extrapolated", injections * one / taken, "the full limit")
    row(f"the full limit of {result.axis.size} x {result.axis.size} places", taken / 60, "60 s")


def time_fit(observation, result, seed: int) -> float:
    """Seconds to fit one companion put into the data."""
    rng = np.random.default_rng(seed)
    x, y = rng.uniform(-result.field, result.field, 2)
    contrast = float(np.median(result.maps["recovered"]))
    lit = inject(observation, Companion(x=x, y=y, contrast=contrast, **STAR))
    sampling = Sampling.of(lit, radius=1.5 * result.field)
    problem = Problem.of(lit, sampling, Covariance.of(lit, sampling))
    scene = Scene()
    start = scene.vector({"x": x, "y": y, "contrast": contrast, **STAR})
    free = tuple(scene.names.index(name) for name in ("primary_diameter", "x", "y", "contrast"))
    began = time.perf_counter()
    fit(problem, scene, start, free)
    return time.perf_counter() - began
