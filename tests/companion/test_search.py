"""The search of an epoch: published data, symmetries, and companions put in on purpose."""

import json
from dataclasses import replace

import astropy.units as u
import numpy as np
import pytest
from numpy.testing import assert_allclose
from skies import epoch, fill, four_stations, offset_in_sigma, with_all_observables

from orbits.binary import Scene
from orbits.companion.covariance import ErrorModel
from orbits.companion.search import Stars, choose_grid, search
from orbits.errors import InputError
from orbits.observation import Observable

ROUGHLY = 4.5
"""Errors: a fair result is farther off once in 1e5 cases; the seeds here are fixed."""


def test_binary_of_the_2008_imaging_contest(outside):
    """Truth of Cotton et al. 2008, SPIE 7013: 5.0 mas, PA 30 deg, 8.9 to 1, 1.2 and 0.75 mas.

    The models' field was tapered, which changes contrast and diameters by several per cent.
    """
    from orbits.oifits import read

    observation = read(outside / "contest-2008-binary.oifits")
    result = search(observation)
    best = result.best
    assert_allclose(best.separation_mas, 5.0, atol=0.02)
    assert_allclose(best.position_angle_deg, 30.0, atol=0.1)
    assert 0.09 < best.contrast < 0.13
    assert_allclose(best.primary_diameter_mas, 1.2, rtol=0.03)
    assert best.false_alarm_probability < 1e-9
    assert json.loads(json.dumps(result.to_json(), allow_nan=False))["n_t3"] == 800


@pytest.mark.parametrize("contrast", [0.004, 0.03, 0.2, 0.6, 0.95])
@pytest.mark.parametrize("diameter", [0.0, 1.0, 3.6])
def test_companions_of_any_brightness_are_found(contrast, diameter, rng):
    """Primaries from a point to one with nulls among the data (1.22 lambda / B = 3.6 mas)."""
    blank = four_stations(exposures=4, channels=8)
    truth = {"x": -14.3, "y": 9.1, "contrast": contrast, "primary_diameter": diameter}
    result = search(fill(blank, rng, **truth), noise_searches=0)
    places = [result.best, *result.alternatives]
    hit = min(places, key=lambda one: offset_in_sigma(one, -14.3, 9.1))
    assert offset_in_sigma(hit, -14.3, 9.1) < ROUGHLY
    assert abs(hit.contrast - contrast) < ROUGHLY * hit.contrast_error + 1e-9
    assert hit.delta_chi2 > 0.9 * result.best.delta_chi2


@pytest.mark.parametrize(("contrast", "diameter"), [(0.45, 0.0), (0.45, 1.0), (0.02, 0.4)])
def test_contrast_is_right_whatever_the_companion_diameter(contrast, diameter, rng):
    """Beside a primary of 1.2 mas: no bias, and errors as stated, from a point to as large a disc.

    Over 25 epochs the mean of misses over errors lies within 3.5 standard errors, 0.7, of 0, and
    the root of their mean square within 3.5 standard errors, 1 / sqrt(50), of 1.
    """
    blank, misses = four_stations(exposures=2, channels=4), []
    truth = {"x": -4.3, "y": 3.1, "contrast": contrast, "primary_diameter": 1.2}
    for _ in range(25):
        observation = fill(blank, rng, **truth, diameter=diameter)
        best = search(observation, field=8 * u.mas, noise_searches=0).best
        misses.append((best.contrast - contrast) / best.contrast_error)
    assert abs(np.mean(misses)) < 3.5 / np.sqrt(25)
    assert_allclose(np.sqrt(np.mean(np.square(misses))), 1, atol=3.5 / np.sqrt(50))


def test_squared_visibility_alone_leaves_two_positions(rng):
    """They are equally good, and neither is dropped."""
    observation = fill(four_stations(exposures=3, channels=4), rng, x=6.0, y=11.0, contrast=0.2)
    result = search(replace(observation, t3=Observable.empty(2)), noise_searches=0)
    twin = min(
        result.alternatives,
        key=lambda one: np.hypot(one.x_mas + result.best.x_mas, one.y_mas + result.best.y_mas),
    )
    assert_allclose([twin.x_mas, twin.y_mas], [-result.best.x_mas, -result.best.y_mas], atol=1e-3)
    assert_allclose(twin.chi2, result.best.chi2, rtol=1e-6)
    assert_allclose(twin.weight, result.best.weight, rtol=1e-2)


def test_equal_pair_leaves_two_positions(rng):
    observation = fill(four_stations(exposures=3, channels=4), rng, x=6.0, y=11.0, contrast=1.0)
    result = search(observation, noise_searches=0)
    angles = [result.best.position_angle_deg, result.alternatives[0].position_angle_deg]
    assert_allclose(abs(angles[0] - angles[1]), 180, atol=0.5)
    assert result.best.contrast <= 1


def test_second_companion(rng):
    truth = {"x": -14.3, "y": 9.1, "contrast": 0.2, "x_2": 20.0, "y_2": 3.0, "contrast_2": 0.02}
    observation = fill(four_stations(exposures=4, channels=8), rng, Scene(companions=2), **truth)
    result = search(observation, companions=2, noise_searches=100)
    assert offset_in_sigma(result.best, 20.0, 3.0) < ROUGHLY
    assert result.best.false_alarm_probability < 1e-3
    # The first companion is fitted again together with the second.
    assert_allclose(result.best.fit.value("contrast"), 0.2, atol=0.003)
    assert offset_in_sigma(result.previous.best, -14.3, 9.1) < 20


