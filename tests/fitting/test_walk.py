"""The compiled walk and the normal deviate."""

import numpy as np
from made_binaries import binary, seen
from scipy.special import ndtri
from scipy.stats import ks_2samp

from orbits import Model, Priors
from orbits.fitting.data import make_data
from orbits.fitting.deviate import deviate
from orbits.fitting.target import Target
from orbits.fitting.walk import EXCHANGES, take_steps


def test_normal_deviate():
    """scipy's, to a few units in the last place (or 1e-15 where it is small), out to 1e-300."""
    uniform = np.concatenate([np.geomspace(1e-300, 1e-3, 500), np.linspace(0.001, 0.999, 999)])
    uniform = np.concatenate([uniform, 1 - np.geomspace(1e-15, 1e-3, 100)])
    found = np.array([deviate(u) for u in uniform])
    expected = ndtri(uniform)
    assert (np.abs(found - expected) <= 4 * np.spacing(np.maximum(np.abs(expected), 1.0))).all()


def test_a_walk_leaves_the_distribution_alone():
    """Points that are even above a likelihood stay so: Kolmogorov-Smirnov, p > 1e-4.

    Of wrong steps, those that forget that a turn closes or lean to one side fail it.
    """
    rng = np.random.default_rng(3)
    positions = seen(binary(), 4, rng, error=8.0)
    priors = Priors(period=(50.0, 200.0), semimajor_axis=(10.0, 40.0), eccentricity=(0.0, 0.9))
    target = Target.prior(make_data(positions, None, None, priors, Model()))
    cube = rng.uniform(size=(100_000, 8))
    value = target.place(cube)[1]
    least = np.quantile(value, 0.9)
    start = cube[value > least][:4000]
    end, moved = start.copy(), 0
    for u in end:
        steps = 0.07 * rng.normal(size=(30, 8))
        exchange = rng.uniform(size=30) < EXCHANGES
        pairs = start[rng.integers(len(start), size=(2, 30))]
        steps[exchange] = (pairs[0] - pairs[1])[exchange]
        before = u.copy()
        *_, last = take_steps(u, steps, exchange, target.turns, least, target.problem)
        moved += (u != before).any()
        assert last > least
    assert moved > 3000
    assert (target.place(end)[1] > least).all()
    other = cube[value > least][len(start) // 2 :]
    for k in range(1, 8):
        assert ks_2samp(end[:, k], other[:, k]).pvalue > 1e-4
