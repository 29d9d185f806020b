"""The exact fit: efficient, honest about its errors, and steady in corners."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from skies import fill, four_stations

from orbits.binary import Scene, model
from orbits.companion.covariance import Covariance, ErrorModel
from orbits.companion.fit import Problem, fit
from orbits.sampling import Sampling

TRUTH = {"primary_diameter": 1.8, "x": -14.3, "y": 9.1, "contrast": 0.05}
CORRELATED = ErrorModel(shared_baselines=True, v2_calibration=0.03, t3_calibration=0.01)
EPOCHS = 400


def problem_of(observation, errors=None, v2=None):
    sampling = Sampling.of(observation, radius=40.0)
    return Problem.of(observation, sampling, Covariance.of(observation, sampling, errors, v2))


@pytest.mark.parametrize("errors", [ErrorModel(), CORRELATED])
def test_errors_reach_the_cramer_rao_bound_and_are_the_stated_ones(errors, rng):
    """Root-mean-square errors within 4 standard errors (1 / sqrt(800)) of the bound.

    The bound is the inverse of J^T C^-1 J at the truth, with a dense matrix. One-sigma intervals
    hold the truth in 68.3 per cent, within 4 binomial errors of 2.3 per cent.
    """
    blank, scene = four_stations(exposures=2, channels=4), Scene(companion_shape="point")
    truth = scene.vector(TRUTH)
    names = ("primary_diameter", "x", "y", "contrast")
    free = tuple(scene.names.index(name) for name in names)
    clean = fill(blank, None, scene, **TRUTH)
    problem = problem_of(clean, errors)
    _, jacobian = model(scene, truth, problem.sampling, free)
    inverse = np.linalg.pinv(problem.covariance.dense, rcond=1e-10, hermitian=True)
    bound = np.sqrt(np.diag(np.linalg.inv(jacobian.T @ inverse @ jacobian)))
    miss, stated, chi2 = [], [], []
    for _ in range(EPOCHS):
        noisy = fill(blank, rng, scene, errors=errors, **TRUTH)
        one = fit(problem_of(noisy, errors, clean.v2.value), scene, truth, free)
        miss.append((one.values - truth)[list(free)])
        stated.append([one.error(name) for name in names])
        chi2.append(one.chi2)
    rms = np.sqrt(np.mean(np.square(miss), axis=0)) / bound
    assert_allclose(rms, 1, atol=4 / np.sqrt(2 * EPOCHS))
    inside = (np.abs(miss) < stated).mean(axis=0)
    assert_allclose(inside, 0.683, atol=4 * np.sqrt(0.683 * 0.317 / EPOCHS))
    # The mean chi-square is the number of degrees of freedom, within 4 standard errors.
    assert_allclose(np.mean(chi2), one.dof, atol=4 * np.sqrt(2 * one.dof / EPOCHS))


def test_prior_counts_as_one_more_datum(rng):
    """Against the Bayes rule for Gaussians: information adds, the mean is weighted by it."""
    scene = Scene(companion_shape="point")
    problem = problem_of(fill(four_stations(exposures=2, channels=4), rng, scene, **TRUTH))
    index = scene.names.index("primary_diameter")
    alone = fit(problem, scene, scene.vector(TRUTH), (index,))
    mean, sigma = alone.value("primary_diameter") + 0.01, alone.error("primary_diameter")
    both = fit(problem, scene, scene.vector(TRUTH), (index,), {index: (mean, sigma)})
    assert both.dof == alone.dof + 1
    # The model is straight over the 0.01 mas between the two to about 1 per cent.
    assert_allclose(both.value("primary_diameter"), mean - 0.005, atol=2e-4)
    assert_allclose(both.error("primary_diameter"), sigma / np.sqrt(2), rtol=0.02)


def test_parameter_without_effect_gets_no_small_error(rng):
    """A diameter of 0 has no slope: its error is no number that one could take for small."""
    scene = Scene()
    problem = problem_of(fill(four_stations(), rng, scene, **TRUTH))
    names = ("x", "y", "contrast", "diameter")
    free = tuple(scene.names.index(name) for name in names)
    one = fit(problem, scene, scene.vector(TRUTH), free)
    assert one.error("diameter") > 1e3
    assert np.isfinite(one.chi2)


def test_closure_phases_are_compared_modulo_a_turn():
    observation = fill(four_stations(), None, **TRUTH)
    problem = problem_of(observation)
    turned = problem.data.copy()
    turned[problem.closure_phases] += 2 * np.pi * np.arange(-2, 2)
    assert_allclose(problem.residual(turned), 0, atol=1e-14)
