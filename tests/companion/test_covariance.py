"""Covariances against dense algebra and against the textbook matrix of closure phases."""

from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import sparse
from skies import epoch, four_stations

from orbits.companion.covariance import Covariance, ErrorModel
from orbits.errors import InputError
from orbits.sampling import Sampling


def random_covariance(rng, n=30):
    """Blocks of 1, 2, 3, ... correlated data in shuffled order, with three common errors."""
    factor = np.zeros((n, n))
    start = 0
    for size in (1, 2, 3, 4, 5, 1, 2, 3, 4, 5):
        block = rng.standard_normal((size, 2 * size))
        factor[start : start + size, start : start + size] = block @ block.T
        start += size
    order = rng.permutation(n)
    s = factor[np.ix_(order, order)]
    sigma = np.sqrt(np.diag(s))
    common = rng.standard_normal((n, 3))
    built = Covariance.build(sigma, sparse.csr_array(s / np.outer(sigma, sigma)), common)
    return built, s + common @ common.T


def test_whitening_is_a_root_of_the_inverse(rng):
    built, dense = random_covariance(rng)
    assert_allclose(built.dense, dense, atol=1e-12)
    inverse = np.linalg.inv(dense)
    x = rng.standard_normal((30, 4))
    # Condition numbers here reach 1e4, so inverses agree to about 1e-12 of their largest element.
    tolerance = 1e-10 * abs(inverse).max()
    assert_allclose(built.whiten(x).T @ built.whiten(x), x.T @ inverse @ x, atol=tolerance * 30)
    assert_allclose(built.back(built.whiten(x)), inverse @ x, atol=tolerance * 10)
    plain = (built.whitener.T @ built.whitener).toarray()
    assert_allclose(plain - built.removed.T @ built.removed, inverse, atol=tolerance)


def test_draws_have_the_covariance(rng):
    """Means of products over 20000 draws, each uncertain by sqrt(2 / 20000) of its scale."""
    built, dense = random_covariance(rng)
    draws = np.array([built.draw(rng) for _ in range(20000)])
    scale = np.sqrt(np.outer(np.diag(dense), np.diag(dense)))
    assert abs((draws.T @ draws / 20000 - dense) / scale).max() < 5 * np.sqrt(2 / 20000)


def test_closure_phases_of_four_stations():
    """Triangles 123, 124, 134, 234: correlations of +-1/3 and rank 3 (Monnier 2003)."""
    observation = four_stations()
    covariance = Covariance.of(
        observation, Sampling.of(observation, radius=0), ErrorModel(shared_baselines=True)
    )
    t3 = covariance.dense[6:, 6:] / observation.t3.error[0] ** 2
    signs = {(0, 1): 1, (0, 2): -1, (0, 3): 1, (1, 2): 1, (1, 3): -1, (2, 3): 1}
    expected = np.eye(4)
    for (i, j), sign in signs.items():
        expected[i, j] = expected[j, i] = sign / 3
    assert_allclose(t3, expected, atol=1e-14)
    assert covariance.rank == 6 + 3


@pytest.mark.parametrize(("stations", "independent"), [(3, 1), (4, 3), (5, 6), (6, 10), (7, 15)])
def test_number_of_independent_closure_phases(stations, independent):
    """(N - 1)(N - 2) / 2, in each channel of each exposure."""
    observation = four_stations(stations=stations, exposures=2, channels=3)
    covariance = Covariance.of(
        observation, Sampling.of(observation, radius=0), ErrorModel(shared_baselines=True)
    )
    assert covariance.rank == len(observation.v2) + 6 * independent


def test_calibration_error_is_common_to_a_baseline_through_the_night():
    observation = four_stations(exposures=2, channels=2)
    observation.v2.value[:] = 0.5
    errors = ErrorModel(v2_calibration=0.1, t3_calibration=0.01)
    covariance = Covariance.of(observation, Sampling.of(observation, radius=0), errors).dense
    n = len(observation.v2)
    same = (observation.v2.stations[:, None] == observation.v2.stations).all(axis=2)
    expected = 0.05**2 * same + np.diag(observation.v2.error**2)
    assert_allclose(covariance[:n, :n], expected, atol=1e-16)
    same = (observation.t3.stations[:, None] == observation.t3.stations).all(axis=2)
    expected = 0.01**2 * same + np.diag(observation.t3.error**2)
    assert_allclose(covariance[n:, n:], expected, atol=1e-16)


def test_listed_correlations_are_used_or_ignored():
    listed = sparse.csr_array([[1, 0.8], [0.8, 1]])
    observation = replace(epoch(v2_legs=[(10, 0), (20, 0)], error=0.1), correlation=listed)
    sampling = Sampling.of(observation, radius=0)
    assert_allclose(Covariance.of(observation, sampling).dense, 0.01 * listed.toarray())
    ignored = Covariance.of(observation, sampling, ErrorModel(correlated=False))
    assert_allclose(ignored.dense, 0.01 * np.eye(2))


def test_impossible_correlations_are_refused():
    wrong = sparse.csr_array([[1, 0.9, -0.9], [0.9, 1, 0.9], [-0.9, 0.9, 1]])
    with pytest.raises(InputError, match="negative eigenvalues"):
        Covariance.build(np.ones(3), wrong, name="star")
