"""Limits: coverage by simulation, maps against sums, and recovery against the search itself."""

import json
from dataclasses import replace

import astropy.units as u
import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.ndimage import label, maximum_filter
from scipy.stats import chi2 as chi2_law
from scipy.stats import ncx2, norm
from skies import fill, four_stations

from orbits.cli.limits import describe
from orbits.companion.covariance import ErrorModel
from orbits.companion.epoch import Epoch
from orbits.companion.exclusion import profile_limit, published_limit
from orbits.companion.limit_tables import completeness_table, curve_table, map_table, nights_table
from orbits.companion.limits import limits
from orbits.companion.night import NightSearch
from orbits.companion.recovery import critical_amplitudes, responses
from orbits.companion.search import choose_grid
from orbits.companion.significance import highest, scaled
from orbits.companion.stack import COMPANION, Stack
from orbits.companion.stars import Stars
from orbits.companion.trials import same_lobe, with_companion
from orbits.errors import InputError
from orbits.observation import Observable

QUICK = {"field": 25 * u.mas, "positions": 17, "noise_searches": 200, "injections": 40}


@pytest.fixture(scope="module")
def observation():
    """A resolved star, no companion."""
    blank = four_stations(exposures=3, channels=4)
    return fill(blank, np.random.default_rng(7), primary_diameter=1.0)


@pytest.fixture(scope="module")
def result(observation):
    return limits(observation, trials=2, **QUICK)


@pytest.mark.parametrize("strength", [0.0, 0.5, 2.0])
def test_profile_limit_excludes_the_truth_as_often_as_it_says(strength, rng):
    """Of 20 000 estimates; a companion that may be stronger than 1.3 sigma is excluded in 10%.

    Weaker ones are excluded less often: never without a companion, at 0.5 sigma where the estimate
    e < 0 and e + sqrt(e^2 + z^2) < 0.5 has no solution above the e of a positive limit.
    """
    d = np.full(20_000, 4.0)
    truth = strength / 2.0
    estimate = truth + rng.standard_normal(d.size) / 2.0
    limit = profile_limit(estimate * d, d, 0.9)
    z = norm.isf(0.1)
    # Excluded where the deviate is below -z or, with the estimate negative, below this root.
    root = (strength**2 - z**2) / (2 * strength) - strength if strength else -np.inf
    expected = norm.cdf(min(-z, root)) if strength < z else 0.1
    error = np.sqrt(max(expected * (1 - expected), 1e-9) / d.size)
    assert abs(np.mean(limit < truth) - expected) < 4 * error + 1e-9


def test_published_limit_is_where_the_total_becomes_improbable():
    """Put back into the chi-square, the limit has the probability asked for."""
    n, d, total, dof = np.array([30.0, -50.0]), np.array([4e4, 9e4]), 130.0, 100
    limit = published_limit(n, d, total, dof, 0.9973)
    there = total - 2 * limit * n + limit**2 * d
    assert_allclose(chi2_law.sf(dof * there / total, dof), 0.0027, rtol=1e-6)
    assert np.isinf(published_limit(np.zeros(1), np.zeros(1), total, dof, 0.9973)).all()


def test_limits_rise_with_confidence():
    """With few data too, where the median of chi-square (2.37 for 3) is less than the fit has."""
    n, d = np.array([-0.2, 0.0, 5.0, -40.0]), np.full(4, 4e2)
    confidence = (0.501, 0.55, 0.6, 0.7, 0.9, 0.9973)
    profile = np.array([profile_limit(n, d, one) for one in confidence])
    assert (np.diff(profile, axis=0) > 0).all()
    for dof in (1, 3, 100):
        total = np.array([published_limit(n, d, 1.3 * dof, dof, one) for one in confidence])
        steps = np.diff(total, axis=0)
        assert (steps >= 0).all()
        assert (total >= np.maximum(2 * n / d, 0)).all()  # as good a fit as the single star is kept
        assert (steps[-3:] > 0).all()


def test_response_to_a_companion_is_its_map(observation, result):
    """K(x, p) by transforms, in single precision, against s(x)^T P s(p) position by position."""
    stack = _stack(observation)
    grid = stack.grid
    got = responses(stack, np.array([6.0]), np.array([-9.0]))[0]
    rng = np.random.default_rng(3)
    rows, columns = rng.integers(0, grid.side, (2, 40))
    here = stack.signatures(np.array([6.0]), np.array([-9.0]))[0][:, 0]
    there = stack.signatures(grid.axis[columns], grid.axis[rows])[0]
    # 1e-3 of the largest term, which is what the transform is asked for.
    assert_allclose(got[rows, columns], here @ there, atol=3e-3 * (here @ here))


