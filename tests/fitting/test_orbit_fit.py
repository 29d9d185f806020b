"""Whole fits against the truth, brute-force integrals, and published systems."""

import json
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from made_binaries import binary, moving, seen, text, with_false_places
from numpy.testing import assert_allclose
from scipy.stats import chi2

from orbits import InputError, Model, NothingFound, Parallax, Priors, Solution, Velocities, fit
from orbits.fitting.data import make_data
from orbits.fitting.refine import refine
from orbits.fitting.scan import scan
from orbits.masses import amplitudes, double_lined_axis

PERIODS = {"period": (20.0, 1000.0)}


def solve(positions, velocities=None, *, seed=3, given=None, **options):
    given = PERIODS if given is None else given
    priors = Priors.for_data(positions, velocities, **given)
    rng = np.random.default_rng(seed)
    options = {"live_points": 300} | options
    return fit(positions, velocities=velocities, priors=priors, rng=rng, **options)


def holds(solution, name, truth, sigmas=4.0):
    """Whether a truth lies within `sigmas` of the interval: 1 false alarm in 16,000."""
    median, plus, minus = solution.summary[name]
    return -sigmas * minus <= truth - median <= sigmas * plus


@pytest.fixture(scope="module")
def joint():
    rng = np.random.default_rng(11)
    return solve(seen(binary(), 12, rng), moving(binary(), 15, rng))


def test_joint_fit_finds_the_truth(joint):
    for name, truth in (("period_d", 104.0), ("eccentricity", 0.35), ("semimajor_axis_mas", 20.0),
                        ("inclination_deg", 137.0), ("node_deg", 40.0), ("argument_deg", 88.0),
                        ("k1_kms", 25.0), ("k2_kms", 27.0), ("gamma_kms", 12.0)):  # fmt: skip
        assert holds(joint, name, truth), name
    axis = double_lined_axis(104.0, 0.35, np.radians(137.0), 25.0, 27.0)
    assert holds(joint, "parallax_mas", 20.0 / axis)
    assert holds(joint, "semimajor_axis_au", axis)
    reduced = joint.account["chi2"] / joint.account["dof"]
    assert (
        0.4 < reduced < 1.8
    )  # 44 degrees of freedom: 4 standard deviations of chi2 / dof are 0.85
    assert joint.account["undetermined"] == []


def test_nested_sampling_agrees_with_plain_draws(joint):
    """ln evidence by dynesty and by importance sampling of the proposal, within 5 errors."""
    account = joint.account
    check = account["log_evidence_check"]
    error = np.hypot(account["log_evidence_err"], check["error"])
    assert abs(account["log_evidence"] - check["value"]) < 5 * error


def test_solution_survives_its_folder(joint, tmp_path):
    joint.write(tmp_path)
    again = Solution.read(tmp_path)
    assert again.to_json() == json.loads((tmp_path / "orbit.json").read_text())
    assert_allclose(again.samples.to_numpy(), joint.samples.to_numpy(), rtol=1e-12)
    assert_allclose(again.positions.xy, joint.positions.xy, atol=1e-9)
    with pytest.raises(InputError, match="exists already"):
        joint.write(tmp_path)
    with pytest.raises(InputError, match="run `nodeline orbit` first"):
        Solution.read(tmp_path / "none")


def test_pictures_show_what_was_found(joint):
    """The scan's curve is lowest at the period; the correlation shown is that of the samples."""
    from orbits.plots.joint import draw_joint
    from orbits.plots.periods import draw_periods

    axes = draw_periods(joint).axes[0]
    period, chi2 = axes.lines[0].get_data()
    assert abs(period[np.argmin(chi2)] - 104.0) < 1.0
    assert any("100 %" in text.get_text() for text in axes.texts)
    corner = draw_joint(joint)
    count = round(len(corner.axes) ** 0.5)
    assert corner.axes[-count].get_xlabel() == "period (d)"
    expected = np.corrcoef(joint.samples["period_d"], joint.samples["eccentricity"])[0, 1]
    shown = corner.axes[1].texts[0].get_text().replace("\N{MINUS SIGN}", "-")
    assert abs(float(shown) - expected) <= 0.0051  # two decimals are shown


