"""Simulated nights: geometry, noise, and the files they become."""

from dataclasses import replace
from importlib.resources import files

import astropy.units as u
import numpy as np
import pytest
from astropy.time import Time
from numpy.testing import assert_allclose

from orbits import InputError, read_system, read_velocities
from orbits.oifits import read
from orbits.simulation.export import night_file
from orbits.simulation.nights import Noise, observe
from orbits.simulation.outputs import simulate
from orbits.simulation.programme import model, nights, velocities
from orbits.simulation.scenario import read_scenario
from orbits.times import tdb_of_utc

DEMO = files("orbits") / "demo" / "harrow-7.toml"


@pytest.fixture(scope="module")
def scenario():
    return read_scenario(DEMO)


@pytest.fixture
def night(scenario, rng):
    return next(nights(scenario, rng))


def test_every_baseline_and_triangle_is_observed(scenario, night):
    stations, channels, exposures = 4, 8, scenario.nights.exposures
    assert len(night.v2) == exposures * channels * stations * (stations - 1) // 2
    assert len(night.t3) == exposures * channels * 4  # N (N - 1) (N - 2) / 6
    assert len(np.unique(night.v2.mjd)) == exposures
    for table in (night.v2, night.t3):
        assert (np.bincount(table.row) == channels).all()


def test_sides_of_triangles_are_baselines(night):
    """The sides A->B, B->C and A->C of a triangle are those of the V2 of the same stations."""
    v2 = night.v2
    keys = zip(v2.mjd, v2.stations[:, 0], v2.stations[:, 1], strict=True)
    side = dict(zip(keys, v2.legs[:, 0], strict=True))
    for t, (a, b, c), (first, second) in zip(
        night.t3.mjd, night.t3.stations.tolist(), night.t3.legs, strict=True
    ):
        assert_allclose(first, side[t, a, b])
        assert_allclose(second, side[t, b, c])
        assert_allclose(first + second, side[t, a, c], atol=1e-12)


def test_stars_stand_where_the_elements_say(scenario, night):
    """Two points and their Fourier sum, without discs, smearing of channels or of exposures."""
    instant = replace(points(scenario), nights=replace(scenario.nights, integration=0.0))
    night = next(nights(instant, np.random.default_rng(1)))
    v2, _ = model(instant, night)
    phase = turn(scenario, night.v2.legs[:, 0], night.v2)
    assert_allclose(v2, fringe(scenario, phase), atol=1e-9)


def test_exposures_are_blurred_as_the_baselines_turn(scenario):
    """V2 averaged over the hour angles of each exposure, from the array itself."""
    slow = replace(points(scenario), nights=replace(scenario.nights, integration=700.0))
    night = next(nights(slow, np.random.default_rng(1)))
    v2, _ = model(slow, night)
    star, length = scenario.star, slow.nights.integration / 86400
    nodes, weights = np.polynomial.legendre.leggauss(12)
    average = 0.0
    for node, weight in zip(nodes, weights / 2, strict=True):
        mjd, which = np.unique(night.v2.mjd, return_inverse=True)
        at = scenario.array.projected(star.ra, star.dec, mjd + length / 2 * node)
        a, b = night.v2.stations.T
        legs = at[which.ravel(), b] - at[which.ravel(), a]
        average += weight * fringe(scenario, turn(scenario, legs, night.v2))
    sharp = fringe(scenario, turn(scenario, night.v2.legs[:, 0], night.v2))
    blur = np.abs(average - sharp).max()
    assert blur > 0.01
    # A baseline turns by 0.05 rad between exposures, from which its rate is taken: at the ends it
    # is off by half of that, and the blur goes as its square.
    assert_allclose(v2, average, atol=0.05 * blur)


def points(scenario):
    """The scenario without discs, in channels of no width."""
    light = replace(scenario.light, primary_diameter=0.0, companion_diameter=0.0)
    none = np.zeros_like(scenario.spectrum.bandwidth)
    return replace(scenario, light=light, spectrum=replace(scenario.spectrum, bandwidth=none))


def turn(scenario, legs, table):
    """(n,) phase of the companion on baselines `legs`, rad."""
    x, y = scenario.elements.offsets(Time(tdb_of_utc(table.mjd), format="mjd", scale="tdb"))
    offset = np.stack([x.to_value(u.rad), y.to_value(u.rad)], axis=-1)
    return 2 * np.pi * (legs * offset).sum(axis=1) / table.wavelength


def fringe(scenario, phase):
    """V2 of two points."""
    f = scenario.light.contrast
    return np.abs((1 + f * np.exp(-1j * phase)) / (1 + f)) ** 2


