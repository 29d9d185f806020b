"""The ranges that are searched where none are given, as the docstring of `for_data` states them."""

from dataclasses import replace

import numpy as np
import pytest
from made_binaries import binary, moving

from orbits import Priors


@pytest.mark.parametrize(
    ("days", "shortest"),
    [
        ([0.0, 30.0, 62.0, 100.0], 10.0),  # a tenth of the span is less than any interval
        ([0.0, 30.0, 34.0, 100.0], 4.0),  # an interval is less
        ([0.0, 0.1, 30.0, 34.0, 100.0], 4.0),  # two exposures of one night are no interval
        ([0.0, 0.3, 50.0, 100.0], 0.5),
    ],
)
def test_periods_suit_the_dates(days, shortest):
    velocities = moving(binary(), len(days), np.random.default_rng(1))
    velocities = velocities.select(velocities.star == 0)
    dated = replace(velocities, mjd=60000.0 + np.array(days))
    # The dates are rounded to 7e-12 d each, and the shortest interval, 4 d, takes two of them.
    assert Priors.for_data(None, dated).period == pytest.approx((shortest, 1e5), rel=1e-11)