def test_single_lines_and_parallax_give_both_masses():
    rng = np.random.default_rng(12)
    k1, _ = amplitudes(104.0, 0.35, np.radians(137.0), 2.0, 1.2)
    orbit = binary(semimajor_axis=30.0)
    axis = double_lined_axis(104.0, 0.35, np.radians(137.0), *amplitudes(
        104.0, 0.35, np.radians(137.0), 2.0, 1.2))  # fmt: skip
    velocities = moving(orbit, 20, rng, k1=float(k1))
    velocities = velocities.select(velocities.star == 0)
    parallax = Parallax(value=30.0 / float(axis), error=0.3)
    solution = solve(seen(orbit, 12, rng), velocities, parallax=parallax)
    assert holds(solution, "primary_msun", 2.0)
    assert holds(solution, "companion_msun", 1.2)
    assert "k2_kms" not in solution.summary


def test_positions_alone_know_the_node_by_half_a_turn():
    rng = np.random.default_rng(13)
    solution = solve(seen(binary(node=220.0, argument=268.0), 12, rng))
    assert holds(solution, "node_deg", 40.0)
    assert holds(solution, "argument_deg", 88.0)
    assert any("half a turn" in note for note in solution.account["notes"])
    assert not any("msun" in name or "kms" in name for name in solution.summary)


def integrate(velocities, periods, amplitude, systemic):
    """ln evidence and posterior density along the period of a circular single-lined orbit.

    A plain sum over period, phase and ln K; the systemic velocity makes the covariance dense.
    """
    middle = (velocities.mjd.min() + velocities.mjd.max()) / 2
    covariance = np.diag(velocities.error**2) + systemic**2
    inverse = np.linalg.inv(covariance)
    phase = np.linspace(0, 2 * np.pi, 180, endpoint=False)[:, None]
    k = np.exp(np.linspace(*np.log(amplitude), 150))
    y, density = velocities.velocity, np.empty(len(periods))
    for i, period in enumerate(periods):
        shape = -np.cos(phase + 2 * np.pi * (velocities.mjd - middle) / period)
        a = np.einsum("li,ij,lj->l", shape, inverse, shape)[:, None]
        b = (shape @ inverse @ y)[:, None]
        density[i] = np.exp(k * b - 0.5 * k**2 * a).mean()
    constant = -0.5 * (y @ inverse @ y + np.linalg.slogdet(2 * np.pi * covariance)[1])
    return np.log(density.mean()) + constant, density / density.sum()


def test_three_aliased_periods_have_their_weights():
    """Two short runs a hundred days apart: weights and evidence of a brute-force integral."""
    rng = np.random.default_rng(0)
    mjd = 60000 + np.array([0.0, 1.3, 2.9, 4.1, 100.0, 101.7, 103.2, 104.4])
    velocity = 5 + 10 * np.cos(2 * np.pi * (mjd - 60003) / 9.7) + rng.normal(size=8)
    velocities = Velocities(
        mjd=mjd,
        velocity=velocity,
        error=np.ones(8),
        star=np.zeros(8, dtype=int),
        instrument=text(8),
        source=text(8),
    )
    bounds, amplitude = (8.4, 11.4), (1.0, 50.0)
    given = {"period": bounds, "amplitude": amplitude, "systemic": 100.0}
    solution = solve(None, velocities, given=given, model=Model(circular=True), live_points=500)
    periods = np.exp(np.linspace(*np.log(bounds), 1500))
    log_evidence, density = integrate(velocities, periods, amplitude, 100.0)
    borders = (8.4, 9.25, 10.2, 11.4)
    expected = [density[(periods >= a) & (periods < b)].sum() for a, b in pairwise(borders)]
    found = np.zeros(3)
    for one in solution.account["solutions"]:
        found[np.searchsorted(borders, one["elements"]["period_d"]["median"]) - 1] += one["weight"]
    assert (np.array(expected) > 0.15).all()  # three that count
    assert_allclose(found, expected, atol=0.1)
    error = solution.account["log_evidence_err"]
    assert abs(solution.account["log_evidence"] - log_evidence) < 5 * error


