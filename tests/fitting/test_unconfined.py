"""Orbits that the data do not confine, against plain draws of the prior."""

import numpy as np
import pytest
from made_binaries import binary, moving, seen
from numpy.testing import assert_allclose

from orbits import Model, Priors, fit
from orbits.fitting import explore
from orbits.fitting.data import make_data
from orbits.fitting.evidence import Estimate, disagreement
from orbits.fitting.laplace import Normal
from orbits.fitting.merging import Run
from orbits.fitting.proposal import Proposal
from orbits.fitting.target import Target


def short_arc(seed, *, count=5, error=3.0):
    """A fifth of the period, with errors that leave the prior some thousandths of itself."""
    rng = np.random.default_rng(seed)
    positions = seen(binary(), count, rng, error=error, span=20.0)
    priors = Priors.for_data(
        positions, None, period=(30.0, 1000.0), semimajor_axis=(8.0, 80.0), eccentricity=(0.0, 0.9)
    )
    return positions, priors


def drawn_from_the_prior(positions, priors, count, rng):
    """ln evidence, its error, and draws of (ln P, e) with weights, by Campbell elements alone."""
    from orbits.elements import thiele_innes
    from orbits.kepler import orbital_plane

    log_period = rng.uniform(*np.log(priors.period), count)
    e = rng.uniform(*priors.eccentricity, count)
    a = np.exp(rng.uniform(*np.log(priors.semimajor_axis), count))
    node, argument, phase = rng.uniform(0, 2 * np.pi, (3, count))
    inclination = np.arccos(rng.uniform(-1, 1, count))
    A, B, F, G = thiele_innes(a, inclination, node, argument)
    square = np.zeros(count)
    for time, place, covariance in zip(
        positions.mjd, positions.xy, positions.covariance, strict=True
    ):
        period = np.exp(log_period)
        X, Y = orbital_plane(time, period, 60000 - phase / (2 * np.pi) * period, e)
        difference = place - np.column_stack([B * X + G * Y, A * X + F * Y])
        square += np.einsum("si,ij,sj->s", difference, np.linalg.inv(covariance), difference)
        square += np.linalg.slogdet(2 * np.pi * covariance)[1]
    weight = np.exp(-(square - square.min()) / 2)
    error = weight.std() / weight.mean() / np.sqrt(count)
    return np.log(weight.mean()) - square.min() / 2, error, log_period, e, weight / weight.sum()


@pytest.mark.parametrize("model", [Model(), Model(position_jitter=True)], ids=["plain", "jitter"])
def test_proposal_is_a_density(model):
    """The mean of prior / proposal over draws of the proposal is 1, within 5 errors."""
    positions, priors = short_arc(61)
    target = Target.prior(make_data(positions, None, None, priors, model), linear=True)
    points, weight = target.draw(20_000, np.random.default_rng(1))
    log_likelihood = target.log_likelihood(points)
    ok = np.isfinite(log_likelihood)
    ratio = np.zeros(len(points))
    ratio[ok] = np.exp(weight[ok] - log_likelihood[ok])
    assert abs(ratio.mean() - 1) < 5 * ratio.std() / np.sqrt(len(points))
    # And it is not just the prior: most draws lie where the prior alone would seldom lead.
    assert np.median(ratio[ok]) < 0.1


def test_short_arc_agrees_with_plain_draws_of_the_prior():
    """Evidence, by nested sampling and by its check, and the means of ln P and e: 5 errors."""
    positions, priors = short_arc(61)
    rng = np.random.default_rng(7)
    log_evidence, error, log_period, e, weight = drawn_from_the_prior(
        positions, priors, 1_000_000, rng
    )
    solution = fit(positions, priors=priors, live_points=100, rng=np.random.default_rng(3))
    account = solution.account
    assert any("do not confine" in note for note in account["notes"])
    assert abs(account["log_evidence"] - log_evidence) < 5 * np.hypot(
        account["log_evidence_err"], error
    )
    check = account["log_evidence_check"]
    assert abs(check["value"] - log_evidence) < 5 * np.hypot(check["error"], error)
    variance = np.square(weight).sum() + 1 / account["effective_samples"]
    for found, truth in ((np.log(solution.samples["period_d"]), log_period),
                         (solution.samples["eccentricity"], e)):  # fmt: skip
        mean = weight @ truth
        width = np.sqrt(weight @ (truth - mean) ** 2)
        assert_allclose(found.mean(), mean, atol=5 * width * np.sqrt(variance))


