"""Companions put into data and taken out again, as arrays and as files."""

from dataclasses import replace

import astropy.units as u
import numpy as np
import pytest
from numpy.testing import assert_allclose
from skies import fill, four_stations, night_of, wrapped

from orbits.companion.injection import Companion, exchange, inject, remove
from orbits.companion.injection_files import (
    beside,
    inject_file,
    primary_diameter,
    remove_file,
    shown,
)
from orbits.constants import MAS
from orbits.errors import InputError
from orbits.oifits import Vis, load, observations
from orbits.oifits.validation import validate
from orbits.simulation.nights import Noise

STAR = {"primary_diameter": 1.1}
PAIR = {**STAR, "x": 7.0, "y": -4.0, "contrast": 0.05, "diameter": 0.3}
COMPANION = Companion(**PAIR)


def test_a_pair_is_what_a_star_becomes():
    """Without noise the data become those that the model of the pair predicts."""
    blank = four_stations(exposures=2, channels=3)
    lit, pair = inject(fill(blank, **STAR), COMPANION), fill(blank, **PAIR)
    assert_allclose(lit.v2.value, pair.v2.value, rtol=1e-9)
    assert_allclose(wrapped(lit.t3.value - pair.t3.value), 0, atol=1e-9)


def test_noise_stays_and_the_inverse_gives_the_data_back(rng):
    observation = fill(four_stations(exposures=2, channels=3), rng, **STAR)
    lit = inject(observation, COMPANION)
    assert_allclose(lit.v2.value / lit.v2.error, observation.v2.value / observation.v2.error)
    np.testing.assert_array_equal(lit.t3.error, observation.t3.error)
    back = remove(lit, COMPANION)
    assert_allclose(back.v2.value, observation.v2.value, rtol=1e-12)
    assert_allclose(back.v2.error, observation.v2.error, rtol=1e-12)
    assert_allclose(wrapped(back.t3.value - observation.t3.value), 0, atol=1e-12)


def test_companion_by_separation_and_position_angle():
    """East is at position angle 90 deg."""
    one = Companion.at(10 * u.mas, 90 * u.deg, 0.1)
    assert_allclose([one.x, one.y], [10, 0], atol=1e-12)
    with pytest.raises(ValueError, match="contrast"):
        Companion.at(10 * u.mas, 90 * u.deg, 1.5)
    with pytest.raises(ValueError, match="separation"):
        Companion.at(-1 * u.mas, 90 * u.deg, 0.5)


@pytest.mark.parametrize(
    ("name", "given"),
    [
        ("separation", (np.nan, 90, 0.1)),
        ("separation", (np.inf, 90, 0.1)),
        ("position angle", (10, np.nan, 0.1)),
        ("position angle", (10, -np.inf, 0.1)),
        ("contrast", (10, 90, np.nan)),
    ],
)
def test_companion_that_is_nowhere_is_refused(name, given):
    separation, angle, contrast = given
    with pytest.raises(ValueError, match=name):
        Companion.at(separation * u.mas, angle * u.deg, contrast)
    with pytest.raises(ValueError, match="diameter must be a finite number"):
        Companion.at(10 * u.mas, 90 * u.deg, 0.1, diameter=np.nan)


@pytest.fixture
def night(tmp_path, rng):
    """A simulated file, with a flagged datum, and one that is no number."""
    noise = Noise(v2_floor=0.002, closure_phase=1e-3)
    file = night_of("Harrow 7", noise, rng, channels=5, **STAR)
    file.data[0].flag[0, 0] = True
    file.data[1].t3phi[0, 1] = np.nan
    path = tmp_path / "night.fits"
    file.write(path)
    return path


def test_file_with_a_companion_is_valid_and_says_so(night, tmp_path):
    lit = inject_file(load(night), COMPANION)
    lit.write(tmp_path / "lit.fits")
    read = load(tmp_path / "lit.fits")
    assert validate(tmp_path / "lit.fits") == validate(night)
    assert any("put in by nodeline" in line for line in " ".join(read.history).splitlines())
    (got,), (star,) = observations(read), observations(load(night))
    expected = inject(star, COMPANION)
    assert_allclose(got.v2.value, expected.v2.value, rtol=1e-12)
    assert_allclose(wrapped(got.t3.value - expected.t3.value), 0, atol=1e-12)
    assert read.data[0].flag[0, 0]
    assert np.isnan(read.data[1].t3phi[0, 1])


