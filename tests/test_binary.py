"""The model of a binary against pixel sums, quadrature, identities and printed examples."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from skies import epoch, with_all_observables, wrapped

from orbits.binary import Scene, bispectrum, model, predict
from orbits.constants import MAS
from orbits.sampling import Sampling

LAMBDA = 1.6e-6
BASELINES = [(60.0, 0.0), (40.0, 0.0), (100.0, 0.0), (-31.0, 77.0), (12.0, -88.0)]
TRIANGLES = [[(60.0, 0.0), (40.0, 0.0)], [(-31.0, 77.0), (12.0, -88.0)], [(40, 25), (-10, 55)]]


def pair(separation, position_angle):
    angle = np.radians(position_angle)
    return {"x": separation * np.sin(angle), "y": separation * np.cos(angle)}


# Numbers of two points with flux ratio 0.1 at 1.6 um, printed to six decimals.
@pytest.mark.parametrize(
    ("where", "legs", "amplitude", "phase"),
    [
        (pair(1, 90), [(60, 0), (40, 0)], 0.820395, -3.092755),
        (pair(1, 270), [(60, 0), (40, 0)], 0.820395, 3.092755),
        (pair(5, 30), [(40, 25), (-10, 55)], 0.654134, 15.054301),
    ],
)
def test_bispectrum_of_two_points(where, legs, amplitude, phase):
    sampling = Sampling.of(epoch(t3_legs=[legs]), radius=10.0)
    scene = Scene(primary_shape="point", companion_shape="point")
    seen, _ = scene.visibility(scene.vector({**where, "contrast": 0.1}), sampling)
    triple = bispectrum(seen, sampling)[0]
    assert_allclose(abs(triple), amplitude, atol=6e-7)
    assert_allclose(np.degrees(np.angle(triple)), phase, atol=6e-7)


def test_visibility_of_two_points():
    observation = epoch(v2_legs=[(100, 0)])
    v2, _ = predict(observation, x=1.0, contrast=0.1)
    assert_allclose(v2, 0.780671, atol=6e-7)
    scene = Scene()
    sampling = Sampling.of(observation, radius=1.0)
    seen, _ = scene.visibility(scene.vector({"x": 1.0, "contrast": 0.1}), sampling)
    # The baseline points East, so its sample is the baseline itself, not its mirror image.
    assert_allclose(np.degrees(np.angle(seen)), -5.580014, atol=6e-7)


def pixel_visibility(u, v, discs, *, pixels=1201):
    """Fourier sum over an image of uniform discs (x, y, diameter, flux); mas, cycles/rad."""
    half = max(abs(c) + d / 2 for x, y, d, _ in discs for c in (x, y)) * 1.001
    axis, step = np.linspace(-half, half, pixels, retstep=True)
    x, y = np.meshgrid(axis, axis)
    image = np.zeros_like(x)
    for cx, cy, diameter, flux in discs:
        # A pixel on the limb holds the part of it inside, to first order in its distance from it.
        inside = np.clip((diameter / 2 - np.hypot(x - cx, y - cy)) / step + 0.5, 0, 1)
        image += flux * inside / inside.sum()
    across = np.exp(-2j * np.pi * MAS * np.outer(u, axis))
    down = np.exp(-2j * np.pi * MAS * np.outer(v, axis))
    return np.einsum("kj,ki,ij->k", across, down, image, optimize=True) / image.sum()


def test_two_discs_agree_with_a_sum_over_pixels():
    """The sum's limb is right to about (pixel / diameter)^1.5 = 3e-4 / 30 for random cuts."""
    where = {"x": 1.9, "y": -2.3}
    v2, t3 = predict(
        epoch(v2_legs=BASELINES, t3_legs=TRIANGLES),
        **where, contrast=0.4, primary_diameter=1.7, diameter=1.1,
    )  # fmt: skip
    discs = [(0, 0, 1.7, 1.0), (1.9, -2.3, 1.1, 0.4)]
    u, v = np.transpose(BASELINES) / LAMBDA
    assert_allclose(v2, np.abs(pixel_visibility(u, v, discs)) ** 2, atol=1e-5)
    for legs, phase in zip(TRIANGLES, t3, strict=True):
        (u1, v1), (u2, v2_) = np.array(legs) / LAMBDA
        a, b, c = pixel_visibility([u1, u2, u1 + u2], [v1, v2_, v1 + v2_], discs)
        assert_allclose(wrapped(phase - np.angle(a * b * np.conj(c))), 0, atol=1e-4)


