"""From the nights of a system to a table of positions."""

from dataclasses import replace

import astropy.units as u
import numpy as np
import pytest
from astropy.time import Time
from numpy.testing import assert_allclose

from orbits import (
    ErrorModel,
    NothingFound,
    read,
    read_positions,
    read_system,
    search,
    write_positions,
)
from orbits.demo import scenario
from orbits.measuring import measure, observations, positions
from orbits.simulation.nights import Spectrum
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


def test_errors_and_observables_are_those_of_the_system_file(three_nights, tmp_path):
    path = simulate(three_nights, tmp_path, rng=np.random.default_rng(3))
    lines = 'stations = ["N1", "E2", "S1"]\nwavelengths = [1.5, 1.65]\nbaselines = [50, 500]\n'
    lines += 'instrument = "THICKET_H"\nuse = ["t3"]\n'
    lines += "error_scale = {t3 = 2.0}\nerror_floor = {t3 = 5.0}\n"
    path.write_text(path.read_text().replace("[nights]\n", f"[nights]\n{lines}"))
    plain = read(tmp_path / "nights" / "01-2024-01-11.fits")
    seen = observations(read_system(path))[0]
    assert len(seen.v2) == 0
    assert len(seen.t3) == len(plain.t3) / 4 / 2  # of four triangles, and eight channels
    assert seen.t3.wavelength.max() <= 1.65e-6
    assert_allclose(seen.t3.error, np.radians(5.0))


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


def test_a_night_with_too_few_data_is_passed_over_with_its_reason(three_nights, tmp_path):
    array = three_nights.array
    poor = replace(
        three_nights,
        array=replace(array, stations=array.stations[:2], local=array.local[:2]),
        spectrum=Spectrum.even("NARROW", 1.6e-6, 1.65e-6, 1),
        nights=replace(three_nights.nights, dates=three_nights.nights.dates[:1], exposures=2),
    )
    (night,) = measured(poor, tmp_path)
    assert not night.detected
    assert "2 independent data" in night.reason


def test_errors_that_channels_share_are_taken_into_account(three_nights, tmp_path):
    """The keys of [nights] reach the search, which answers as if it were asked directly."""
    one = replace(three_nights, nights=replace(three_nights.nights, dates=(60345.0,)))
    path = simulate(one, tmp_path, rng=np.random.default_rng(3))
    path.write_text(
        path.read_text().replace("[nights]", "[nights]\nv2_calibration = 0.3\nt3_calibration = 4")
    )
    (shared,) = measure(read_system(path), rng=np.random.default_rng(3))
    errors = ErrorModel(v2_calibration=0.3, t3_calibration=np.radians(4.0))
    alone, asked = (
        search(shared.observation, errors=given, noise_searches=0).best.covariance_xy_mas2
        for given in (None, errors)
    )
    assert_allclose(shared.result.best.covariance_xy_mas2, asked, rtol=1e-6)
    assert not np.allclose(asked, alone, rtol=1e-2)
