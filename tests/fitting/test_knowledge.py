"""What is known of elements, masses and zero points beforehand, against plain normal densities."""

from dataclasses import replace

import astropy.units as u
import numpy as np
import pytest
from astropy.time import Time
from made_binaries import binary, moving, seen
from numpy.testing import assert_allclose
from scipy.stats import multivariate_normal, norm

from orbits import InputError, Model, Parallax, Priors, fit, masses
from orbits.fitting.data import make_data
from orbits.fitting.knowledge import NEED_PARALLAX, check_knowledge
from orbits.fitting.target import Target

PRIORS = Priors(
    period=(50.0, 200.0),
    semimajor_axis=(10.0, 40.0),
    eccentricity=(0.0, 0.9),
    amplitude=(1.0, 5.0),
    systemic=30.0,
)
PARALLAX = Parallax(value=20.0, error=2.0)


def data_of(rng, *, positions=True, stars=(0, 1), parallax=None, normal=None, model=None):
    velocities = moving(binary(), 6, rng)
    velocities = velocities.select(np.isin(velocities.star, stars)) if stars else None
    return make_data(
        seen(binary(), 6, rng) if positions else None,
        velocities,
        parallax,
        replace(PRIORS, normal=normal or {}),
        model or Model(),
    )


def added(kind, normal, points):
    """What knowledge adds to ln likelihood at points."""
    with_it = Target.prior(data_of(np.random.default_rng(1), normal=normal, **kind))
    without = Target.prior(data_of(np.random.default_rng(1), **kind))
    return with_it.log_likelihood(points) - without.log_likelihood(points)


def axes(data, points):
    names = data.space.names
    value = {name: points[:, i] for i, name in enumerate(names)}
    e = value["h_x"] ** 2 + value["h_y"] ** 2
    return np.exp(value["log_period"]), e, np.arctan2(value["h_y"], value["h_x"]), value


def test_elements_and_masses_of_a_double_lined_binary():
    """Each quantity from its own formula (masses by Kepler's third law), one at a time."""
    data = data_of(np.random.default_rng(1))
    points = Target.prior(data).draw(40, np.random.default_rng(2))[0]
    period, e, phase, value = axes(data, points)
    tilt, axis = np.arccos(value["cos_inclination"]), np.exp(value["log_axis"])
    k1, k2 = np.exp(value["log_k1"]), np.exp(value["log_k2"])
    argument = value["longitude"] - phase
    one, two = masses.double_lined_masses(period, e, tilt, k1, k2)
    plain = {
        "period_d": period,
        "eccentricity": e,
        "semimajor_axis_mas": axis,
        "inclination_deg": np.degrees(tilt),
        "k1_kms": k1,
        "k2_kms": k2,
        "primary_msun": one,
        "companion_msun": two,
        "total_msun": one + two,
        "mass_ratio": k1 / k2,
        "parallax_mas": axis / masses.double_lined_axis(period, e, tilt, k1, k2),
        "semimajor_axis_au": masses.double_lined_axis(period, e, tilt, k1, k2),
        "periastron_separation_mas": axis * (1 - e)
        * np.hypot(np.cos(argument), np.sin(argument) * np.cos(tilt)),
    }  # fmt: skip
    for name, found in plain.items():
        mean, error = np.median(found), found.std() + 1e-3
        expected = norm(mean, error).logpdf(found)
        assert_allclose(added({}, {name: (mean, error)}, points), expected, atol=1e-8)
    for name, angle in (("argument_deg", argument), ("node_deg", value["node"])):
        difference = (np.degrees(angle) - 350.0 + 180.0) % 360.0 - 180.0
        expected = norm(0, 15.0).logpdf(difference)
        assert_allclose(added({}, {name: (350.0, 15.0)}, points), expected, atol=1e-8)
    passage = data.reference - period * phase / (2 * np.pi)
    for name, later in (("periastron_mjd", 0), ("next_periastron_mjd", 40)):
        difference = (passage - 60010.0 + period / 2) % period - period / 2
        known = {name: (60010.0, 3.0)}
        if later:  # many passages later only the nearest counts, too
            difference = (passage - 64000.0 + period / 2) % period - period / 2
            known = {name: (64000.0, 3.0)}
        assert_allclose(added({}, known, points), norm(0, 3.0).logpdf(difference), atol=1e-6)


def test_positions_alone_know_the_node_by_half_a_turn():
    """The mean of the densities of both nodes, argument and node turned together."""
    kind = {"stars": ()}
    data = data_of(np.random.default_rng(1), **kind)
    points = Target.prior(data).draw(40, np.random.default_rng(2))[0]
    _, _, phase, value = axes(data, points)
    node, argument = np.degrees(value["node"]), np.degrees(value["longitude"] - phase)

    def density(turn):
        parts = [norm(0, error).pdf((found + turn - mean + 180) % 360 - 180)
                 for found, mean, error in ((node, 40, 30), (argument, 270, 50))]  # fmt: skip
        return parts[0] * parts[1]

    expected = np.log((density(0) + density(180)) / 2)
    known = {"node_deg": (40.0, 30.0), "argument_deg": (270.0, 50.0)}
    assert_allclose(added(kind, known, points), expected, atol=1e-8)


