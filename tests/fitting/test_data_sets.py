"""Every kind of data and of nuisance, each in a fit that has to find what was put in."""

from dataclasses import replace

import astropy.units as u
import numpy as np
import pytest
from astropy.time import Time
from made_binaries import binary, moving, seen
from numpy.testing import assert_allclose
from scipy.stats import chi2

from orbits import Model, Parallax, Priors, fit, masses
from orbits.bundle import Bundle

K1, K2 = (float(k) for k in masses.amplitudes(104.0, 0.35, np.radians(137.0), 1.8, 1.2))
AXIS = float(masses.kepler_axis(104.0, 3.0))


def solve(positions, velocities=None, **options):
    priors = Priors.for_data(positions, velocities, period=(20.0, 1000.0))
    options = {"live_points": 200, "rng": np.random.default_rng(3), "priors": priors} | options
    return fit(positions, velocities=velocities, **options)


def holds(solution, name, truth, sigmas=4.0):
    """Whether a truth lies within `sigmas` of the interval: 1 false alarm in 16,000."""
    median, plus, minus = solution.summary[name]
    return -sigmas * minus <= truth - median <= sigmas * plus


def named(table, *names):
    """The same data, their rows in turn from each of the instruments."""
    return replace(table, instrument=np.resize(np.array(names, dtype=object), len(table)))


@pytest.fixture(scope="module")
def several():
    """Two instruments each: one scaled by 1.01 and turned by 0.7 deg, one shifted; and a drift."""
    rng = np.random.default_rng(21)
    positions = named(seen(binary(), 24, rng), "wide", "narrow")
    turn, scaled = np.radians(0.7), positions.instrument == "narrow"
    xy = positions.xy.copy()
    # The position angle grows: from North through East.
    rotation = np.array([[np.cos(turn), np.sin(turn)], [-np.sin(turn), np.cos(turn)]])
    xy[scaled] = 1.01 * xy[scaled] @ rotation.T
    velocities = named(moving(binary(), 24, rng, k1=K1, k2=K2), "old", "new", "new")
    early = velocities.instrument[np.argmin(velocities.mjd)]
    times = np.concatenate([positions.mjd, velocities.mjd])
    years = (velocities.mjd - (times.min() + times.max()) / 2) / 365.25
    shifted = velocities.velocity + 3.0 * (velocities.instrument != early) - 0.8 * years
    return replace(positions, xy=xy), replace(velocities, velocity=shifted), early


@pytest.fixture(scope="module")
def solution(several):
    positions, velocities, _ = several
    model = Model(drift=True, scale=("narrow",), position_angle_zero=("narrow",))
    return solve(positions, velocities, model=model)


def test_errors_of_instruments_and_a_drift_are_found(solution, several):
    late = ({"old", "new"} - {several[2]}).pop()
    truths = {"scale_narrow": 1.01, "angle_narrow_deg": 0.7, f"zero_point_{late}_kms": 3.0,
              "drift_kms_per_year": -0.8, "gamma_kms": 12.0, "period_d": 104.0,
              "semimajor_axis_mas": 20.0, "node_deg": 40.0, "k1_kms": K1}  # fmt: skip
    for name, truth in truths.items():
        assert holds(solution, name, truth), name
    _, plus, minus = solution.summary["scale_narrow"]
    assert plus + minus < 0.008  # and not by being vague: the prior alone has 0.02
    assert f"zero_point_{several[2]}_kms" not in solution.summary


def test_residuals_and_chi_square_by_data_set(solution):
    """Residuals of the best sample by its elements alone; all within chi-square's 1e-4 limits."""
    left = solution.residuals
    assert len(left["positions"]) == 24
    assert len(left["velocities"]) == 48
    sets = solution.account["data"]
    assert set(sets["positions"]["instruments"]) == {"wide", "narrow"}
    assert set(sets["velocities"]["instruments"]) == {"old", "new"}
    for name, table in left.items():
        parts = sets[name]["instruments"]
        assert_allclose(sum(part["chi2"] for part in parts.values()), sets[name]["chi2"])
        for instrument, part in parts.items():
            mine = table[table["instrument"] == instrument]
            count = part["data"]
            assert count == len(mine) * (2 if name == "positions" else 1)
            low, high = chi2.ppf([1e-4, 1 - 1e-4], [count - 7, count])
            assert low < mine["chi2"].sum() < high
            # The account takes the zero points that suit best, the sample has drawn ones: q more.
            assert abs(mine["chi2"].sum() - part["chi2"]) < (1e-6 if name == "positions" else 20)
    wide = left["positions"]["instrument"] == "wide"
    x, y = solution.elements.offsets(Time(solution.positions.mjd, format="mjd", scale="tdb"))
    expected = solution.positions.xy - np.column_stack([x.to_value(u.mas), y.to_value(u.mas)])
    assert_allclose(left["positions"][["east_mas", "north_mas"]][wide], expected[wide], atol=1e-9)
    total = sum(part["chi2"] for part in sets.values())
    assert_allclose(total, solution.account["chi2"])
    # 11 elements and amplitudes less the parallax, 2 of calibration, gamma, zero point, drift.
    assert solution.account["dof"] == 48 + 48 - 9 - 2 - 3


def test_drawings_hold_positions_of_a_true_scale_against_the_orbit(solution):
    """The places that are drawn, less the orbit: as large as the residuals, to first order."""
    bundle = Bundle.of_solution(solution)
    drawn = bundle.position_residuals()
    left = solution.residuals["positions"][["east_mas", "north_mas"]].to_numpy()
    # They differ by the instrument's own scale and turn of 0.01: of 0.3 mas, 0.006 mas at most.
    assert_allclose(drawn, left, atol=0.006)
    raw = solution.positions.xy - np.column_stack(
        [v[0] for v in bundle.best.offsets(solution.positions.mjd)]
    )
    assert np.abs(raw - left).max() > 0.1  # uncorrected they would miss the orbit