def test_amplitudes_follow_the_noncentral_law_where_nothing_confuses():
    """A peak gains two degrees of freedom by moving to its top.

    P(found at amplitude a) is that of a noncentral chi-square with 3 degrees of freedom above the
    threshold (quadratic peak), raised where the reduced chi-square exceeds 1. 0.045 is three
    standard deviations of the share among 1000 draws, 0.015 is left for lobes not quite quadratic.
    """
    blank = four_stations(stations=8, exposures=3, channels=4)
    stack = _stack(fill(blank, np.random.default_rng(7), primary_diameter=1.0))
    middle = stack.grid.half
    place = np.array([(middle + 9) * stack.grid.side + middle - 7])
    amplitude = critical_amplitudes(stack, place, 36.0, 1000, np.random.default_rng(5))[:, 0]
    reduced = chi2_law.rvs(stack.dof, size=4000, random_state=1) / stack.dof
    threshold = 36.0 * np.maximum(reduced, 1.0)
    for a in (5.5, 6.0, 6.5, 7.5):
        assert abs(np.mean(amplitude < a) - ncx2.sf(threshold, 3, a**2).mean()) < 0.06


def test_amplitudes_are_those_at_which_the_highest_peak_is_claimed_and_in_place(observation):
    """Against whole maps a rho + z: found at 0.05 sigma more, and not at 0.05 sigma less.

    The limit between lies where two peaks are alike; which of them is higher between the pixels is
    a matter of a few hundredths. Noise can also make a rival come and go as a grows.
    """
    stack = _stack(observation)
    side, middle, threshold, count = stack.grid.side, stack.grid.half, 20.0, 25
    rows, columns = middle + np.array([9, -14, 3, 20]), middle + np.array([-7, 4, 12, 1])
    got = critical_amplitudes(
        stack, rows * side + columns, threshold, count, np.random.default_rng(6)
    )
    agree = []
    for k, (z, chi2) in enumerate(stack.noise(count, np.random.default_rng(6))):
        claim = np.sqrt(threshold * max(1.0, stack.reduced(chi2, COMPANION)))
        for row, column, a in zip(rows, columns, got[k], strict=True):
            rho = responses(stack, stack.grid.axis[[column]], stack.grid.axis[[row]])[0]
            rho = rho * stack.normalisation
            rho /= rho[row, column]
            parts, _ = label(rho > 0.5, structure=np.ones((3, 3)))
            lobe = parts == parts[row, column]
            agree += [seen((a + d) * rho + z, lobe, claim) == (d > 0) for d in (-0.05, 0.05)]
    assert np.mean(agree) > 0.97


def seen(z, lobe, claim):
    """Whether the highest peak of a map, between its pixels too, is on the lobe and claimed."""
    peaks = np.argwhere((z == maximum_filter(z, size=3)) & (z > z.max() - 1.0))
    heights = [highest(z[max(i - 1, 0) : i + 2, max(j - 1, 0) : j + 2]) for i, j in peaks]
    best = int(np.argmax(heights))
    return bool(heights[best] >= claim and lobe[tuple(peaks[best])])


def test_recovery_agrees_with_maps_of_the_data(observation, result):
    """Companions of the stated contrast, put into the observed noise and looked for in its maps.

    100 places of one noise realisation count for perhaps 50 independent ones: 90 +- 4 are expected.
    """
    night = _search(observation).night(observation)
    rng = np.random.default_rng(2)
    rows, columns = np.nonzero(np.isfinite(result.maps["recovered"]))
    found = []
    for k in rng.integers(len(rows), size=100):
        x, y = result.axis[columns[k]], result.axis[rows[k]]
        contrast = result.maps["recovered"][rows[k], columns[k]]
        lit = _epoch(with_companion(night, x=x, y=y, contrast=contrast))
        field = lit.field(lit.null(None))
        gain = field.faint().gain
        i, j = np.unravel_index(np.argmax(gain), gain.shape)
        place = field.grid.axis[j], field.grid.axis[i]
        claimed = scaled(field, gain, field.chi2) >= result.threshold
        found.append(claimed and same_lobe(night.field, (x, y), place))
    assert 78 <= np.sum(found) <= 99


def test_trials_are_full_searches(result):
    """Two of them: that both are missed has a chance of 1 in 100."""
    assert len(result.trials) == 2
    assert any(one.claimed for one in result.trials)


def test_expected_gain_of_the_threshold_is_found_half_the_time(result):
    ring = result.ring(15.0)
    assert_allclose(result.reaching(15.0, 0.5), np.median(result.expected[ring]), rtol=0.1)


def test_routes_are_ordered_and_complete(result):
    """A search pays for the whole field; the total chi-square is the most modest of all."""
    curve = result.curve()
    far = curve["separation"] > 5
    assert (curve["profile_median"] < curve["recovered_median"])[far].all()
    assert (curve["recovered_median"] < curve["published_median"])[far].all()
    for name in result.maps:
        assert (curve[f"{name}_median"] <= curve[f"{name}_worst"]).all()
    found = result.found(15.0, np.array([1e-6, 1.0]))
    assert_allclose(found, [0.0, 1.0], atol=0.01)