def test_systemic_velocity_and_drift():
    """The known value as one more datum of a normal distribution: covariance S^2 + s^2."""
    kind = {"positions": False, "stars": (0,), "model": Model(drift=True)}
    known = {"gamma_kms": (8.0, 2.0), "drift_kms_per_year": (-1.0, 0.5)}
    data = data_of(np.random.default_rng(1), **kind)
    points = Target.prior(data).draw(10, np.random.default_rng(2))[0]
    period, e, phase, value = axes(data, points)
    speed = data.velocities
    years = (speed.mjd - data.reference) / 365.25
    effect = np.column_stack([30.0 * np.ones(6), PRIORS.drift * years])
    own = np.diag([30.0, PRIORS.drift])
    stacked = np.concatenate([effect, own])
    covariance = stacked @ stacked.T + np.diag([*speed.error**2, 2.0**2, 0.5**2])
    for row in range(10):
        orbit = binary(
            period=period[row],
            periastron=data.reference - period[row] * phase[row] / (2 * np.pi),
            eccentricity=e[row],
            argument=np.degrees(value["longitude"][row] - phase[row]),
        )
        k1 = np.exp(value["log_k1"][row]) * u.km / u.s
        model, _ = orbit.velocities(Time(speed.mjd, format="mjd", scale="tdb"), k1=k1, k2=0 * k1)
        measured = np.concatenate([speed.velocity - model.to_value(u.km / u.s), [8.0, -1.0]])
        expected = multivariate_normal(np.zeros(8), covariance).logpdf(measured)
        with_it = Target.prior(data_of(np.random.default_rng(1), normal=known, **kind))
        assert_allclose(with_it.log_likelihood(points[row : row + 1]), expected, rtol=1e-9)


@pytest.mark.parametrize("stars", [(), (0,)], ids=["positions", "single-lined"])
def test_a_known_mass_sharpens_the_parallax(stars):
    """Against the samples of a fit without it, weighted by the density of the mass.

    Evidence, mean and width of the parallax within 5 errors of the weighted samples.
    """
    rng = np.random.default_rng(14)
    axis = float(masses.kepler_axis(104.0, 3.0))
    k1, _ = masses.amplitudes(104.0, 0.35, np.radians(137.0), 1.8, 1.2)
    positions = seen(binary(), 12, rng)
    velocities = moving(binary(), 12, rng, k1=float(k1))
    data = {
        "velocities": velocities.select(velocities.star == 0) if stars else None,
        "parallax": Parallax(value=20.0 / axis, error=2.0),
    }
    name = "primary_msun" if stars else "total_msun"
    known = (1.8, 0.3) if stars else (3.0, 0.3)
    priors = Priors.for_data(positions, data["velocities"], period=(20.0, 1000.0))
    plain = fit(positions, priors=priors, rng=np.random.default_rng(5), live_points=1000, **data)
    sharp = fit(positions, priors=replace(priors, normal={name: known}),
                rng=np.random.default_rng(6), live_points=500, **data)  # fmt: skip
    density = norm(*known).pdf(plain.samples[name])
    weight = density / density.sum()
    effective = 1 / np.square(weight).sum()
    assert effective > 200
    gain = np.log(density.mean())
    noise = np.hypot(density.std() / density.mean() / np.sqrt(len(density)),
                     np.hypot(plain.account["log_evidence_err"],
                              sharp.account["log_evidence_err"]))  # fmt: skip
    difference = sharp.account["log_evidence"] - plain.account["log_evidence"]
    assert abs(difference - gain) < 5 * noise
    before, after = plain.samples["parallax_mas"], sharp.samples["parallax_mas"]
    mean = weight @ before
    width = np.sqrt(weight @ (before - mean) ** 2)
    counts = 1 / effective + 1 / len(after)
    assert abs(after.mean() - mean) < 5 * width * np.sqrt(counts)
    assert abs(after.std() / width - 1) < 5 * np.sqrt(counts)  # heavier tails than normal allowed
    assert width < 0.6 * before.std()  # the mass does tell something


@pytest.mark.parametrize(
    ("kind", "name"),
    [
        ({"stars": ()}, "total_msun"),
        ({"stars": (0,)}, "primary_msun"),
        ({"stars": (0,)}, "k2_kms"),
        ({"positions": False}, "inclination_deg"),
        ({"stars": (0,), "positions": False, "parallax": PARALLAX}, "total_msun"),
    ],
)
def test_what_the_data_do_not_give_is_refused(kind, name):
    data = data_of(np.random.default_rng(1), normal={name: (1.0, 1.0)}, **kind)
    with pytest.raises(InputError, match=f"'{name}' is not among what these data give: period_d"):
        check_knowledge(data)


@pytest.mark.parametrize("name", sorted(NEED_PARALLAX))
@pytest.mark.parametrize(
    "kind", [{"stars": ()}, {"stars": (0,)}, {"stars": (0,), "positions": False}]
)
def test_the_refusal_names_a_remedy_that_helps(kind, name):
    """What the sentence asks for is given, one way after the other, and the name is accepted."""
    rng = np.random.default_rng(1)
    with pytest.raises(InputError, match=r"; it takes .*parallax") as refused:
        check_knowledge(data_of(rng, normal={name: (1.0, 1.0)}, **kind))
    remedy = str(refused.value).partition("; it takes ")[2]
    assert remedy.startswith("positions, and ") == ("positions" in kind)
    assert "velocities of both stars" in remedy
    check_knowledge(data_of(rng, normal={name: (1.0, 1.0)}))  # positions and both stars
    one = (0,) if "or of one and a parallax ([parallax])" in remedy else ()
    check_knowledge(data_of(rng, normal={name: (1.0, 1.0)}, stars=one, parallax=PARALLAX))


def test_a_name_that_no_distance_gives_has_no_such_remedy():
    data = data_of(np.random.default_rng(1), normal={"height": (1.0, 1.0)}, stars=())
    with pytest.raises(InputError, match="'height'") as refused:
        check_knowledge(data)
    assert "it takes" not in str(refused.value)
