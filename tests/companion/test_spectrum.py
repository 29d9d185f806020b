"""The contrast spectrum against the slope that was put in, and its covariance against scatter."""

from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.stats import chi2, norm
from skies import fill, four_stations

from orbits.binary import Scene, model
from orbits.cli.spectrum import describe
from orbits.companion.covariance import Covariance, ErrorModel
from orbits.companion.search import search
from orbits.companion.spectrum import ContrastSpectrum, spectrum
from orbits.errors import InputError
from orbits.sampling import Sampling

SCENE = Scene(reference=1.65e-6)
TRUTH = {"x": -14.3, "y": 9.1, "contrast": 0.03, "slope": 3.0, "primary_diameter": 1.2}


RESOLVED = {
    "x": -14.3, "y": 9.1, "contrast": 0.4, "slope": 1.0, "diameter": 0.9, "primary_diameter": 1.2,
}  # fmt: skip
"""Its diameter is as uncertain as its contrasts are, and taken for known it would spoil them."""


@pytest.mark.parametrize("truth", [TRUTH, RESOLVED])
def test_slope_is_recovered_with_the_stated_covariance(truth, rng):
    """Chi-square of all trials together, about the truth, with the covariance between channels."""
    blank = four_stations(exposures=3, channels=6)
    best = search(fill(blank, rng, SCENE, **truth), noise_searches=0).best
    total, trials = 0.0, 25
    for _ in range(trials):
        got = spectrum(fill(blank, rng, SCENE, **truth), best)
        miss = got.contrast - truth["contrast"] * (got.wavelength / 1.65e-6) ** truth["slope"]
        total += got.error_scale**2 * miss @ np.linalg.solve(got.covariance, miss)
    low, high = chi2.ppf([1e-4, 1 - 1e-4], 6 * trials)
    assert low < total < high


def test_errors_are_the_fisher_matrix_of_one_contrast_each(rng):
    """Against derivatives taken channel by channel by cutting the Jacobian of a common contrast."""
    blank = four_stations(exposures=3, channels=4)
    flat = {**TRUTH, "slope": 0.0}
    observation = fill(blank, rng, **flat)
    best = search(observation, noise_searches=0).best
    got = spectrum(observation, best, fix_place=True)
    sampling = Sampling.of(observation, radius=30.0)
    scene = Scene()
    free = [scene.names.index(name) for name in ("primary_diameter", "contrast")]
    jacobian = model(scene, scene.vector(flat), sampling, free)[1]
    channel = np.concatenate([observation.v2.channel, observation.t3.channel])
    columns = [jacobian[:, 0], *(jacobian[:, 1] * (channel == k) for k in range(4))]
    white = Covariance.of(observation, sampling).whiten(np.column_stack(columns))
    fisher = np.linalg.inv(white.T @ white)[1:, 1:]
    # The fit stands at its estimates, a few per cent from the truth.
    assert_allclose(np.diag(got.covariance) / got.error_scale**2, np.diag(fisher), rtol=0.1)
    correlation = got.covariance / np.outer(got.error, got.error)
    size = np.sqrt(np.diag(fisher))
    assert_allclose(correlation, fisher / np.outer(size, size), atol=0.03)


def test_fitting_the_place_only_adds_to_the_errors(rng):
    observation = fill(four_stations(exposures=3, channels=4), rng, SCENE, **TRUTH)
    best = search(observation, noise_searches=0).best
    free, fixed = spectrum(observation, best), spectrum(observation, best, fix_place=True)
    assert fixed.place_fixed
    assert (fixed.x_mas, fixed.y_mas) == (best.x_mas, best.y_mas)
    # The two fits stand at places that differ by their errors: slopes there by a few per cent.
    assert (free.error / free.error_scale >= 0.95 * fixed.error / fixed.error_scale).all()
    assert free.dof == fixed.dof - 2