def test_position_of_the_whole_scene_does_not_matter():
    """Multiplying V by a slope of phase leaves V2 and the bispectrum alone."""
    scene, observation = Scene(), epoch(v2_legs=BASELINES, t3_legs=TRIANGLES)
    sampling = Sampling.of(observation, radius=10.0)
    values = scene.vector(
        {"x": 3.0, "y": 1.0, "contrast": 0.5, "primary_diameter": 1.0, "diameter": 0.5}
    )
    seen, _ = scene.visibility(values, sampling)
    moved = seen * np.exp(-2j * np.pi * MAS * (7.0 * sampling.u - 4.0 * sampling.v))[..., 0]
    change = bispectrum(moved, sampling) / bispectrum(seen, sampling)
    assert_allclose(change, 1, atol=1e-13)  # phases of a few turns, rounded at 1e-16 each
    assert_allclose(np.abs(moved) ** 2, np.abs(seen) ** 2, rtol=1e-13)


def test_scenes_with_a_centre_of_symmetry_have_closure_phase_0_or_pi():
    """A star with two equal companions on opposite sides, and two equal stars."""
    observation = epoch(t3_legs=TRIANGLES, wavelength=np.linspace(1.2e-6, 2.4e-6, 30))
    triple = Scene(companions=2)
    sides = {"x": 2.0, "y": 1.0, "contrast": 0.8, "x_2": -2.0, "y_2": -1.0, "contrast_2": 0.8}
    phases = [
        predict(observation, triple, primary_diameter=1.0, **sides)[1],
        predict(observation, x=3.0, y=-2.0, contrast=1.0, primary_diameter=0.8, diameter=0.8)[1],
    ]
    for phase in phases:
        assert_allclose(np.sin(phase), 0, atol=1e-12)
        assert np.cos(phase).min() < 0 < np.cos(phase).max()


def test_squared_visibility_alone_cannot_tell_a_position_from_its_opposite():
    observation = epoch(v2_legs=BASELINES)
    here, _ = predict(observation, x=2.0, y=5.0, contrast=0.3, primary_diameter=1.0)
    there, _ = predict(observation, x=-2.0, y=-5.0, contrast=0.3, primary_diameter=1.0)
    assert_allclose(here, there, rtol=1e-14)


def test_exchanging_the_stars_changes_nothing():
    observation = epoch(v2_legs=BASELINES, t3_legs=TRIANGLES)
    one = predict(observation, x=2.0, y=5.0, contrast=0.4, primary_diameter=1.0, diameter=0.3)
    two = predict(observation, x=-2.0, y=-5.0, contrast=2.5, primary_diameter=0.3, diameter=1.0)
    assert_allclose(one[0], two[0], atol=1e-14)
    assert_allclose(wrapped(one[1] - two[1]), 0, atol=1e-13)


