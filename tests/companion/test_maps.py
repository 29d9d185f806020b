"""Maps by fast transforms against the same formulas evaluated position by position."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from skies import fill, four_stations, with_all_observables

from orbits.binary import Scene, model
from orbits.companion.covariance import Covariance, ErrorModel
from orbits.companion.fit import Fit, Problem, fit
from orbits.companion.grid import Grid
from orbits.companion.maps import Field, scene_flux
from orbits.companion.response import bright_residual, faint_response
from orbits.constants import MAS
from orbits.observation import OBSERVABLES
from orbits.sampling import Sampling


@pytest.fixture
def observation(rng):
    """Four stations, three exposures, five channels, all observables; a resolved star and noise."""
    blank = with_all_observables(four_stations(exposures=3, channels=5))
    return fill(blank, rng, primary_diameter=1.4)


def prepared(observation, errors=None, *, half=20, step=1.7, bandwidth=None):
    if bandwidth is not None:
        for table in (getattr(observation, name) for name in OBSERVABLES):
            table.channels.bandwidth[:] = bandwidth
    sampling = Sampling.of(observation, radius=0.0)
    covariance = Covariance.of(observation, sampling, errors)
    star = Scene(companions=0)
    problem = Problem.of(observation, sampling, covariance)
    null = fit(problem, star, star.vector({"primary_diameter": 1.3}), (0,))
    return Field(observation, covariance, null, Grid(half, step))


def test_sum_of_waves_is_the_sum(rng):
    """Precision asked of the transform is 1e-7 of the sum of moduli, here about 40 * 1.3."""
    u, v = rng.uniform(-1, 1, (2, 40)) / (8 * MAS)
    c = rng.standard_normal((40, 2)) @ [1, 1j]
    grid = Grid(6, 1.3)
    fast = grid.sum(u, v, c)
    for row, y in enumerate(grid.axis):
        for column, x in enumerate(grid.axis):
            slow = (c * np.exp(-2j * np.pi * MAS * (u * x + v * y))).sum().real
            assert abs(fast[row, column] - slow) < 1e-5
    both = grid.transform(u, v, 2)(np.stack([c, 2j * c, -c]))
    assert_allclose(both[0], fast, atol=1e-5)
    assert_allclose(both[1], grid.sum(u, v, 2j * c), atol=1e-5)
    assert_allclose(both[2], -fast, atol=1e-5)


def pistons(observation):
    """A phase, and one that goes with the wavenumber, for each exposure of a single baseline."""
    table, n = observation.visphi, sum(len(getattr(observation, name)) for name in OBSERVABLES)
    columns = []
    for row in range(len(table.exposures)):
        column = np.zeros(n)
        column[n - len(table) :] = table.row == row
        columns.append(column)
        columns.append(column.copy())
        columns[-1][n - len(table) :] /= table.wavelength * 1e6
    return np.column_stack(columns)


def direct(observation, field, x, y):
    """N, D and gain at single positions, with dense matrices and no transform."""
    s = field.response.at(x, y)
    c = np.linalg.inv(field.covariance.dense)
    g = model(field.null.scene, field.null.values, field.sampling, field.null.free)[1]
    g = np.column_stack([g, pistons(observation)])
    p = c - c @ g @ np.linalg.inv(g.T @ c @ g) @ g.T @ c
    r = field.problem.residual(model(field.null.scene, field.null.values, field.sampling)[0])
    return s @ p @ r, np.einsum("pi,ij,pj->p", s, p, s)


@pytest.mark.parametrize("bandwidth", [0.0, 0.03e-6])
@pytest.mark.parametrize(
    "errors",
    [
        ErrorModel(),
        ErrorModel(v2_calibration=0.05, t3_calibration=0.02),
    ],
)
def test_faint_maps_equal_the_direct_evaluation(observation, rng, errors, bandwidth):
    field = prepared(observation, errors, bandwidth=bandwidth)
    maps, grid = field.faint(), field.grid
    rows, columns = rng.integers(0, grid.side, (2, 60))
    n, d = direct(observation, field, grid.axis[columns], grid.axis[rows])
    assert_allclose(field.sensitivity[rows, columns], d, atol=1e-6 * field.sensitivity.max())
    contrast = np.clip(n / d, 0, 1)
    gain = contrast * (2 * n - contrast * d)
    assert_allclose(maps.gain[rows, columns], gain, atol=1e-6 * maps.gain.max())
    inner = maps.contrast_error[rows, columns] < 10 * np.median(maps.contrast_error)
    assert_allclose(maps.contrast[rows, columns][inner], contrast[inner], rtol=1e-5, atol=1e-7)


def test_response_to_a_faint_companion_is_the_slope_of_the_model(observation):
    """Against the exact model at contrast 1e-6: second order leaves a part of 1e-6 times 100."""
    field = prepared(observation)
    scene, x, y = Scene(companion_shape="point"), 7.3, -4.1
    sampling = Sampling.of(observation, radius=20.0)
    diameter = field.null.values[0]
    base = {"primary_diameter": diameter, "x": x, "y": y}
    lit = model(scene, scene.vector({**base, "contrast": 1e-6}), sampling)[0]
    dark = model(scene, scene.vector(base), sampling)[0]
    rise = (lit - dark) / 1e-6
    slope = field.response.at(np.array([x]), np.array([y]))[0]
    # Closure phases are held back where the primary is nearly resolved out, by (0.02 / V)^2.
    ends = np.cumsum([len(getattr(observation, name)) for name in OBSERVABLES])[:-1]
    pairs = zip(np.split(slope, ends), np.split(rise, ends), strict=True)
    for (got, exact), tolerance in zip(pairs, (1e-4, 0.05, 0.01, 1e-4, 0.05), strict=True):
        assert_allclose(got, exact, rtol=tolerance, atol=tolerance)


@pytest.mark.parametrize("contrast", [0.02, 0.3, 1.0])
def test_bright_residual_is_the_exact_one_for_squared_visibilities(observation, contrast):
    sampling = Sampling.of(observation, radius=0.0)
    star = Scene(companions=0)
    seen, _ = star.visibility(star.vector({"primary_diameter": 1.4}), sampling)
    data = np.concatenate([getattr(observation, name).value for name in OBSERVABLES])
    null = np.linspace(-1, 1, len(data))
    response = bright_residual(sampling, seen, 1.0, ("disc", 0.7), contrast, data, null)
    values = {"primary_diameter": 1.4, "x": 6.0, "y": 2.5, "diameter": 0.7, "contrast": contrast}
    exact = model(Scene(), Scene().vector(values), sampling)[0]
    n = len(observation.v2)
    got = response.at(np.array([6.0]), np.array([2.5]))[0]
    assert_allclose(got[:n], (data - exact)[:n], atol=1e-12)
    # Phases of baselines take no part.
    assert_allclose(got[-n:], null[-n:])


def test_bright_residual_of_closure_phases_is_the_bispectrum_across_the_data(observation):
    """Its sign is that of the residual, and it vanishes where the model meets the data."""
    sampling = Sampling.of(observation, radius=0.0)
    star = Scene(companions=0)
    seen, _ = star.visibility(star.vector({"primary_diameter": 1.0}), sampling)
    values = {"primary_diameter": 1.0, "x": 6.0, "y": 2.5, "contrast": 0.6}
    exact = model(Scene(), Scene().vector(values), sampling)[0]
    n, end = len(observation.v2), len(observation.v2) + len(observation.t3)
    at = np.array([6.0]), np.array([2.5])
    zero = bright_residual(sampling, seen, 1.0, ("point", 0.0), 0.6, exact, 0 * exact).at(*at)[0]
    assert_allclose(zero[n:end], 0, atol=1e-12)
    moved = bright_residual(sampling, seen, 1.0, ("point", 0.0), 0.6, exact + 0.3, 0 * exact).at(
        *at
    )[0]
    assert (moved[n:end] > 0).all()


def test_flux_counts_every_source():
    scene = Scene(companions=2)
    values = scene.vector({"background": 0.25, "contrast": 0.5, "contrast_2": 0.125, "slope": 3.0})
    fitted = Fit(scene, values, (), 0.0, 0, np.empty((0, 0)), True)
    assert scene_flux(fitted) == 1.875


def test_faint_response_at_a_null_stays_finite():
    observation = four_stations(exposures=1, channels=3)
    sampling = Sampling.of(observation, radius=0.0)
    response = faint_response(
        sampling, np.zeros((len(sampling), 1), dtype=complex), 1.0, ("point", 0.0)
    )
    assert np.isfinite(response.matrix.data).all()
