"""The compiled likelihood, its Jacobian and the proposal against plain linear algebra."""

from dataclasses import replace

import astropy.units as u
import numpy as np
import pytest
from astropy.time import Time
from made_binaries import binary, moving, seen, with_false_places
from numpy.testing import assert_allclose
from scipy.special import logsumexp
from scipy.stats import multivariate_normal

from orbits import Model, Parallax, Priors
from orbits.fitting.data import make_data
from orbits.fitting.laplace import Normal
from orbits.fitting.posterior import sample_table
from orbits.fitting.proposal import Proposal
from orbits.fitting.residuals import Unknowns, evaluate
from orbits.fitting.scan import linear_solution, scan
from orbits.fitting.space import DIRECT, RETROGRADE, from_chart, to_chart
from orbits.fitting.target import Target

PRIORS = Priors(
    period=(50.0, 200.0),
    semimajor_axis=(10.0, 40.0),
    eccentricity=(0.0, 0.9),
    amplitude=(10.0, 50.0),
    systemic=30.0,
)


def points_of(data, rng, count=20):
    return prior_target(data).draw(count, rng)[0]


def elements_of(data, point):
    names = data.space.names
    value = dict(zip(names, point, strict=True))
    e = value["h_x"] ** 2 + value["h_y"] ** 2
    phase = np.arctan2(value["h_y"], value["h_x"])
    period = np.exp(value["log_period"])
    return binary(
        period=period,
        periastron=data.reference - phase * period / (2 * np.pi),
        eccentricity=e,
        semimajor_axis=np.exp(value["log_axis"]),
        inclination=np.degrees(np.arccos(value["cos_inclination"])),
        node=np.degrees(value["node"]),
        argument=np.degrees(value["longitude"] - phase),
    )


def prior_target(data):
    return Target.prior(data)


def test_positions_with_alternatives_and_outliers(rng):
    """Each night a mixture of normal densities, summed row by row with scipy."""
    positions = with_false_places(seen(binary(), 6, rng), rng)
    data = make_data(positions, None, None, PRIORS, Model(outliers=True, position_jitter=True))
    points = points_of(data, rng)
    found = prior_target(data).log_likelihood(points)
    place = data.positions
    wide = np.mean(np.square(place.xy))
    for point, value in zip(points, found, strict=True):
        x, y = elements_of(data, point).offsets(Time(place.mjd, format="mjd", scale="tdb"))
        model = np.column_stack([x.to_value(u.mas), y.to_value(u.mas)])
        share = point[data.space.names.index("outlier_fraction")]
        jitter = np.exp(2 * point[data.space.names.index("log_position_jitter_0")])
        total = 0.0
        for night in dict.fromkeys(place.night):
            terms = []
            for row in np.flatnonzero(place.night == night):
                c = place.covariance[row]
                inside = multivariate_normal(model[row], c + jitter * np.eye(2))
                outside = multivariate_normal([0, 0], c + wide * np.eye(2))
                terms += [
                    np.log((1 - share) * 0.5) + inside.logpdf(place.xy[row]),
                    np.log(share * 0.5) + outside.logpdf(place.xy[row]),
                ]
            total += logsumexp(terms)
        assert_allclose(value, total, rtol=1e-9)


def test_velocities_with_zero_points_integrated_out(rng):
    """A dense covariance D + G G^T: two instruments, a drift, a jitter and velocity differences."""
    velocities = moving(binary(), 9, rng)
    star = velocities.star.copy()
    star[[2, 12]] = 2
    instrument = np.where(np.arange(18) % 3 == 0, "a", "b").astype(object)
    velocities = replace(velocities, star=star, instrument=instrument)
    data = make_data(None, velocities, None, PRIORS, Model(drift=True, velocity_jitter=True))
    points = points_of(data, rng)
    found = prior_target(data).log_likelihood(points)
    table = sample_table(data, points, rng)
    speed = data.velocities
    first = speed.instrument[0]
    absolute = (speed.star != 2).astype(float)
    years = (speed.mjd - data.reference) / 365.25
    sigmas = np.column_stack(
        [
            PRIORS.systemic * absolute,
            PRIORS.zero_point * absolute * (speed.instrument != first),
            PRIORS.drift * absolute * years,
        ]
    )
    for row, (point, value) in enumerate(zip(points, found, strict=True)):
        sample = table.iloc[row]
        orbit = binary(
            period=sample.period_d,
            periastron=sample.periastron_mjd,
            eccentricity=sample.eccentricity,
            argument=sample.argument_deg,
        )
        kms = u.km / u.s
        v1, v2 = orbit.velocities(
            Time(speed.mjd, format="mjd", scale="tdb"),
            k1=sample.k1_kms * kms,
            k2=sample.k2_kms * kms,
        )
        v1, v2 = v1.to_value(kms), v2.to_value(kms)
        model = np.choose(speed.star, [v1, v2, v2 - v1])
        jitters = {
            name: np.exp(2 * point[data.space.names.index(f"log_velocity_jitter_{i}")])
            for i, name in enumerate(dict.fromkeys(speed.instrument))
        }
        variance = speed.error**2 + np.array([jitters[name] for name in speed.instrument])
        covariance = np.diag(variance) + sigmas @ sigmas.T
        expected = multivariate_normal(model, covariance).logpdf(speed.velocity)
        assert_allclose(value, expected, rtol=1e-8)