def test_estimates_of_the_evidence_that_disagree_are_said():
    """0.5 apart: 5 standard errors of 0.06 and 0.08 together, but 3.5 of 0.1 and 0.1."""

    def estimate(value, error):
        return Estimate(value=value, error=error, efficiency=0.5)

    assert disagreement(estimate(-11.7, 0.1), estimate(-12.2, 0.1)) == []
    (said,) = disagreement(estimate(-11.7, 0.06), estimate(-12.2, 0.08))
    assert "-11.70 +- 0.06" in said
    assert "-12.20 +- 0.08" in said


@pytest.mark.parametrize(
    ("efficiency", "drawn", "wide", "solutions", "confined", "checked", "said"),
    [
        (0.5, (-10, 0.1), None, (-10, 0.1), True, True, []),
        (0.5, (-12, 0.1), None, (-10, 0.1), True, True, ["a second way -12.00"]),
        # Distrusted: the search of the priors counts, unless the solutions find more.
        (0.01, (-13, 0.1), (-10, 0.2), None, False, False, ["No second way"]),
        (0.01, (-10, 0.1), (-10, 0.2), None, False, True, []),
        (0.01, (-10, 0.1), (-13, 0.4), (-10, 0.1), True, True, []),
        (0.01, (-10, 0.1), (-13, 0.4), (-13, 0.1), False, True, ["a second way -10.00"]),
        # A few draws of great weight are no reason to believe the solutions.
        (0.01, (-5, 0.8), (-10, 0.2), None, False, False, ["No second way"]),
    ],
)
def test_what_finds_more_evidence_counts(
    monkeypatch, efficiency, drawn, wide, solutions, confined, checked, said
):
    """The choice between solutions and priors, by evidences (value, error) that are made up."""
    rng = np.random.default_rng(11)
    velocities = moving(binary(), 15, rng)
    priors = Priors.for_data(None, velocities)
    data = make_data(None, velocities, None, priors, Model())
    size = data.space.dimensions
    centre = Normal(chart=0, mean=np.zeros(size), covariance=np.eye(size), log_weight=0.0)

    def run(target, label, work, rng):
        value, error = {"solutions": solutions, "priors": wide}[label]
        return Run(points=np.zeros((1, size)), log_weight=np.zeros(1), log_evidence=value,
                   log_evidence_error=error, calls=1, independent=np.full(1, 1e3))  # fmt: skip

    def importance(target, rng, count):
        return Estimate(value=drawn[0], error=drawn[1], efficiency=efficiency)

    monkeypatch.setattr(explore, "_run", run)
    monkeypatch.setattr(explore, "importance", importance)
    work = explore.Work(live_points=100)
    found = explore.explore(data, Proposal.around([centre], size), work, rng)
    assert found.target.confined == confined
    assert (found.check is not None) == checked
    assert len(found.notes) == len(said)
    for note, part in zip(found.notes, said, strict=True):
        assert part in note


def test_processes_give_the_same_runs(monkeypatch):
    """Two cores, each run in another process, digit by digit the same."""
    positions, priors = short_arc(61)
    data = make_data(positions, None, None, priors, Model())
    target = Target.prior(data, linear=True)
    monkeypatch.setattr(explore, "RUNS", 2)
    one, two = (
        explore._run(target, "priors", explore.Work(live_points=100, cores=cores),
                     np.random.default_rng(5))
        for cores in (1, 2)
    )  # fmt: skip
    assert one.log_evidence == two.log_evidence
    assert np.array_equal(one.points, two.points)
