"""The demonstration: everything from invented nights to masses, in one go."""

import numpy as np
import pandas as pd
import pytest

from orbits.cli.demo import demo
from orbits.demo import compare, scenario
from orbits.fitting.solution import Solution


def test_the_demo_finds_what_was_put_in(tmp_path, capsys):
    demo(output=tmp_path)
    results = tmp_path / "harrow-7-results"
    rows = compare(scenario(), Solution.read(results).samples)
    assert len(rows) == 14
    # Each lies within 3 sigma; the seed is the one that users see.
    assert max(abs(row.deviation) for row in rows) < 3
    assert {path.suffix for path in results.iterdir()} >= {".ecsv", ".json", ".png"}
    assert "off by" in capsys.readouterr().out


def test_comparison_counts_modulo_a_turn(rng):
    """A node just below 360 deg is near one just above 0; the truth is 63 deg."""
    samples = pd.DataFrame(
        {
            "node_deg": (63.0 + 360.0 + rng.normal(1.0, 0.5, 20_000)) % 360.0,
            "periastron_mjd": 60312.8 + 7 * 117.3 + rng.normal(0.0, 0.1, 20_000),
        }
    )
    rows = {row.name: row for row in compare(scenario(), samples)}
    # A median of n normal draws scatters by sqrt(pi / 2 n) sigma: 4 of those.
    slack = 4 * np.sqrt(np.pi / 2 / 20_000)
    assert rows["node_deg"].deviation == pytest.approx(2.0, abs=3 * slack)
    assert rows["periastron_mjd"].deviation == pytest.approx(0.0, abs=slack)
    assert rows["periastron_mjd"].error == pytest.approx(0.1, rel=0.05)
