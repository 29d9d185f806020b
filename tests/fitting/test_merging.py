"""Merged runs of nested sampling against evidences known exactly."""

from dataclasses import replace

import numpy as np
from numpy.testing import assert_allclose
from scipy.stats import kstest

from orbits.fitting.merging import log_widths, merge
from orbits.fitting.nested import Part

WIDTH = 0.01


def run(rng, *, live=20, flat=0.0, spike=0.0):
    """Exact nested sampling of ln L = -X / WIDTH, X uniform, and L = 0 for X above 1 - flat.

    With `spike`, ln L is higher by so much below X = 1e-5.
    """
    x = rng.uniform(size=live)
    birth = np.full(live, -np.inf)

    def value(x):
        return np.where(x > 1 - flat, -1e200, -x / WIDTH + spike * (x < 1e-5))

    dead, died, born = [], [], []
    while (x > 1 - flat).any() or x.max() > (1e-6 if spike else WIDTH / 10):
        worst = np.argmax(x)
        level = float(value(x[worst]))
        dead.append(x[worst]), died.append(level), born.append(birth[worst])
        x[worst] = rng.uniform(0, min(x[worst], 1 - flat))
        birth[worst] = level
    order = np.argsort(-x)
    x, birth = x[order], birth[order]
    return Part(
        points=np.concatenate([dead, x])[:, None],
        value=np.concatenate([died, value(x)]),
        birth=np.concatenate([born, birth]),
        live_points=live,
        calls=1,
    )


def together(parts):
    """The parts merged; they should agree about where the points are."""
    return merge(parts, lambda points: points)


def test_runs_that_stay_in_different_places_are_worth_few_samples():
    """Half of the runs have their points at X, the others at X + 1: two places, and no third."""
    rng = np.random.default_rng(8)
    parts = [run(rng, live=100) for _ in range(8)]
    alike = together(parts)
    assert not alike.differ.any()
    assert alike.effective_samples == alike.kish
    moved = [replace(part, points=part.points + k % 2) for k, part in enumerate(parts)]
    split = together(moved)
    assert split.differ.all()
    # Eight means at 0 or 1, of a spread of 0.5 each, are worth about eight samples.
    assert 4 < split.effective_samples < 16
    assert split.kish == alike.kish


def test_evidence_and_its_error():
    """8 runs merged, 100 times: no bias, and the scatter that is stated.

    The mean is good to 1 / sqrt(100) = 0.1 of an error, the scatter to 1 / sqrt(200) = 7 %. The
    trapezoidal rule and the mean of a logarithm bias ln Z by about half its variance. The error
    takes the larger of theory and scatter and so is stated up to a fifth too large.
    """
    rng = np.random.default_rng(4)
    for flat in (0.0, 0.6):
        exact = np.log(WIDTH * (1 - np.exp(-(1 - flat) / WIDTH)))
        found = [together([run(rng, flat=flat) for _ in range(8)]) for _ in range(100)]
        z = np.array([one.log_evidence for one in found])
        stated = np.sqrt(np.mean([one.log_evidence_error**2 for one in found]))
        assert abs(z.mean() - exact) < 5 * z.std() / np.sqrt(100) + z.var() / 2
        assert 0.65 < z.std() / stated < 1.25


def test_runs_that_disagree_make_the_error_larger():
    """One of eight runs finds a spike of e^12 * 1e-5 = 1.6, 160 times the rest of the evidence.

    Without it ln Z is lower by more than 2; theory alone says less than 0.5.
    """
    rng = np.random.default_rng(5)
    parts = [run(rng) for _ in range(8)]
    assert together(parts).log_evidence_error < 0.5
    assert together([*parts[:7], run(rng, spike=12.0)]).log_evidence_error > 1.0


def test_posterior_is_the_exponential_that_it_should_be():
    """X follows a truncated exponential: Kolmogorov-Smirnov on as many samples as it is worth."""
    rng = np.random.default_rng(6)
    merged = together([run(rng, live=100) for _ in range(8)])
    count = int(merged.effective_samples)
    chosen = rng.choice(len(merged.points), count, p=np.exp(merged.log_weight))
    assert kstest(merged.points[chosen, 0], "expon", args=(0, WIDTH)).pvalue > 1e-4


def test_volume_is_shared_out_completely():
    """All points born together of equal value: the first takes 1 / (n + 1), and so on to 1."""
    widths = np.exp(log_widths(np.zeros(4), np.full(4, -np.inf)))
    assert_allclose(widths.sum(), 1.0)
    # Contours at 4/5, 3/5, 2/5, 1/5: the inner points have a fifth each, the ends the rest.
    assert_allclose(widths, [0.3, 0.2, 0.2, 0.3])