def test_charts_invert_and_keep_the_prior_even(rng):
    """u fills the disc of radius sqrt(2) evenly for isotropic orbits: |u|^2 / 2 is uniform."""
    data = make_data(seen(binary(), 5, rng), None, None, PRIORS, Model())
    columns = data.space.columns
    coordinates, back = np.empty(7), np.empty(7)
    for chart in (DIRECT, RETROGRADE):
        filled = []
        for count, point in enumerate(points_of(data, rng, 4000)):
            to_chart(point, chart, columns, coordinates)
            filled.append((coordinates[columns[4]] ** 2 + coordinates[columns[6]] ** 2) / 2)
            if count >= 50:
                continue
            from_chart(coordinates, chart, columns, back)
            other = elements_of(data, point).thiele_innes.value
            assert_allclose(elements_of(data, back).thiele_innes.value, other, atol=1e-9)
        # Mean and variance of a uniform number within 5 standard errors of 4000 draws.
        assert abs(np.mean(filled) - 0.5) < 5 * 0.289 / np.sqrt(4000)
        assert abs(np.var(filled) - 1 / 12) < 5 * 0.0745 / np.sqrt(4000)


@pytest.mark.parametrize("chart", [DIRECT, RETROGRADE])
def test_the_proposal_is_a_density(rng, chart):
    """The mean of prior / proposal over draws of the proposal is 1, within 5 standard errors."""
    data = make_data(seen(binary(), 5, rng), None, None, PRIORS, Model())
    centre = np.empty(7)
    to_chart(points_of(data, rng, 1)[0], chart, data.space.columns, centre)
    width = np.diag([0.01, 0.02, 0.02, 0.01, 0.02, 0.3, 0.02])
    centre[[1, 2]] = 0.2, -0.3
    centre[0], centre[3] = np.log(100.0), np.log(20.0)
    centre[[data.space.columns[4], data.space.columns[6]]] = 0.3, 0.4
    around = Normal(chart=chart, mean=centre, covariance=width, log_weight=0.0)
    target = Target(data, Proposal.around([around], 7))
    points, weight = target.draw(200_000, rng)
    log_likelihood = target.log_likelihood(points)
    ok = np.isfinite(log_likelihood)
    ratio = np.zeros(len(points))
    ratio[ok] = np.exp(weight[ok] - log_likelihood[ok])
    assert abs(ratio.mean() - 1) < 5 * ratio.std() / np.sqrt(len(points))
    # And it is not just the prior, of which the density holds a tenth.
    assert np.median(ratio[ok]) < 0.1


@pytest.mark.parametrize("kind", ["positions", "velocities", "joint"])
def test_analytic_jacobian(rng, kind):
    """Central differences of the residuals, step 1e-6: good to about 1e-8 of the largest."""
    positions, velocities = seen(binary(), 6, rng), moving(binary(), 5, rng)
    model = Model(drift=True, scale=("",), position_angle_zero=("",))
    parallax = Parallax(value=29.0, error=0.5) if kind == "joint" else None
    data = make_data(
        None if kind == "velocities" else positions,
        None if kind == "positions" else velocities,
        parallax,
        PRIORS,
        model,
    )
    unknowns = Unknowns.of(data)
    start = {"log_period": 4.6, "k_re": 0.2, "k_im": -0.3, "log_axis": 3.0, "inclination": 2.0,
             "longitude": 1.0, "node": 0.7, "p_re": 5.0, "p_im": 3.0, "n_re": -8.0, "n_im": 20.0,
             "log_k1": 3.2, "log_k2": 3.3}  # fmt: skip
    values = np.array([[start.get(name, 0.4) for name in unknowns.names]])
    jitters = (np.zeros(len(data.tables.places)), np.zeros(len(data.tables.speeds)))
    _, _, jacobian = evaluate(data, unknowns, values, jitters)
    for column in range(values.shape[1]):
        step = np.zeros_like(values)
        step[0, column] = 1e-6
        _, up, _ = evaluate(data, unknowns, values + step, jitters)
        _, down, _ = evaluate(data, unknowns, values - step, jitters)
        numeric = (up - down)[0] / 2e-6
        largest = np.abs(numeric).max()
        assert_allclose(jacobian[0, :, column], numeric, atol=1e-6 * largest + 1e-9)


def test_scan_solves_the_linear_constants(rng):
    """At a node the constants are those of numpy's least squares on the same design."""
    orbit = binary()
    positions = seen(orbit, 10, rng)
    data = make_data(positions, None, None, PRIORS, Model())
    phase = 2 * np.pi * (data.reference - 60010.0) / 104.0
    constants, _ = linear_solution(data, 104.0, 0.35, phase, rng)
    A, B, F, G = orbit.thiele_innes.value
    # The errors are 0.1 mas for 20 numbers and 4 unknowns: 0.3 is about 5 sigma.
    assert_allclose(constants, [A, F, B, G], atol=0.3)
    found = scan(data, rng=rng)
    best = np.unravel_index(found.chi2.argmin(), found.chi2.shape)[0]
    # One step of the scan in frequency is a tenth of a turn over the span of the data.
    assert abs(1 / found.period[best] - 1 / 104.0) < 0.1 / 1400


def test_scan_does_not_depend_on_the_number_of_cores():
    data = make_data(seen(binary(), 10, np.random.default_rng(1)), None, None, PRIORS, Model())
    one = scan(data, cores=1, rng=np.random.default_rng(2))
    two = scan(data, cores=2, rng=np.random.default_rng(2))
    assert np.array_equal(one.chi2, two.chi2)
    assert np.array_equal(one.phase, two.phase)