def test_bins_hold_adjoining_channels(rng):
    observation = fill(four_stations(exposures=3, channels=6), rng, SCENE, **TRUTH)
    best = search(observation, noise_searches=0).best
    got = spectrum(observation, best, bins=2)
    waves = np.unique(observation.v2.wavelength)
    assert_allclose(got.wavelength, [waves[:3].mean(), waves[3:].mean()])
    table = got.table()
    assert table["covariance"].shape == (2, 2)
    with pytest.raises(InputError, match="cannot be put into 7 bins"):
        spectrum(observation, best, bins=7)


def test_common_calibration_errors_tie_the_channels_together(rng):
    """A calibration error of all channels moves all contrasts alike: positive correlations."""
    blank = four_stations(exposures=3, channels=4)
    blank.v2.value[:] = 1.0
    errors = ErrorModel(v2_calibration=0.05)
    flat = {**TRUTH, "slope": 0.0, "primary_diameter": 0.0}
    alone = replace(blank, t3=blank.t3.select(np.zeros(len(blank.t3), dtype=bool)))
    observation = fill(alone, rng, errors=errors, **flat)
    best = search(observation, errors=errors, noise_searches=0).best
    tied = spectrum(observation, best, errors=errors, fix_place=True)
    free = spectrum(observation, best, fix_place=True)
    mean = [one.covariance.mean() / np.diag(one.covariance).mean() for one in (tied, free)]
    assert mean[0] > mean[1]


def of_contrasts(contrast, covariance):
    size = len(contrast)
    return ContrastSpectrum(
        target="Harrow 9", instrument=np.array(["TEST"] * size), wavelength=np.linspace(1, 2, size),
        width=np.ones(size), contrast=np.asarray(contrast), covariance=np.asarray(covariance),
        error_scale=1.0, x_mas=1.0, y_mas=2.0, place_fixed=False, primary_diameter_mas=1.0,
        chi2=1.0, dof=1,
    )  # fmt: skip


def test_constant_contrast_is_judged_by_the_differences_between_channels(rng):
    """Chi-square about the best constant is that of neighbours' differences, D C D^T."""
    contrast = 0.03 + 0.004 * rng.standard_normal(6)
    root = rng.standard_normal((6, 6))
    covariance = 1e-5 * (root @ root.T / 6 + np.full((6, 6), 3.0))
    flat = of_contrasts(contrast, covariance).flatness
    difference = np.diff(np.eye(6), axis=0)
    step = difference @ contrast
    own = difference @ covariance @ difference.T
    assert_allclose(flat.chi2, step @ np.linalg.solve(own, step), rtol=1e-8)
    assert flat.dof == 5
    nearby = [flat.contrast + shift for shift in (-1e-4, 0.0, 1e-4)]
    sums = [(contrast - c) @ np.linalg.solve(covariance, contrast - c) for c in nearby]
    assert np.argmin(sums) == 1


def test_slope_of_two_channels_is_no_more_than_their_difference():
    """Two channels 1.5 of the error of their difference apart: the two-sided normal tail.

    That error is sqrt(2 (1 - rho)) of that of one, since an error in common shows no slope.
    """
    rho, sigma = 0.8, 0.002
    apart = 1.5 * sigma * np.sqrt(2 * (1 - rho))
    covariance = sigma**2 * np.array([[1.0, rho], [rho, 1.0]])
    two = of_contrasts([0.03, 0.03 + apart], covariance)
    assert_allclose(two.flatness.probability, 2 * norm.sf(1.5), rtol=1e-9)
    assert "chi-square 2.2 for 1 degree of freedom (p = 0.13)" in describe(two)


def test_silent_channels_do_not_judge_a_constant():
    heard = of_contrasts([0.03, 0.05, 0.04], np.diag([1e-6, 1e-6, 1e9]))
    assert heard.flatness.dof == 1
    assert_allclose(heard.flatness.chi2, 0.02**2 / 2e-6)
    alone = of_contrasts([0.03, 0.05], np.diag([1e-6, 1e9]))
    assert alone.flatness is None
    assert "constant" not in describe(alone)
