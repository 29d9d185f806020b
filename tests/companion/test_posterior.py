"""The nested posterior of an epoch against least squares and against sums over a grid."""

import astropy.units as u
import numpy as np
import pytest
from numpy.testing import assert_allclose
from skies import fill, four_stations

from orbits.companion.posterior import posterior
from orbits.constants import MAS


@pytest.fixture(scope="module")
def clear():
    rng = np.random.default_rng(4)
    truth = {"x": -7.3, "y": 9.1, "contrast": 0.08, "primary_diameter": 1.2}
    observation = fill(four_stations(exposures=2, channels=3), rng, **truth)
    return posterior(observation, field=20 * u.mas, live_points=100, rng=np.random.default_rng(1))


def test_clear_detection_agrees_with_its_covariance(clear):
    """Means within 0.2 sigma and widths within 10 per cent, or 4 errors of a sample's width."""
    best = clear.search.best
    heavy = clear.modes[0]
    assert heavy.weight > 0.99
    assert clear.names == ("primary_diameter", "x", "y", "contrast", "diameter_squared")
    error = np.sqrt(np.diag(best.fit.joint)) * best.error_scale
    square = best.fit.value("diameter") * abs(best.fit.value("diameter"))
    fitted = np.append(best.fit.values[list(best.fit.free)], square)
    slack = 1 / np.sqrt(len(clear.samples))
    assert (np.abs(heavy.mean - fitted) < (0.2 + 4 * slack) * error).all()
    width = np.sqrt(np.diag(heavy.covariance)) / error
    assert_allclose(width, 1, atol=max(0.1, 4 * slack / np.sqrt(2)))


def test_clear_detection_beats_the_single_star_by_its_chi_square(clear):
    """ln Z = gain / 2 less the share of the prior that fits (Laplace's approximation).

    It holds as far as the posterior is normal: to a few tenths. Both have the diameter's prior.
    """
    best = clear.search.best
    star = np.log(
        clear.search.null.error("primary_diameter") * best.error_scale * np.sqrt(2 * np.pi)
    )
    size = 0.5 * np.linalg.slogdet(2 * np.pi * best.fit.joint * best.error_scale**2)[1]
    # Of the priors those of the place, and of the square of the companion's diameter, are left.
    width = best.companion_diameter_prior_mas**2 * best.error_scale * np.sqrt(2 * np.pi)
    prior = np.log(40.0**2) + np.log(width)
    expected = best.delta_chi2 / best.error_scale**2 / 2 + size - star - prior
    assert_allclose(clear.log_evidence, expected, atol=0.5 + 4 * clear.log_evidence_error)


def test_positions_are_alternatives_of_one_night(clear):
    table = clear.positions("2026-03-14")
    assert_allclose(table.weight.sum(), 1)
    assert_allclose(table.xy[0], [-7.3, 9.1], atol=0.2)
    assert (table.night == "2026-03-14").all()
    assert {"x", "y", "contrast", "primary_diameter", "mode"} <= set(clear.table().colnames)


def test_ambiguous_epoch_agrees_with_a_sum_over_a_grid():
    """Shares of the modes within 5 points, and the evidence, of a sum over x, y and contrast.

    The sum has its own model: two points, V = (1 + f exp(-i phase)) / (1 + f).
    """
    rng = np.random.default_rng(12)
    truth = {"x": 6.0, "y": -3.5, "contrast": 0.03}
    observation = fill(four_stations(exposures=1, channels=2), rng, **truth)
    got = posterior(
        observation, field=10 * u.mas, diameter=0 * u.mas, companion_diameter=0 * u.mas,
        live_points=100, rng=np.random.default_rng(2),
    )  # fmt: skip
    axis, contrast = np.linspace(-10, 10, 121), np.linspace(0.0015, 0.1185, 40)
    log_like, star = brute_force(observation, axis, contrast, got.error_scale)
    like = np.exp(log_like - log_like.max())
    cell = (axis[1] - axis[0]) ** 2 * (contrast[1] - contrast[0])
    evidence = np.log(like.sum() * cell / 20.0**2) + log_like.max() - star
    assert_allclose(got.log_evidence, evidence, atol=0.05 + 4 * got.log_evidence_error)
    x, y = np.meshgrid(axis, axis)
    over_place = like.sum(axis=2) / like.sum()
    assert len(got.modes) > 1
    for one in got.modes:
        mine = got.samples[got.mode == got.modes.index(one)]
        centre = np.median(mine[:, :2], axis=0)
        near = np.hypot(x - centre[0], y - centre[1]) < 1.5
        share = np.mean(np.hypot(*(got.samples[:, :2] - centre).T) < 1.5)
        assert abs(share - over_place[near].sum()) < 0.05


def brute_force(observation, axis, contrast, scale):
    """ln likelihood (y, x, contrast) of a pair of points, and of one point."""
    v2, t3 = observation.v2, observation.t3
    x, y = (a[:, :, None] for a in np.meshgrid(axis, axis))

    def wave(leg, wavelength):
        return np.exp(-2j * np.pi * MAS * (leg[0] * x + leg[1] * y) / wavelength)

    total = np.zeros((axis.size, axis.size, contrast.size))
    for k in range(len(v2)):
        seen = (1 + contrast * wave(v2.legs[k, 0], v2.wavelength[k])) / (1 + contrast)
        total += ((v2.value[k] - np.abs(seen) ** 2) / v2.error[k]) ** 2
    for k in range(len(t3)):
        first, second = t3.legs[k]
        triple = 1.0
        for leg, closing in ((first, False), (second, False), (first + second, True)):
            seen = 1 + contrast * wave(leg, t3.wavelength[k])
            triple = triple * (np.conj(seen) if closing else seen)
        total += (np.angle(np.exp(1j * t3.value[k]) / triple) / t3.error[k]) ** 2
    alone = (((v2.value - 1) / v2.error) ** 2).sum() + ((t3.value / t3.error) ** 2).sum()
    return -0.5 * total / scale**2, -0.5 * alone / scale**2


def test_same_seed_gives_the_same_samples():
    observation = fill(
        four_stations(exposures=1, channels=2), np.random.default_rng(3), x=5.0, y=4.0, contrast=0.1
    )
    fixed = {"diameter": 0 * u.mas, "companion_diameter": 0 * u.mas, "field": 14 * u.mas}
    first, second = (
        posterior(observation, live_points=50, rng=np.random.default_rng(1), **fixed)
        for _ in range(2)
    )
    np.testing.assert_array_equal(first.samples, second.samples)
