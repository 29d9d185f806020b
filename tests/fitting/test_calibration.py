"""A seeded piece of the calibration of scripts/calibrations/orbits.py."""

from pathlib import Path

import numpy as np
from scipy.stats import kstest


def test_ranks_of_twenty_systems_are_uniform(monkeypatch):
    """7 + 7 + 6 systems: Kolmogorov-Smirnov, p above 1e-4 for each quantity ranked in all.

    With 7 quantities a correct fit fails for one seed in 1400.
    """
    monkeypatch.syspath_prepend(Path(__file__).resolve().parents[2] / "scripts")
    from calibrations import orbits as calibration

    rng = np.random.default_rng(42)
    table = []
    for count, kind in zip((7, 7, 6), calibration.KINDS.values(), strict=True):
        table += [calibration.ranks(kind, rng) for _ in range(count)]
    common = set.intersection(*(set(row) for row in table))
    assert len(common) == 7
    for name in sorted(common):
        # A random place within the rank's interval makes the discrete ranks continuous.
        found = (np.array([row[name] for row in table]) + rng.uniform(size=20)) / (
            calibration.SAMPLES + 1
        )
        assert kstest(found, "uniform").pvalue > 1e-4, name