def test_correlated_errors_are_taken_into_account(rng):
    """Chi-square comes out near its degrees of freedom only with the covariance of the noise."""
    errors = ErrorModel(shared_baselines=True, v2_calibration=0.05, t3_calibration=0.02)
    blank = four_stations(exposures=3, channels=6)
    observation = fill(blank, rng, errors=errors, x=-14.3, y=9.1, contrast=0.1)
    known = search(observation, errors=errors, noise_searches=0).best
    spread = np.sqrt(2 * known.dof)
    assert abs(known.chi2 - known.dof) < 4 * spread
    assert offset_in_sigma(known, -14.3, 9.1) < ROUGHLY
    ignored = search(observation, noise_searches=0).best
    assert ignored.chi2 - ignored.dof > 10 * spread


def test_priors_and_fixed_parameters(rng):
    observation = fill(
        four_stations(exposures=3, channels=6), rng,
        x=-14.3, y=9.1, contrast=0.1, primary_diameter=1.5, background=0.1,
    )  # fmt: skip
    free = search(observation, stars=Stars(free=("background",)), noise_searches=0).best
    assert abs(free.fit.value("background") - 0.1) < ROUGHLY * free.fit.error("background")
    tight = Stars(priors={"background": (0.3, 1e-6)})
    held = search(observation, stars=tight, noise_searches=0).best
    assert_allclose(held.fit.value("background"), 0.3, atol=1e-4)
    fixed = search(observation, diameter=1.2 * u.mas, noise_searches=0).best
    assert fixed.primary_diameter_mas == 1.2
    assert fixed.primary_diameter_error_mas == 0


def test_fibre_dims_what_is_off_its_axis(rng):
    """The contrast of the star itself comes out, not what the fibre lets through (41 per cent)."""
    scene = Scene(fibre_fwhm=30.0)
    blank = four_stations(exposures=3, channels=6)
    observation = fill(blank, rng, scene, x=-14.3, y=9.1, contrast=0.2)
    best = search(observation, stars=Stars(fibre_fwhm=30.0), noise_searches=0).best
    assert abs(best.contrast - 0.2) < ROUGHLY * best.contrast_error
    through = np.exp(-4 * np.log(2) * (14.3**2 + 9.1**2) / 30**2)
    plain = search(observation, noise_searches=0).best
    assert abs(plain.contrast - 0.2 * through) < ROUGHLY * plain.contrast_error


def _second_half_with_another(table):
    late = table.mjd > 60000.05
    other = replace(table.channels, instrument=np.ones(len(table.channels), dtype=int))
    second = replace(table.select(late), channels=other)
    return Observable.concatenate([table.select(~late), second])


def test_each_instrument_has_its_contrast(rng):
    """Half of the exposures in another band, where the companion is 1.5 times as bright."""
    first = four_stations(exposures=4, channels=6)
    blank = replace(
        first,
        instruments=("ONE", "TWO"),
        v2=_second_half_with_another(first.v2),
        t3=_second_half_with_another(first.t3),
    )
    truth = {"x": -14.3, "y": 9.1, "contrast": 0.1, "ratio_1": 0.5}
    observation = fill(blank, rng, Scene(instruments=2), **truth)
    stars = Stars(contrast_per_instrument=True)
    best = search(observation, stars=stars, noise_searches=0).best
    assert abs(best.contrast - 0.1) < ROUGHLY * best.contrast_error
    assert abs(best.fit.value("ratio_1") - 0.5) < ROUGHLY * best.fit.error("ratio_1")


def test_amplitudes_add_to_what_is_known(rng):
    """Five kinds of data: the errors shrink and the solution stays."""
    truth = {"x": -14.3, "y": 9.1, "contrast": 0.1, "primary_diameter": 1.5}
    blank = four_stations(exposures=3, channels=6)
    two = search(fill(blank, rng, **truth), noise_searches=0).best
    five = search(fill(with_all_observables(blank), rng, **truth), noise_searches=100)
    # Of the phases of each baseline in an exposure, a mean and a slope are not measured.
    phases = len(blank.v2) - 2 * len(blank.v2.exposures)
    assert five.best.dof == two.dof + len(blank.v2) + len(blank.t3) + phases
    assert offset_in_sigma(five.best, -14.3, 9.1) < ROUGHLY
    assert five.best.false_alarm_probability < 1e-9
    # The visibility amplitude repeats V2 at the same error: sqrt 2 is the best it could do.
    ratio = five.best.contrast_error / two.contrast_error
    assert 0.5 < ratio < 0.95


def test_field_and_step_follow_from_the_data():
    """The step is at most lambda / (4 B): a quarter of the finest fringe."""
    observation = four_stations(exposures=2, channels=3)
    finest = (observation.v2.wavelength / observation.v2.baselines).min() * u.rad.to(u.mas)
    assert_allclose(choose_grid(observation).step, finest / 4)
    assert choose_grid(observation, 50 * u.mas, 100 * u.mas).step <= finest / 4
    grid = choose_grid(observation, 50 * u.mas, 0.1 * u.mas)
    assert_allclose([grid.half * grid.step, grid.step], [50, 0.1])


def test_no_data_and_wrong_arguments_are_refused():
    with pytest.raises(InputError, match="no usable squared visibility or closure phase"):
        search(epoch())
    with pytest.raises(InputError, match="3 independent data are too few to fit 4 parameters"):
        search(epoch(v2_legs=[(10, 0), (0, 20)], t3_legs=[[(10, 0), (0, 20)]]))
    observation = four_stations()
    with pytest.raises(ValueError, match="field must be positive"):
        search(observation, field=-1 * u.mas)
    with pytest.raises(ValueError, match="companions must be 1 or 2"):
        search(observation, companions=3)
    with pytest.raises(ValueError, match="both fixed and free"):
        search(observation, stars=Stars(fixed={"slope": 1.0}, free=("slope",)))