def test_noise_is_what_the_errors_say(scenario, night, rng):
    """Chi-square of the noise: mean n, standard deviation sqrt(2 n); 4 sigma."""
    truth = model(scenario, night)
    for table, values in zip((night.v2, night.t3), truth, strict=True):
        chi2 = np.sum(((table.value - values) / table.error) ** 2)
        assert abs(chi2 - len(values)) < 4 * np.sqrt(2 * len(values))


def test_shared_noise_is_what_the_correlation_says(scenario, night, rng):
    few = np.arange(16)  # two rows of each table
    small = replace(night, v2=night.v2.select(few), t3=night.t3.select(few))
    noise = Noise(
        v2_relative=0.03,
        v2_floor=0.01,
        closure_phase=0.01,
        v2_shared=0.05,
        closure_phase_shared=0.02,
    )
    flat = np.full(16, 0.8), np.full(16, 0.1)
    drawn, trials = [], 4_000
    for _ in range(trials):
        seen = observe(small, lambda _: flat, noise, rng)
        drawn.append(
            np.concatenate(
                [(seen.v2.value - 0.8) / seen.v2.error, (seen.t3.value - 0.1) / seen.t3.error]
            )
        )
    found = np.cov(np.array(drawn).T)
    # An element of a sample covariance of unit variances scatters by at most sqrt(2 / trials);
    # the largest of 528 elements stays below 4.5 of that in all but 1 of 270 seeds.
    assert_allclose(found, seen.correlation.toarray(), atol=4.5 * np.sqrt(2 / trials))


def test_velocities_follow_the_masses(scenario, rng):
    """The centre of mass moves at the systemic velocity: M1 (V1 - gamma) + M2 (V2 - gamma) = 0."""
    table = velocities(scenario, rng)
    gamma, orbit = scenario.star.systemic_velocity, scenario.orbit
    first, second = (table.select(table.star == star) for star in (0, 1))
    momentum = orbit.primary_mass * (first.velocity - gamma) + orbit.companion_mass * (
        second.velocity - gamma
    )
    error = np.hypot(orbit.primary_mass * first.error, orbit.companion_mass * second.error)
    assert np.sum((momentum / error) ** 2) < len(error) + 4 * np.sqrt(2 * len(error))
    assert np.ptp(first.velocity) > 40  # km/s; the curves are no straight lines


def test_a_night_survives_the_file(scenario, rng, tmp_path):
    noisy = replace(
        scenario, noise=replace(scenario.noise, v2_shared=0.02, closure_phase_shared=0.01)
    )
    night = next(nights(noisy, rng))
    file = night_file(night, noisy.array, noisy.spectrum, ra=noisy.star.ra, dec=noisy.star.dec)
    file.write(tmp_path / "night.fits")
    back = read(tmp_path / "night.fits")
    assert back.target == scenario.name
    for before, after in ((night.v2, back.v2), (night.t3, back.t3)):
        # Degrees and radians, and wavelengths in single precision.
        assert_allclose(after.value, before.value, rtol=0, atol=1e-15)
        assert_allclose(after.error, before.error, rtol=1e-14)
        assert_allclose(after.legs, before.legs)
        assert_allclose(after.wavelength, before.wavelength, rtol=6e-8)
    assert_allclose(back.correlation.toarray(), night.correlation.toarray(), atol=1e-15)


def test_outputs_are_a_system_ready_to_measure(scenario, tmp_path):
    path = simulate(scenario, tmp_path, rng=np.random.default_rng(1))
    system = read_system(path)
    assert system.name == "Harrow 7"
    assert len(system.nights) == len(scenario.nights.dates)
    assert len(read_velocities(system.velocities[0])) == 2 * len(scenario.velocities.dates)
    with pytest.raises(InputError, match="exists already"):
        simulate(scenario, tmp_path, rng=np.random.default_rng(1))


def test_same_seed_same_nights(scenario):
    first, again = (next(nights(scenario, np.random.default_rng(5))) for _ in range(2))
    assert np.array_equal(first.v2.value, again.v2.value)
    assert np.array_equal(first.t3.value, again.t3.value)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (("eccentricity = 0.36", ""), "orbit.eccentricity is missing"),
        (("eccentricity", "excentricity"), "unknown key 'orbit.excentricity'"),
        (("[12.0, 48.0, 0.5]", "[12.0, 48.0]"), r"array.stations.N1 must be \[east, north, up\]"),
        (('name = "Harrow 7"', ""), "name is missing"),
        (("dates = [60305", 'dates = ["soon"'), "velocities.dates must list"),
    ],
)
def test_faults_of_a_scenario_are_named(tmp_path, change, message):
    path = tmp_path / "scenario.toml"
    text = DEMO.read_text()
    assert change[0] in text
    path.write_text(text.replace(*change, 1))
    with pytest.raises(InputError, match=message):
        read_scenario(path)
