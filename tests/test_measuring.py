"""From the nights of a system to a table of positions."""

from dataclasses import replace

import astropy.units as u
import numpy as np
import pytest
from astropy.time import Time

from orbits import NothingFound, read_positions, read_system, write_positions
from orbits.demo import scenario
from orbits.measuring import measure, positions
from orbits.simulation.outputs import simulate


@pytest.fixture(scope="module")
def three_nights():
    whole = scenario()
    return replace(whole, nights=replace(whole.nights, dates=whole.nights.dates[:3]))


def measured(plan, folder, seed=3):
    system = read_system(simulate(plan, folder, rng=np.random.default_rng(seed)))
    return measure(system, rng=np.random.default_rng(seed))


def test_positions_are_where_the_orbit_was(three_nights, tmp_path):
    nights = measured(three_nights, tmp_path)
    assert [night.detected for night in nights] == [True] * 3
    sources = dict.fromkeys(positions(nights).source)
    assert list(sources) == [path.name for path in sorted(tmp_path.glob("nights/*.fits"))]
    path = tmp_path / "positions.ecsv"
    write_positions(path, positions(nights))
    table = read_positions(path)
    best = table.select(table.weight > 0.5)
    assert len(best) == 3
    x, y = three_nights.elements.offsets(Time(best.mjd, format="mjd", scale="tdb"))
    off = best.xy - np.stack([x.to_value(u.mas), y.to_value(u.mas)], axis=-1)
    chi2 = np.einsum("ni,nij,nj->", off, np.linalg.inv(best.covariance), off)
    # Six offsets: chi-square stays below 27.9 in all but one of 10,000 seeds.
    assert chi2 < 27.9


def test_no_companion_is_claimed_where_there_is_none(three_nights, tmp_path):
    alone = replace(
        three_nights,
        light=replace(three_nights.light, contrast=1e-6),
        nights=replace(three_nights.nights, dates=three_nights.nights.dates[:1]),
    )
    nights = measured(alone, tmp_path)
    assert not any(night.detected for night in nights)
    with pytest.raises(NothingFound, match="none of 1 nights shows a companion"):
        positions(nights)
