"""False alarms: the law of the largest gain of pure noise, and what follows from it."""

import astropy.units as u
import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.stats import chi2, kstest, norm
from skies import fill, four_stations

from orbits.companion.covariance import ErrorModel
from orbits.companion.maps import estimate
from orbits.companion.search import Epoch, Stars, choose_grid, search
from orbits.companion.significance import FalseAlarms, highest, noise_maxima, scaled

STARS = Stars(fixed={"diameter": 0.0}, free=("primary_diameter",))
FIELD = 14 * u.mas


def prepared(observation, errors=None):
    epoch = Epoch(observation, STARS, choose_grid(observation, FIELD), errors, 1, True)
    return epoch.field(epoch.null(None))


@pytest.fixture(scope="module")
def design():
    return four_stations(exposures=3, channels=6)


def test_gain_at_a_fixed_position_is_half_chi_square(design):
    """Chernoff 1954, Ann. Math. Stat. 25, 573: one half at 0, one half as chi-square of one."""
    rng = np.random.default_rng(11)
    field = prepared(fill(design, rng, primary_diameter=1.5))
    row, column = field.grid.half + 9, field.grid.half - 5
    at = field.grid.axis[[column]], field.grid.axis[[row]]
    white = field.project(rng.standard_normal((field.covariance.rank, 4000)))
    n = field.response.at(*at)[0] @ field.covariance.back(white)
    _, gain = estimate(n, np.full(4000, field.sensitivity[row, column]))
    positive = gain[gain > 0]
    # Four standard errors of a count, and a Kolmogorov-Smirnov test at 1e-3; the seed is fixed.
    assert abs(len(positive) - 2000) < 4 * np.sqrt(1000)
    assert kstest(positive, chi2(1).cdf).pvalue > 1e-3


def test_tail_of_a_field_of_known_law():
    """The largest of m independent squared normals: P(T > t) = 1 - (1 - p(t))^m, extrapolated.

    The law that is fitted is one for smooth fields; p(t) falls by a factor t faster than it allows
    for, which is 1.6 from where it is fitted (P = 0.05) to P = 1e-5; fifty maxima give 14 per cent.
    """
    rng = np.random.default_rng(12)
    m = 2000
    maxima = norm.isf(rng.random((1000, 1)) ** (1 / m) * -1 + 1).ravel() ** 2
    alarms = FalseAlarms.fitted(maxima)
    for chance in (1e-3, 1e-5):
        t = norm.isf(-np.expm1(np.log1p(-chance) / m)) ** 2
        found, extrapolated = alarms.probability(t)
        assert extrapolated
        assert chance / 1.5 < found < 2 * chance


def test_probability_and_threshold_are_inverse():
    maxima = np.random.default_rng(13).gumbel(18.0, 2.0, 1000)
    alarms = FalseAlarms.fitted(maxima)
    for chance in (0.3, 0.05, 1e-4, 1e-7):
        again, _ = alarms.probability(alarms.threshold(chance))
        assert_allclose(again, chance, rtol=1e-6, atol=1 / 1001)


def test_counted_probability_is_a_rank():
    alarms = FalseAlarms.fitted(np.arange(1.0, 1000.0))
    assert alarms.probability(900.0) == (101 / 1000, False)


def test_peak_between_positions_of_a_grid():
    """A paraboloid is found exactly, wherever its summit lies."""
    y, x = np.mgrid[-4:5, -4:5]
    assert_allclose(highest(10 - 0.3 * (x - 0.4) ** 2 - 0.2 * (y + 0.3) ** 2), 10, rtol=1e-12)


# Noise as it is, noise as the search takes it, and whether the two agree.
CORRELATED = ErrorModel(shared_baselines=True, v2_calibration=0.05, t3_calibration=0.02)


@pytest.mark.parametrize(
    ("actual", "assumed", "honest"),
    [
        (ErrorModel(), ErrorModel(), True),
        (CORRELATED, CORRELATED, True),
        (CORRELATED, ErrorModel(), False),
    ],
)
def test_rate_of_false_alarms_is_the_stated_one(design, actual, assumed, honest):
    """At a stated 10 per cent over 200 epochs of noise; the binomial error is 2.1 per cent."""
    rng = np.random.default_rng(14)

    def noise():
        return fill(design, rng, errors=actual, primary_diameter=1.5)

    alarms = FalseAlarms.fitted(noise_maxima(prepared(noise(), assumed), 1000, rng))
    threshold = alarms.threshold(0.1)
    tops = []
    for _ in range(200):
        field = prepared(noise(), assumed)
        tops.append(scaled(field, field.faint().gain, field.chi2))
    rate = np.mean(np.array(tops) > threshold)
    error = np.sqrt(0.1 * 0.9 * (1 / 200 + 1 / 1000))
    assert (abs(rate - 0.1) < 3.5 * error) == honest


def test_faint_companions_are_found_as_often_as_by_a_filter_that_knows_the_place(design):
    """A contrast that brings the filter to the threshold in the mean is found half of the time.

    The search also takes the peaks beside the place, and loses a little between positions of the
    grid: less than 10 per cent of contrast is asked for.
    """
    rng = np.random.default_rng(15)
    field = prepared(fill(design, rng, primary_diameter=1.5))
    threshold = FalseAlarms.fitted(noise_maxima(field, 1000, rng)).threshold(0.01)
    found = []
    for _ in range(100):
        x, y = rng.uniform(-10, 10, 2)
        signature = field.response.at(np.array([x]), np.array([y])).T
        white = field.project(field.covariance.whiten(signature))[:, 0]
        contrast = np.sqrt(threshold / (white @ white))
        observation = fill(design, rng, x=x, y=y, contrast=contrast, primary_diameter=1.5)
        trial = prepared(observation)
        found.append(scaled(trial, trial.faint().gain, trial.chi2) > threshold)
    # 10 per cent of contrast move the score by 0.1 sqrt(threshold), about 0.4 sigma.
    lowest, highest_rate = norm.cdf([-0.1 * np.sqrt(threshold), 0.1 * np.sqrt(threshold)])
    slack = 3 * np.sqrt(0.25 / 100)
    assert lowest - slack < np.mean(found) < highest_rate + slack


def test_search_says_what_noise_would_do(design):
    rng = np.random.default_rng(16)
    nothing = search(fill(design, rng, primary_diameter=1.5), field=FIELD, noise_searches=300)
    assert nothing.best.false_alarm_probability > 0.01
    assert len(nothing.false_alarms.maxima) == 300
    lit = fill(design, rng, primary_diameter=1.5, x=9.0, y=-4.0, contrast=0.05)
    sure = search(lit, field=FIELD, noise_searches=300)
    assert sure.best.false_alarm_probability < 1e-9
    assert sure.extrapolated
    # Beyond doubt after the first look, so the rest of the noise searches is spared.
    assert len(sure.false_alarms.maxima) < 300


def test_errors_stated_too_small_make_no_discovery(design):
    """With errors a third of the true ones every gain is nine times too large."""
    rng = np.random.default_rng(17)
    observation = fill(design, rng, primary_diameter=1.5)
    for table in (observation.v2, observation.t3):
        table.error[:] /= 3
    result = search(observation, field=FIELD, noise_searches=300)
    assert result.best.delta_chi2 > result.false_alarms.threshold(1e-3)
    assert result.best.false_alarm_probability > 0.01
    assert_allclose(result.best.error_scale, 3, rtol=0.2)  # sqrt(2 / 324) / 2 is 4 per cent
