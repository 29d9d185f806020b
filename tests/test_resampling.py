"""Equally weighted samples from weighted ones."""

import numpy as np
import pytest

from orbits.resampling import effective, systematic


def test_equal_weights_are_all_kept(rng):
    assert effective(np.ones(7)) == pytest.approx(7)
    assert systematic(np.ones(7), rng).tolist() == list(range(7))


def test_each_is_drawn_as_often_as_its_weight_says(rng):
    """Evenly spaced steps: to within one, whatever the start."""
    weight = rng.exponential(size=200)
    chosen = systematic(weight, rng)
    times = np.bincount(chosen, minlength=200)
    assert len(chosen) == int(effective(weight))
    assert (np.abs(times - len(chosen) * weight / weight.sum()) < 1).all()