def test_file_comes_back(night):
    original = load(night)
    back = remove_file(inject_file(original, COMPANION), COMPANION)
    assert_allclose(back.data[0].vis2data, original.data[0].vis2data, rtol=1e-12)
    assert_allclose(back.data[1].t3phi, original.data[1].t3phi, atol=1e-9)
    assert len(back.history) == len(original.history) + 2


@pytest.mark.parametrize("kind", ["absolute", "differential"])
def test_phases_of_baselines_change_as_they_are_referred(night, kind):
    """Against the Fourier sum over two points; differential phases against all other channels."""
    file = load(night)
    file.wavelengths[0].eff_band[:] = 0
    v2 = file.data[0]
    shape, channels = v2.vis2data.shape, v2.vis2data.shape[1]
    differential = kind == "differential"
    others = np.broadcast_to(~np.eye(channels, dtype=bool), (*shape, channels))
    visphi = np.full(shape, 3.0)
    visphi[1, 2] = np.nan
    table = Vis(
        insname=v2.insname, arrname=v2.arrname, date_obs=v2.date_obs, target_id=v2.target_id,
        mjd=v2.mjd, ucoord=v2.ucoord, vcoord=v2.vcoord, sta_index=v2.sta_index, phityp=kind,
        visphi=visphi, visphierr=np.ones(shape), visrefmap=others if differential else None,
    )  # fmt: skip
    file.data.append(table)
    points = Companion(x=7.0, y=-4.0, contrast=0.05)
    got = inject_file(file, points).data[-1].visphi - 3.0
    turns = (7.0 * v2.ucoord - 4.0 * v2.vcoord)[:, None] * MAS
    turns = turns / file.wavelengths[0].eff_wave.astype(float)
    phase = np.degrees(np.angle(1 + 0.05 * np.exp(-2j * np.pi * turns)))
    expected = (phase - phase.mean(axis=1, keepdims=True)) * channels / (channels - 1)
    expected = expected if differential else phase
    expected[1, 2] = np.nan
    assert_allclose(got, expected, atol=1e-9)


def test_a_second_companion_is_put_beside_the_first(night):
    """The data become those of three stars, by the errors of the first two that are fitted.

    0.2 of the errors of the data: those of 6 parameters fitted to some 100 data, some 0.25 on
    average, times a contrast of 0.06, and what the claim of a diameter may add.
    """
    first = replace(COMPANION, x=-5.0, y=6.0, contrast=0.2)
    file = inject_file(load(night), first)
    nights = shown(file, rng=np.random.default_rng(1))
    assert [view.scene.companions for _, view in nights] == [1]
    # Errors of 0.002 in V2 leave some 0.005 mas.
    assert_allclose(primary_diameter(nights), 1.1, atol=0.02)
    second = replace(COMPANION, primary_diameter=0.0)
    (pair,), (got,) = observations(file), observations(inject_file(file, second, nights))
    truth = exchange(pair, first.pair, second.added_to(first.pair))
    assert np.abs((got.v2.value - truth.v2.value) / truth.v2.error).max() < 0.2
    assert np.abs(wrapped(got.t3.value - truth.t3.value) / truth.t3.error).max() < 0.2
    alone = exchange(pair, first.without, second.added_to(first.without))
    assert np.abs(wrapped(alone.t3.value - truth.t3.value) / truth.t3.error).max() > 1
    lit = inject_file(file, second, nights)
    found = beside(lit, second, rng=np.random.default_rng(2))
    (back,) = observations(remove_file(lit, second, found))
    assert np.abs((back.v2.value - pair.v2.value) / pair.v2.error).max() < 0.2


def test_unknown_target_is_refused(night):
    with pytest.raises(InputError, match="no target 'Other'"):
        inject_file(load(night), COMPANION, target="Other")