def test_correlations_and_the_next_periastron(solution, several):
    matrix = solution.correlation
    expected = np.corrcoef(solution.samples["k1_kms"], solution.samples["primary_msun"])[0, 1]
    assert_allclose(matrix.loc["k1_kms", "primary_msun"], expected)
    last = max(several[0].mjd.max(), several[1].mjd.max())
    passage = solution.summary["next_periastron_mjd"][0]
    assert last < passage < last + 104.0
    assert_allclose((passage - 60010.0) / 104.0 % 1.0 % 0.99, 0, atol=0.01)
    where = Time(passage, format="mjd", scale="tdb")
    separation = binary().position(where)[0].to_value(u.mas)
    assert holds(solution, "periastron_separation_mas", separation)


def test_scatter_beyond_the_errors_is_found_by_instrument():
    """Extra errors of 0.4 mas and 1.5 km/s of one instrument each, none of the other."""
    rng = np.random.default_rng(22)
    positions = named(seen(binary(), 30, rng), "good", "bad")
    velocities = named(moving(binary(), 30, rng, k1=K1, k2=K2), "calm", "noisy")
    bad, noisy = positions.instrument == "bad", velocities.instrument == "noisy"
    xy = positions.xy + 0.4 * bad[:, None] * rng.normal(size=(30, 2))
    positions = replace(positions, xy=xy)
    velocities = replace(
        velocities, velocity=velocities.velocity + 1.5 * noisy * rng.normal(size=60)
    )
    found = solve(positions, velocities, model=Model(position_jitter=True, velocity_jitter=True))
    assert holds(found, "position_jitter_bad_mas", 0.4)
    assert holds(found, "velocity_jitter_noisy_kms", 1.5)
    # 15 nights tell the scatter of 0.1 mas to 13 %: an extra error is below about that.
    assert found.samples["position_jitter_good_mas"].quantile(0.9) < 0.1
    assert found.samples["velocity_jitter_calm_kms"].quantile(0.9) < 0.3
    assert holds(found, "period_d", 104.0)


def test_differences_of_velocities_give_the_total_mass():
    rng = np.random.default_rng(23)
    both = moving(binary(), 20, rng, k1=K1, k2=K2)
    difference = both.select(both.star == 0)
    change = both.velocity[both.star == 1] - both.velocity[both.star == 0]
    difference = replace(difference, velocity=change, error=np.full(20, 0.3 * np.sqrt(2)),
                         star=np.full(20, 2))  # fmt: skip
    solution = solve(seen(binary(), 12, rng), difference)
    assert holds(solution, "k_sum_kms", K1 + K2)
    assert holds(solution, "total_msun", 3.0)
    assert holds(solution, "parallax_mas", 20.0 / AXIS)
    for absent in ("k1_kms", "k2_kms", "primary_msun", "mass_ratio", "gamma_kms"):
        assert absent not in solution.summary
    square = solution.residuals["velocities"]["chi2"].sum()
    assert chi2.ppf(1e-4, 13) < square < chi2.ppf(1 - 1e-4, 20)


@pytest.mark.parametrize("stars", [(0,), (1,), (0, 1)], ids=["primary", "companion", "both"])
def test_velocities_alone(stars):
    """Mass function, or masses times sin^3 i; nothing that needs the sky."""
    rng = np.random.default_rng(24)
    velocities = moving(binary(), 25, rng, k1=K1, k2=K2)
    solution = solve(None, velocities.select(np.isin(velocities.star, stars)))
    sine = np.sin(np.radians(137.0)) ** 3
    if len(stars) == 2:
        assert holds(solution, "primary_sin3i_msun", 1.8 * sine)
        assert holds(solution, "companion_sin3i_msun", 1.2 * sine)
        assert holds(solution, "mass_ratio", 1.2 / 1.8)
        assert "mass_function_msun" not in solution.summary
    else:
        other = 1.2 if stars == (0,) else 1.8
        assert holds(solution, "mass_function_msun", other**3 * sine / 3.0**2)
        assert "mass_ratio" not in solution.summary
    assert holds(solution, "argument_deg", 88.0)
    assert not any("mas" in name.split("_") or "node" in name for name in solution.summary)
    assert solution.elements is None


def test_positions_and_a_parallax_give_the_total_mass():
    rng = np.random.default_rng(25)
    solution = solve(seen(binary(), 12, rng), parallax=Parallax(value=20 / AXIS, error=0.2))
    assert holds(solution, "total_msun", 3.0)
    # The parallax meets no other datum: it comes out as it went in. 900 samples or so.
    _, plus, minus = solution.summary["parallax_mas"]
    assert_allclose([plus, minus], 0.2, rtol=0.2)
    assert "primary_msun" not in solution.summary


def test_a_circular_model_has_its_node_for_a_periastron():
    rng = np.random.default_rng(26)
    orbit = binary(eccentricity=0.0, argument=0.0)
    velocities = moving(orbit, 15, rng)
    solution = solve(seen(orbit, 12, rng), velocities, model=Model(circular=True))
    assert set(solution.samples["argument_deg"]) == {0.0}
    assert set(solution.samples["eccentricity"]) == {0.0}
    passage = solution.summary["periastron_mjd"][0]
    assert_allclose((passage - 60010.0) / 104.0 % 1.0 % 0.995, 0, atol=0.005)
    assert any("stands for the passage of the node" in note for note in solution.account["notes"])