@pytest.mark.parametrize("seed", [50, 51])
def test_alternatives_and_outliers_are_named(seed):
    """12 nights, each with a false place; 4 of them 20 sigma off: all named, masses unbiased."""
    rng = np.random.default_rng(seed)
    clean, velocities = seen(binary(), 12, rng), moving(binary(), 20, rng)
    wrong = rng.choice(12, 4, replace=False)
    turn = rng.uniform(0, 2 * np.pi, 4)
    xy = clean.xy.copy()
    xy[wrong] += 20 * 0.1 * np.column_stack([np.cos(turn), np.sin(turn)])
    positions = with_false_places(replace(clean, xy=xy), rng)
    solution = solve(positions, velocities, model=Model(outliers=True))
    nights = {night["night"]: night for night in solution.account["nights"]}
    for i in range(12):
        night = nights[f"night {i}"]
        assert (night["outlier_probability"] > 0.9) == (i in wrong)
        if i not in wrong:
            assert night["alternatives"][0]["probability"] > 0.9
    axis = double_lined_axis(104.0, 0.35, np.radians(137.0), 25.0, 27.0)
    total = 4 * np.pi**2 * axis**3 / 104.0**2 / 2.959122082855911e-4  # k^2, au3 d-2
    assert holds(solution, "total_msun", total)


def test_further_knowledge_is_used():
    """An inclination known to 0.01 deg beforehand stays that sharp."""
    rng = np.random.default_rng(14)
    given = PERIODS | {"normal": {"inclination_deg": (137.0, 0.01)}}
    solution = solve(seen(binary(), 12, rng), given=given)
    _, plus, minus = solution.summary["inclination_deg"]
    assert_allclose([plus, minus], 0.01, rtol=0.2)  # a 68 % interval from about 700 samples
    with pytest.raises(InputError, match="not among what these data give"):
        solve(seen(binary(), 12, rng), given=PERIODS | {"normal": {"k1_kms": (1.0, 1.0)}})


@pytest.mark.parametrize(
    "given",
    [
        {"inclination": 90.0},
        {"inclination": 0.0},
        {"eccentricity": 0.0},
        {"eccentricity": 0.95},
        {"eccentricity": 0.99},
    ],
    ids=["edge-on", "face-on", "circular", "eccentric", "very eccentric"],
)
def test_hard_geometries(given):
    rng = np.random.default_rng(15)
    solution = solve(seen(binary(**given), 16, rng))
    assert holds(solution, "period_d", 104.0)
    for name, value in given.items():
        column = {"inclination": "inclination_deg"}.get(name, name)
        if value == 0.0:  # the end of the range, which no sample reaches: the scale of the errors
            assert solution.summary[column][0] < {"eccentricity": 0.01, "inclination": 10.0}[name]
        else:
            assert holds(solution, column, value)
    if given.get("eccentricity") == 0.0:
        # Errors of 0.1 mas on 20 mas leave e to 0.002 or so: its direction is all but free.
        assert sum(solution.summary["argument_deg"][1:]) > 30.0


def test_errors_of_wildly_different_size():
    """From a microarcsecond to more than the orbit: the good nights decide."""
    rng = np.random.default_rng(18)
    solution = solve(seen(binary(), 16, rng, error=np.geomspace(1e-3, 30.0, 16)))
    for name, truth in {"period_d": 104.0, "semimajor_axis_mas": 20.0}.items():
        assert holds(solution, name, truth)


def test_period_of_half_a_day():
    rng = np.random.default_rng(19)
    solution = solve(seen(binary(period=0.52), 16, rng, span=30.0), given={"period": (0.5, 100.0)})
    assert holds(solution, "period_d", 0.52)


def test_period_of_a_hundred_thousand_years():
    """Twenty years of it are no orbit, and nothing pretends that they were."""
    rng = np.random.default_rng(20)
    slow = binary(period=1e5 * 365.25, semimajor_axis=5000.0)
    solution = solve(seen(slow, 12, rng, span=7300.0), given={"period": (1000.0, 1e9)})
    assert any("do not confine" in note for note in solution.account["notes"])
    assert holds(solution, "period_d", 1e5 * 365.25)
    # A line and its first bend leave the period open by far more than a tenth.
    low, high = solution.samples["period_d"].quantile([0.16, 0.84])
    assert high > 1.5 * low
    assert "period_d" in solution.account["undetermined"]


