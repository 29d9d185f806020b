"""Limits of bright companions, against closed forms and against exact fits."""

import astropy.units as u
import numpy as np
import pytest
from numpy.testing import assert_allclose
from skies import fill, four_stations

from orbits.binary import Scene
from orbits.companion.covariance import ErrorModel
from orbits.companion.exclusion import profile_limit
from orbits.companion.fit import fit
from orbits.companion.night import NightSearch
from orbits.companion.saturation import saturation, unsaturated
from orbits.companion.search import choose_grid
from orbits.companion.stack import Stack
from orbits.companion.stars import Stars

PLACES = ((9, -7), (-14, 4), (3, 12), (5, 5))
"""Steps to the North and to the East."""


def prepared(observation, diameter=None):
    """The night, and indices of `PLACES`."""
    grid = choose_grid(observation, 20 * u.mas)
    search = NightSearch(grid=grid, diameter=diameter, stars=Stars(), errors=ErrorModel())
    index = [(grid.half + north) * grid.side + grid.half + east for north, east in PLACES]
    return search.night(observation), np.array(index)


@pytest.mark.parametrize("linear", [0.02, 0.1, 0.2])
def test_squared_visibilities_of_two_points_answer_as_contrast_over_squared_flux(linear):
    """V2 - 1 = 2 f (cos(phase) - 1) / (1 + f)^2: f / (1 + f)^2 of a faint companion's.

    The tolerance is that of the smearing in maps, of which there is none here, and of two rounds,
    each of which leaves a tenth of the error before.
    """
    blank = four_stations(exposures=3, channels=4)
    alone = blank.select(t3=np.zeros(len(blank.t3), dtype=bool))
    night, place = prepared(fill(alone), 0 * u.mas)
    limits = np.full(len(place), linear)
    contrast = unsaturated(limits, saturation(Stack([night.field]), place, limits))
    assert_allclose(contrast / (1 + contrast) ** 2, linear, rtol=0.01)


def test_exact_chi_square_grows_as_stated_at_the_limit():
    """Without noise, of poor data, of a star whose diameter is known.

    Where it is fitted, what it can imitate of a companion is right to first order only.
    """
    blank = four_stations(exposures=2, channels=2)
    blank.v2.error[:], blank.t3.error[:] = 0.6, 0.8
    observation = fill(blank, primary_diameter=1.0)
    night, place = prepared(observation, 1 * u.mas)
    stack = Stack([night.field])
    linear = profile_limit(stack.signal.ravel()[place], stack.sensitivity.ravel()[place], 0.9973)
    contrast = unsaturated(linear, saturation(stack, place, linear, whole=True))
    assert (contrast > 0.1).all()
    for (north, east), first, f in zip(PLACES, linear, contrast, strict=True):
        # 2.7822: the one-sided deviate of 99.73 per cent. The rounds leave a thousandth.
        assert_allclose(exact(night, north, east, f), 2.7822**2, rtol=1e-3)
        assert exact(night, north, east, first) < 0.8 * 2.7822**2


def exact(night, north, east, contrast):
    """Chi-square of a companion of fixed contrast; there is no noise."""
    step = night.field.grid.step
    scene = Scene()
    start = scene.vector(
        {"x": east * step, "y": north * step, "contrast": contrast, "primary_diameter": 1.0}
    )
    return fit(night.epoch.problem(40.0), scene, start, ()).chi2


def test_faint_limits_stay_and_hopeless_ones_are_none():
    night, place = prepared(fill(four_stations(exposures=3, channels=4), primary_diameter=1.0))
    faint = np.full(len(place), 1e-3)
    assert (saturation(Stack([night.field]), place, faint) == 0).all()
    assert np.isinf(unsaturated(np.array([0.5, np.inf]), np.array([2.0, 0.0]))).all()
