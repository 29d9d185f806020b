"""Bootstrap errors against the scatter of many epochs and against known blocks."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from skies import fill, four_stations

from orbits.companion.bootstrap import independent_blocks
from orbits.companion.covariance import Covariance, ErrorModel
from orbits.companion.search import search
from orbits.errors import InputError
from orbits.sampling import Sampling

TRUTH = {"x": 9.0, "y": -4.0, "contrast": 0.1, "primary_diameter": 1.0}


def test_blocks_are_what_is_independent():
    observation = four_stations(exposures=3, channels=4)
    sampling = Sampling.of(observation, radius=0.0)

    def blocks(**errors):
        covariance = Covariance.of(observation, sampling, ErrorModel(**errors))
        return independent_blocks(observation, covariance)

    observation.v2.value[:] = 1.0
    # 6 baselines and 4 triangles in each of 3 exposures, all channels of a row together.
    assert blocks().max() + 1 == 30
    # The triangles of an exposure hang together through their baselines.
    assert blocks(shared_baselines=True).max() + 1 == 18 + 3
    # A calibration error joins the exposures of a baseline.
    assert blocks(v2_calibration=0.1).max() + 1 == 6 + 12


def test_errors_agree_with_the_stated_ones_for_independent_noise(rng):
    """40 blocks and 200 resamplings know a standard error to about 1 / sqrt(80) + 1 / sqrt(400)."""
    observation = fill(four_stations(exposures=4, channels=6), rng, **TRUTH)
    result = search(observation, noise_searches=0, resamplings=200, rng=rng)
    assert result.bootstrap.blocks == 40
    stated = np.sqrt(np.diag(result.best.covariance_xy_mas2))
    found = np.sqrt(np.diag(result.bootstrap.covariance_xy_mas2))
    assert_allclose(found / stated, 1, atol=0.5)
    assert_allclose(result.bootstrap.contrast_error / result.best.contrast_error, 1, atol=0.5)
    assert result.to_json()["best"]["bootstrap"]["samples"] == 200


def test_errors_grow_with_noise_that_a_row_shares(rng):
    """An error common to the channels of a row, unknown to the fit, shows in the bootstrap."""
    blank = fill(four_stations(exposures=4, channels=12), None, **TRUTH)
    shift = 0.03 * rng.standard_normal(blank.v2.row.max() + 1)
    observation = fill(blank, rng, **TRUTH)
    observation.v2.value[:] += shift[observation.v2.row]
    result = search(observation, noise_searches=0, resamplings=200, rng=rng)
    unscaled = result.best.contrast_error / result.best.error_scale
    assert result.bootstrap.contrast_error > 1.3 * unscaled


def test_too_few_blocks_are_refused(rng):
    observation = fill(four_stations(stations=3, channels=12), rng, **TRUTH)
    with pytest.raises(InputError, match="only 4 independent blocks"):
        search(observation, noise_searches=0, resamplings=10)
