"""The search of a standard epoch against the plain evaluation of its grid, in the same run.

Standard epoch: 4 stations, 200 channels, 3 exposures (3600 V2, 2400 closure phases), 513 x 513
positions over +-100 mas. The plain evaluation visits one position after another with NumPy; its
time is that of every 64th position, times 64.
"""

import resource
import time
from dataclasses import replace
from functools import wraps
from unittest.mock import patch

import astropy.units as u
import finufft
import numpy as np

from orbits.binary import Scene, predict
from orbits.companion.covariance import Covariance
from orbits.companion.fit import Problem, fit
from orbits.companion.grid import Grid
from orbits.companion.maps import Field
from orbits.companion.search import search
from orbits.constants import MAS
from orbits.observation import Observation
from orbits.sampling import Sampling
from orbits.simulation.array import Array
from orbits.simulation.nights import Spectrum, blank_night

from . import best_time, row

POSITIONS = Grid(256, 100.0 / 256)
EVERY = 64
STAR = {"primary_diameter": 1.0}


def run() -> None:
    """Print speed ratios, memory, and how the cost grows."""
    observation = standard_epoch(channels=200, exposures=3)
    field = prepare(observation, POSITIONS)
    plain = time_plain(field)
    maps = best_time(lambda: two_maps(field))
    baseline = "one plain evaluation of the grid"
    row("plain evaluation, over maps of contrast, error and gain", plain / maps, "the maps")
    row("the maps", 1 / share_of_transforms(field), "the transforms within them")
    lit = with_companion(observation)
    start = time.perf_counter()
    found = search(lit, field=100 * u.mas, noise_searches=0)
    alone = time.perf_counter() - start
    start = time.perf_counter()
    faint = search(observation, field=100 * u.mas, noise_searches=1000)
    whole = time.perf_counter() - start
    if len(faint.false_alarms.maxima) != 1000:
        raise RuntimeError("the noise searches stopped early")
    row("search with exact fits, bright companion, no noise searches", alone / plain, baseline)
    row("search with exact fits and 1000 noise searches", whole / plain, baseline)
    miss = abs(found.best.separation_mas - np.hypot(31.0, 17.0))
    row("its error of separation", miss / found.best.separation_error_mas, "the stated error")
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    row("peak memory of the process so far", peak / 500, "500 MiB")
    growth()


def growth() -> None:
    """Time of the maps for four sizes, over that of the smallest."""
    first = None
    for channels, half in ((70, 128), (278, 256), (1112, 512), (4448, 1024)):
        exposures = 2
        observation = standard_epoch(channels=channels, exposures=exposures)
        field = prepare(observation, Grid(half, 100.0 / half))
        taken = best_time(lambda field=field: two_maps(field), repeats=2)
        data = len(observation.v2) + len(observation.t3)
        size = data, field.grid.side**2
        first = first or (taken, size)
        grown = size[0] / first[1][0]
        row(f"maps of {size[0]} data on {field.grid.side}^2 positions", taken / first[0],
            f"the smallest (data and grid have grown {grown:.1f} times)")  # fmt: skip


def standard_epoch(*, channels: int, exposures: int) -> Observation:
    """A noisy epoch of a star of 1 mas."""
    array = Array(
        name="FOUR", latitude=-24.6, longitude=-70.4, stations=("A", "B", "C", "D"),
        local=np.array([[0, 0, 0], [48, 22, 0], [-35, 81, 0], [66, 103, 0]], float),
        diameter=1.8,
    )  # fmt: skip
    blank = blank_night(
        array, Spectrum.even("K", 2.0e-6, 2.4e-6, channels), target="standard", ra=0.0, dec=-30.0,
        mjd=60000.3 + np.arange(exposures) / 24,
    )  # fmt: skip
    return noisy(blank, STAR)


def with_companion(observation: Observation) -> Observation:
    """The epoch with a companion of 5 per cent at (31, 17) mas."""
    return noisy(observation, {**STAR, "x": 31.0, "y": 17.0, "contrast": 0.05})


def noisy(blank: Observation, values: dict[str, float]) -> Observation:
    rng = np.random.default_rng(1)
    v2, t3 = predict(blank, **values)
    tables = []
    for table, value, error in ((blank.v2, v2, 0.02), (blank.t3, t3, np.radians(1.0))):
        noise = error * rng.standard_normal(len(value))
        tables.append(replace(table, value=value + noise, error=np.full(len(value), error)))
    return replace(blank, v2=tables[0], t3=tables[1])


def prepare(observation: Observation, grid: Grid) -> Field:
    """The field of a faint companion about the star, its diameter profiled."""
    sampling = Sampling.of(observation, radius=0.0)
    covariance = Covariance.of(observation, sampling)
    star = Scene(companions=0)
    problem = Problem.of(observation, sampling, covariance)
    null = fit(problem, star, star.vector(STAR), (0,))
    return Field(observation, covariance, null, grid)


def two_maps(field: Field) -> None:
    """All maps anew: D, which an epoch needs once, and N."""
    field.__dict__.pop("sensitivity", None)
    field.faint()


def time_plain(field: Field) -> float:
    """Seconds for N and D at all positions, one by one."""
    s = field.sampling
    weight = field.covariance.whitener.diagonal() ** 2
    residual = field.covariance.shaper @ field.residual
    own = field.visibility[:, 0].real
    v2_u, v2_v, v2_own = s.u[s.v2, 0, 0], s.v[s.v2, 0, 0], own[s.v2]
    sense = np.where(s.turned, -1.0, 1.0)
    t3_u, t3_v = s.u[s.t3, 0, 0] * sense, s.v[s.t3, 0, 0] * sense
    t3_own = own[s.t3]
    rows, columns = np.divmod(np.arange(0, field.grid.side**2, EVERY), field.grid.side)
    axis = field.grid.axis
    n, d = np.empty(len(rows)), np.empty(len(rows))
    start = time.perf_counter()
    for k, (i, j) in enumerate(zip(rows, columns, strict=True)):
        x, y = 2 * np.pi * MAS * axis[j], 2 * np.pi * MAS * axis[i]
        signature = np.concatenate(
            [
                2 * v2_own * (np.cos(v2_u * x + v2_v * y) - v2_own),
                -(np.sin(t3_u * x + t3_v * y) / t3_own).sum(axis=1),
            ]
        )
        weighted = weight * signature
        n[k], d[k] = weighted @ residual, weighted @ signature
    return (time.perf_counter() - start) * EVERY


def share_of_transforms(field: Field) -> float:
    """Part of the time of the maps that passes inside the transforms; the median of seven runs."""
    inside = [0.0]

    def timed(work):
        @wraps(work)
        def wrapper(*arguments, **options):
            start = time.perf_counter()
            result = work(*arguments, **options)
            inside[0] += time.perf_counter() - start
            return result

        return wrapper

    shares = []
    for _ in range(7):
        inside[0] = 0.0
        with (
            patch.object(finufft.Plan, "setpts", timed(finufft.Plan.setpts)),
            patch.object(finufft.Plan, "execute", timed(finufft.Plan.execute)),
            patch.object(finufft.Plan, "__init__", timed(finufft.Plan.__init__)),
        ):
            start = time.perf_counter()
            two_maps(field)
            shares.append(inside[0] / (time.perf_counter() - start))
    return float(np.median(shares))