def test_amplitudes_are_moduli_of_what_phases_are_angles_of():
    """And the phases of baselines are those of the Fourier sum over two points."""
    observation = with_all_observables(epoch(v2_legs=BASELINES, t3_legs=TRIANGLES))
    scene = Scene()
    values = scene.vector({"x": 2.0, "y": 5.0, "contrast": 0.4, "primary_diameter": 1.0})
    sampling = Sampling.of(observation, radius=10.0)
    every = model(scene, values, sampling)[0]
    v2, t3, t3amp, visamp, _ = np.split(every, [5, 8, 11, 16])
    triple = bispectrum(scene.visibility(values, sampling)[0], sampling)
    assert_allclose(t3amp * np.exp(1j * t3), triple, atol=1e-15)
    assert_allclose(visamp**2, v2, atol=1e-15)
    values = scene.vector({"x": 2.0, "y": 5.0, "contrast": 0.4})
    u, v = observation.visphi.frequencies[:, 0].T
    fringe = 1 + 0.4 * np.exp(-2j * np.pi * (2.0 * u + 5.0 * v) * MAS)
    got = model(scene, values, sampling)[0][16:]
    assert_allclose(wrapped(got - np.angle(fringe)), 0, atol=1e-13)


def test_background_lowers_the_contrast_of_the_fringes():
    observation = epoch(v2_legs=BASELINES, t3_legs=TRIANGLES)
    plain = predict(observation, x=2.0, contrast=0.25)
    dimmed = predict(observation, x=2.0, contrast=0.25, background=0.25)
    assert_allclose(dimmed[0], plain[0] * (1.25 / 1.5) ** 2, rtol=1e-13)
    assert_allclose(dimmed[1], plain[1], atol=1e-14)


# From a published first-order expression: the largest closure phase of a faint companion,
# (3 sqrt 3 / 2) f; exact values where all sides see a phase of 120 deg.
@pytest.mark.parametrize(
    ("contrast", "degrees"), [(0.001, -0.148933), (0.01, -1.496031), (0.1, -15.626157), (0.5, -90)]
)
def test_largest_closure_phase(contrast, degrees):
    side = LAMBDA / (3 * MAS)  # 1 mas to the East is a third of a turn
    _, t3 = predict(epoch(t3_legs=[[(side, 0), (side, 0)]]), x=1.0, contrast=contrast)
    assert_allclose(np.degrees(t3), degrees, atol=6e-7)


@pytest.mark.parametrize("separation", [5.0, 40.0, 120.0])
def test_band_smearing_is_the_mean_over_the_channel(separation):
    """Against a sum of 4000 narrow channels; the midpoint rule errs by (turn / 4000)^2 / 24."""
    legs, width = TRIANGLES[2], 0.25e-6
    scene = {**pair(separation, 50), "contrast": 0.6, "primary_diameter": 2.0, "diameter": 1.0}
    v2, t3 = predict(
        epoch(v2_legs=[legs[0]], t3_legs=[legs], wavelength=LAMBDA, bandwidth=width), **scene
    )
    fine = LAMBDA + width * ((np.arange(4000) + 0.5) / 4000 - 0.5)
    sampling = Sampling.of(epoch(t3_legs=[legs], wavelength=fine), radius=200.0)
    seen, _ = Scene().visibility(Scene().vector(scene), sampling)
    sides = seen[sampling.t3][..., 0]
    sides = np.where(sampling.turned, np.conj(sides), sides).mean(axis=0)
    assert_allclose(v2, abs(sides[0]) ** 2, atol=1e-6)
    assert_allclose(wrapped(t3 - np.angle(np.prod(sides))), 0, atol=1e-5)


def test_time_smearing_is_the_mean_over_the_integration():
    """Rows of one baseline tell how it turns; V2 is averaged over the integration."""
    turning = np.array([(90.0, 20.0), (88.0, 26.0), (86.0, 32.0)])
    observation = epoch(v2_legs=turning, integration=600.0, mjd=60000 + np.arange(3) * 1200 / 86400)
    v2, _ = predict(observation, x=60.0, contrast=0.7)
    fine = (
        turning[1] + (turning[2] - turning[0]) / 4 * (np.arange(2000) + 0.5 - 1000)[:, None] / 2000
    )
    instants, _ = predict(epoch(v2_legs=fine), x=60.0, contrast=0.7)
    assert_allclose(v2[1], instants.mean(), atol=1e-6)
    still, _ = predict(epoch(v2_legs=turning), x=60.0, contrast=0.7)
    assert abs(v2[1] - still[1]) > 0.01


