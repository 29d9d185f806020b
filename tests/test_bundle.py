"""Bundles: an orbit with those that its errors or its posterior allow."""

import astropy.units as u
import fitted
import numpy as np
import pytest
from astropy.table import Table
from astropy.time import Time
from numpy.testing import assert_allclose
from scipy.stats import kstest, truncnorm

from orbits.bundle import Bundle, Orbits, draw_orbits, read_samples
from orbits.elements import Elements
from orbits.errors import InputError

BEST = {
    "period": 117.3,
    "periastron": 60312.8,
    "eccentricity": 0.36,
    "semimajor_axis": 21.4,
    "inclination": 128.0,
    "node": 63.0,
    "argument": 212.0,
}


def test_many_orbits_agree_with_each_alone(rng):
    """The arrays of a bundle against `Elements`, which handles one orbit, with units."""
    many = Orbits.of(
        {
            "period": rng.uniform(1, 1e4, 20),
            "periastron": rng.uniform(5e4, 6e4, 20),
            "eccentricity": rng.uniform(0, 0.99, 20),
            "semimajor_axis": rng.uniform(1, 1e3, 20),
            "inclination": rng.uniform(0, 180, 20),
            "node": rng.uniform(0, 360, 20),
            "argument": rng.uniform(0, 360, 20),
            "k1": rng.uniform(1, 100, 20),
            "k2": rng.uniform(1, 100, 20),
            "gamma": rng.uniform(-50, 50, 20),
        }
    )
    mjd = rng.uniform(5e4, 6e4, 15)
    times = Time(mjd, format="mjd", scale="tdb")
    x, y = many.offsets(mjd)
    speeds = many.velocities(mjd)
    for row in range(20):
        one = many.select(np.array([row]))
        elements = Elements(
            period=one.period[0] * u.day,
            periastron=Time(one.periastron[0], format="mjd", scale="tdb"),
            eccentricity=one.eccentricity[0],
            semimajor_axis=one.semimajor_axis[0] * u.mas,
            inclination=one.inclination[0] * u.deg,
            node=one.node[0] * u.deg,
            argument=one.argument[0] * u.deg,
        )
        east, north = elements.offsets(times)
        # Both take the same road in float64: 1e-11 of the orbit's size at most.
        scale = 1e-11 * one.semimajor_axis[0]
        assert_allclose(x[row], east.to_value("mas"), rtol=0, atol=scale)
        assert_allclose(y[row], north.to_value("mas"), rtol=0, atol=scale)
        kms = u.km / u.s
        expected = elements.velocities(
            times, k1=one.k1[0] * kms, k2=one.k2[0] * kms, gamma=one.gamma[0] * kms
        )
        for star in (0, 1):
            assert_allclose(speeds[star][row], expected[star].to_value(kms), rtol=0, atol=1e-8)


def test_a_bundle_of_elements_alone():
    elements = Elements(
        period=0.5 * u.yr,
        periastron=Time(2_460_000.0, format="jd", scale="tdb"),
        eccentricity=0.1,
        semimajor_axis=1.2 * u.arcsec,
        inclination=1.0 * u.rad,
        node=10 * u.deg,
        argument=20 * u.deg,
    )
    bundle = Bundle.of_elements("x", elements)
    assert len(bundle.draws) == 0
    assert bundle.on_the_sky
    assert_allclose(bundle.best.period, 182.625)
    assert_allclose(bundle.best.periastron, 59999.5)
    assert_allclose(bundle.best.semimajor_axis, 1200.0)
    assert_allclose(bundle.best.inclination, np.degrees(1.0))


def test_draws_follow_the_errors(rng):
    draws = draw_orbits(BEST, {"period": 0.5, "eccentricity": 0.3}, 5000, rng)
    # A Kolmogorov-Smirnov test fails one seed in 10 000 at this level.
    assert kstest(draws.period, "norm", args=(117.3, 0.5)).pvalue > 1e-4
    law = truncnorm((0 - 0.36) / 0.3, (1 - 0.36) / 0.3, loc=0.36, scale=0.3)
    assert kstest(draws.eccentricity, law.cdf).pvalue > 1e-4
    assert (draws.eccentricity < 1).all()
    assert (draws.semimajor_axis == 21.4).all()
    assert abs(np.corrcoef(draws.period, draws.eccentricity)[0, 1]) < 4 / np.sqrt(5000)
    assert np.isnan(draws.k1).all()


def test_hopeless_errors_still_give_orbits(rng):
    """A catalogue holds periods of 19 +- 225 d and eccentricities of 0.99 +- 0.5."""
    best = {**BEST, "period": 18.8, "eccentricity": 0.99}
    draws = draw_orbits(best, {"period": 225.0, "eccentricity": 0.5}, 5000, rng)
    assert (draws.period > 0).all()
    assert ((draws.eccentricity >= 0) & (draws.eccentricity < 1)).all()
    assert np.isfinite(draws.offsets(np.array([60000.0]))).all()


def test_no_errors_no_draws(rng):
    assert len(draw_orbits(BEST, {"period": np.nan, "node": 0.0}, 100, rng)) == 0


def test_thin_picks_evenly(rng):
    draws = draw_orbits(BEST, {"period": 0.5}, 100, rng)
    bundle = Bundle(name="x", best=draws.select(np.array([0])), draws=draws)
    assert_allclose(bundle.thin(12).period, draws.period[np.arange(0, 100, 9)])
    assert bundle.thin(500) is draws


def test_a_solution_becomes_a_bundle():
    solution = fitted.solution()
    bundle = Bundle.of_solution(solution)
    assert bundle.ascending
    assert_allclose(bundle.best.k2, [29.06])
    assert_allclose(bundle.draws.node, solution.samples["node_deg"])
    # The second instrument's zero point of 1.5 km/s is taken off, the first one's data are not.
    shift = solution.velocities.velocity - bundle.velocities.velocity
    assert_allclose(shift, np.where(solution.velocities.instrument == "two", 1.5, 0.0))


def test_a_drift_is_taken_off_about_the_middle_of_the_data():
    from dataclasses import replace

    solution = fitted.solution()
    drifting = replace(solution, best=dict(solution.best) | {"drift_kms_per_year": 3.0})
    still, moving = (Bundle.of_solution(s).velocities for s in (solution, drifting))
    # The data span 60305 (velocities) to 60419 (positions): the middle is 60362.
    expected = 3.0 * (still.mjd - (60305.0 + 60419.0) / 2) / 365.25
    assert_allclose(still.velocity - moving.velocity, expected, atol=1e-12)


def test_samples_from_a_file(tmp_path):
    path = tmp_path / "samples.ecsv"
    with pytest.raises(InputError, match="no such file; it should hold the posterior samples"):
        read_samples(path)
    table = Table({"period_d": [1.0, 2.0], "periastron_mjd": [6e4, 6e4]})
    table.write(path)
    with pytest.raises(InputError, match="no column eccentricity"):
        read_samples(path)
    path.write_text("nothing of the kind")
    with pytest.raises(InputError, match="not a readable ECSV table"):
        read_samples(path)