@pytest.mark.parametrize("seed", [4, 101, 163, 196])
def test_extremely_eccentric_orbits_are_not_missed(seed):
    """e = 0.995 in 14 positions, four of 200 cases that need starts of several eccentricities.

    Least squares comes to the bottom: chi-square of 28 data, at the 1e-4 limit.
    """
    rng = np.random.default_rng(1000 + seed)
    orbit = binary(eccentricity=0.995, periastron=60000 + 104 * rng.uniform(),
                   inclination=np.degrees(np.arccos(rng.uniform(-1, 1))))  # fmt: skip
    positions = seen(orbit, 14, rng)
    data = make_data(positions, None, None, Priors.for_data(positions, None, **PERIODS), Model())
    rng = np.random.default_rng(0)
    found = refine(data, scan(data, rng=rng), most=40, rng=rng)
    constant = np.linalg.slogdet(data.positions.covariance)[1].sum()
    assert found.cost[0] - constant < chi2.ppf(1 - 1e-4, 28)


def test_order_of_the_rows_does_not_matter():
    rng = np.random.default_rng(16)
    positions = seen(binary(), 12, rng)
    one = solve(positions).summary["period_d"]
    two = solve(positions.select(rng.permutation(12))).summary["period_d"]
    assert_allclose(one, two, rtol=1e-9)


def test_data_that_cannot_show_an_orbit():
    rng = np.random.default_rng(17)
    positions = seen(binary(), 12, rng)
    with pytest.raises(InputError, match="2 nights with a position"):
        solve(positions.select(np.arange(2)))
    still = replace(positions, xy=np.tile(positions.xy[:1], (12, 1)))
    with pytest.raises(NothingFound, match="one place that does not move"):
        solve(still)
    with pytest.raises(InputError, match="3 velocities and no positions"):
        solve(None, moving(binary(), 12, rng).select(np.arange(3)))


# P (d), T (MJD), e, a (mas), i, node, argument of the companion (deg), K1, K2 (km/s), and the
# published masses and parallax with their errors; sources in test_masses.
PUBLISHED = {
    "Capella": ((104.02128, 48147.1, 0.00089, 56.442, 137.156, 40.522, 162.6, 25.9611, 26.860),
                (2.5687, 0.0074, 2.4828, 0.0067, 75.9936, 0.087)),
    "sigma Ori": ((143.2002, 56600.0, 0.77896, 4.2860, 56.378, 30.0, 199.0, 72.03, 95.53),
                  (16.99, 0.20, 12.81, 0.18, 2.5806, 0.0088)),
    "lambda Vir": ((206.7321, 53069.8, 0.0610, 19.759, 109.86, 196.40, 272.28, 24.78, 27.308),
                   (1.897, 0.016, 1.721, 0.023, 18.81, 0.10)),
}  # fmt: skip


@pytest.mark.parametrize("name", PUBLISHED)
def test_published_systems(name):
    """16 nights at 0.5 % of the axis, 20 velocities of each star at 0.1 km/s: masses come back.

    Within 2 sigma of the fit's and the published errors together. Where the published argument or
    node is not known, one is invented; masses do not depend on it.
    """
    (period, passage, e, a, i, node, argument, k1, k2), published = PUBLISHED[name]
    orbit = binary(period=period, periastron=passage, eccentricity=e, semimajor_axis=a,
                   inclination=i, node=node, argument=argument)  # fmt: skip
    rng = np.random.default_rng(19)
    span = 6 * period
    solution = solve(
        seen(orbit, 16, rng, error=0.005 * a, span=span),
        moving(orbit, 20, rng, k1=k1, k2=k2, error=0.1, span=span),
    )
    names = ("primary_msun", "companion_msun", "parallax_mas")
    for column, value, error in zip(names, published[::2], published[1::2], strict=True):
        median, plus, minus = solution.summary[column]
        assert abs(median - value) < 2 * np.hypot(max(plus, minus), error)