def test_contrast_follows_the_wavelength_and_the_instrument():
    observation = epoch(v2_legs=BASELINES[:2], wavelength=[1.5e-6, 2.0e-6])
    scene = Scene(reference=1.5e-6)
    sloped, _ = predict(observation, scene, x=4.0, contrast=0.1, slope=2.0)
    red, _ = predict(observation, scene, x=4.0, contrast=0.1 * (2.0 / 1.5) ** 2)
    assert_allclose(sloped[1::2], red[1::2], rtol=1e-13)
    observation.v2.channels.instrument[:] = 1
    other, _ = predict(observation, Scene(instruments=2), x=4.0, contrast=0.1, ratio_1=0.5)
    assert_allclose(other, predict(observation, x=4.0, contrast=0.15)[0], rtol=1e-13)


def test_a_fibre_dims_what_lies_off_its_axis():
    observation = epoch(v2_legs=BASELINES)
    half, _ = predict(observation, Scene(fibre_fwhm=60.0), x=30.0, contrast=0.2)
    assert_allclose(half, predict(observation, x=30.0, contrast=0.1)[0], rtol=1e-13)


def test_a_later_visit_and_a_row_given_twice_leave_the_smearing_as_it_is():
    """The rate of a baseline is that of its neighbours within two hours, at different times."""
    turning = [[30.0, 80.0], [34.0, 78.0], [38.0, 75.0]]
    minutes = np.array([0.0, 20.0, 40.0])
    plain = epoch(v2_legs=turning, integration=600.0, mjd=60000 + minutes / 1440)
    more = epoch(
        v2_legs=[*turning, turning[1], [60.0, 20.0]],
        integration=600.0,
        mjd=60000 + np.array([*minutes, 20.0, 400.0]) / 1440,
    )
    scene = {"x": 30.0, "contrast": 0.5}
    expected, _ = predict(plain, **scene)
    got, _ = predict(more, **scene)
    sharp, _ = predict(plain, smearing=False, **scene)
    assert np.abs(expected - sharp).max() > 1e-3
    assert_allclose(got[:3], expected, rtol=1e-12)
    assert_allclose(got[3], got[1], rtol=1e-12)
    assert_allclose(got[4], predict(more, smearing=False, **scene)[0][4], rtol=1e-12)


def test_jacobian_is_the_slope_of_the_model():
    """Central differences of every parameter; h = 1e-5 leaves 1e-10 of truncation and rounding."""
    observation = epoch(
        v2_legs=BASELINES, t3_legs=TRIANGLES, wavelength=[1.5e-6, 1.7e-6], bandwidth=0.05e-6
    )
    observation.v2.channels.instrument[1] = 1
    observation = with_all_observables(observation)
    scene = Scene(
        primary_shape="linear", companion_shape="power", companions=2, instruments=2,
        reference=1.6e-6, fibre_fwhm=80.0,
    )  # fmt: skip
    values = np.array(
        [1.8, 0.4, 0.1, 3.0, -2.0, 0.4, 1.5, 0.8, 0.3, 0.2, -6.0, 4.0, 0.2, -1.0, 0.6, 0.2, -0.1]
    )
    assert len(values) == len(scene.names)
    sampling = Sampling.of(observation, radius=30.0)
    free = range(len(values))
    _, jacobian = model(scene, values, sampling, free)
    h = 1e-5
    for i in free:
        step = np.zeros_like(values)
        step[i] = h
        rise = model(scene, values + step, sampling)[0] - model(scene, values - step, sampling)[0]
        slope = wrapped(rise) / (2 * h)
        # Up to 2e3 of scale times h^2 for the offsets, the stiffest parameters.
        assert_allclose(jacobian[:, i], slope, atol=3e-8, err_msg=scene.names[i])


def test_unknown_parameter_is_refused():
    with pytest.raises(ValueError, match="no parameter radius"):
        predict(epoch(v2_legs=BASELINES), radius=1.0)