def test_words_say_where_the_total_is_from(result):
    words = " ".join(describe(result).split())
    assert "in the form of Absil et al. 2011 as we recall it, not checked against" in words


def test_limits_of_nothing_and_of_everything_can_be_told(result):
    """A contrast of 0 has no magnitude: the least confident limits from few data may be one."""
    size = result.maps["profile"].shape
    words = describe(replace(result, maps={"profile": np.zeros(size), "recovered": np.ones(size)}))
    assert "1 (-0.00) / 1 (-0.00)" in words
    assert "0 / 0\n" in words
    assert "none / none" in describe(replace(result, maps={"profile": np.full(size, np.inf)}))


def test_same_seed_gives_the_same_limits(observation, result):
    again = limits(observation, **QUICK)
    for name, values in result.maps.items():
        np.testing.assert_array_equal(values, again.maps[name])
    np.testing.assert_array_equal(result.critical, again.critical)


def test_companion_that_shows_is_no_part_of_the_limits(result):
    blank = four_stations(exposures=3, channels=4)
    truth = {"x": 9.0, "y": -11.0, "contrast": 0.05, "primary_diameter": 1.0}
    lit = limits(fill(blank, np.random.default_rng(8), **truth), **QUICK)
    assert_allclose(lit.removed[0].contrast, 0.05, atol=0.01)
    curve, without = lit.curve(), result.curve()
    outer = curve["separation"] > 8
    # The same night but for the noise: median limits by chi-square within a few tens of per cent.
    ratio = np.median(curve["recovered_median"][outer] / without["recovered_median"][outer])
    assert 0.8 < ratio < 1.25


def test_two_nights_go_deeper_by_the_root_of_two(observation, result):
    second = fill(observation, np.random.default_rng(9), primary_diameter=1.0)
    both = limits([observation, second], **QUICK)
    assert len(both.each) == 2
    assert len(nights_table(both)) == 3
    seen = np.isfinite(both.expected)
    ratio = np.median(both.expected[seen] / both.each[0].expected[seen])
    # sqrt(T / 2 D): the thresholds are measured with 200 searches each, to some 10 per cent.
    assert_allclose(ratio, np.sqrt(0.5), rtol=0.12)


def test_without_closure_phases_opposite_places_are_one(observation):
    """V2 does not tell them apart: a companion found at either is found, and none is lost."""
    alone = replace(observation, t3=Observable.empty(2))
    result = limits(alone, trials=3, **QUICK)
    assert "published" not in result.maps
    assert json.loads(json.dumps(result.to_json(), allow_nan=False))["curve"]
    seen = np.isfinite(result.expected)
    assert (result.maps["recovered"] < 4 * result.expected)[seen].all()
    # Half of them lie opposite; that one of three is missed has a chance of a quarter.
    assert sum(one.found for one in result.trials) >= 2
    opposite = (6.0, -9.0), (-6.0, 9.0)
    fields = [_search(one).night(one).field for one in (alone, observation)]
    assert [same_lobe(field, *opposite) for field in fields] == [True, False]


def test_tables_have_units_and_conversions(result):
    """At 100 mas of parallax the modulus is -5 + 5 = 0: absolute is apparent; 1 mas is 0.01 au."""
    table = curve_table(result, parallax=100 * u.mas, magnitude=4.0)
    assert_allclose(table["separation_au"].quantity.to_value(u.au), table["separation"] / 100)
    assert_allclose(table["absolute_mag_profile_median"], 4.0 + table["delta_mag_profile_median"])
    contrast = np.asarray(table["profile_median"])
    seen = np.isfinite(contrast)
    assert_allclose(
        10 ** (-0.4 * np.asarray(table["delta_mag_profile_median"])[seen]), contrast[seen]
    )
    assert len(map_table(result)) == result.axis.size**2
    completeness = completeness_table(result)
    assert ((completeness["found"] >= 0) & (completeness["found"] <= 1)).all()


def test_wrong_arguments_are_refused(observation):
    for confidence in (1.0, 0.5, 0.3, np.nan):
        with pytest.raises(ValueError, match=r"confidence must be between 0\.5 and 1"):
            limits(observation, confidence=confidence)
    with pytest.raises(ValueError, match="completeness must be between 0 and 1"):
        limits(observation, completeness=1.0)
    with pytest.raises(ValueError, match="no observation"):
        limits([])
    with pytest.raises(InputError, match="no usable"):
        limits(replace(observation, v2=Observable.empty(1), t3=Observable.empty(2)))


def _search(observation):
    grid = choose_grid(observation, QUICK["field"])
    return NightSearch(grid=grid, stars=Stars(), errors=ErrorModel())


def _epoch(observation):
    stars = Stars(fixed={"diameter": 0.0}, free=("primary_diameter",))
    return Epoch(observation, stars, choose_grid(observation, QUICK["field"]), None, 1, True)


def _stack(observation):
    epoch = _epoch(observation)
    return Stack([epoch.field(epoch.null(None))])
