"""Elements against handbooks, catalogued ephemerides and the integrated two-body problem."""

import astropy.units as u
import numpy as np
import pytest
from astropy.time import Time
from numpy.testing import assert_allclose
from scipy.integrate import solve_ivp

from orbits import Elements
from orbits.elements import campbell, thiele_innes

KMS = u.km / u.s


def visual(period, periastron, e, a, inclination, node, argument):
    """Elements from the years, arcseconds and degrees of visual-binary handbooks."""
    return Elements(
        period=period * u.yr,
        periastron=Time(periastron, format="jyear", scale="tdb"),
        eccentricity=e,
        semimajor_axis=a * u.arcsec,
        inclination=inclination * u.deg,
        node=node * u.deg,
        argument=argument * u.deg,
    )


def years(*values):
    return Time(values, format="jyear", scale="tdb")


ETA_CRB = visual(41.623, 1934.008, 0.2763, 0.907, 59.025, 23.717, 219.907)


def test_meeus_example_57a():
    """Meeus (1998), ch. 57: eta CrB at 1980.0; digits of two copies of its algorithm."""
    separation, angle = ETA_CRB.position(years(1980.0))
    assert_allclose(angle.to_value(u.deg), 318.42425648604, atol=1e-5)
    assert_allclose(separation.to_value(u.arcsec), 0.41101776646246, atol=1e-7)
    assert_allclose(ETA_CRB.true_anomaly(years(1980.0)).to_value(u.deg), 63.415137, atol=1e-5)


def test_meeus_gamma_virginis():
    """Meeus (1998), ch. 57, exercise: retrograde, e = 0.885, through periastron; printed digits."""
    orbit = visual(168.68, 2005.13, 0.885, 3.697, 148.0, 36.9, 256.5)
    separation, angle = orbit.position(years(1980, 1984, 1988, 1992, 1996, 2000, 2004, 2008, 2012))
    printed_angle = [296.65, 293.10, 288.70, 282.89, 274.41, 259.34, 208.67, 35.54, 12.72]
    printed_separation = [3.78, 3.43, 3.04, 2.60, 2.08, 1.45, 0.59, 1.04, 1.87]
    # Half a unit of the last printed digit, and a little for the printed 35.54 of 35.535.
    assert_allclose(angle.to_value(u.deg), printed_angle, atol=0.0056)
    assert_allclose(separation.to_value(u.arcsec), printed_separation, atol=0.005)


# Worley & Heintz (1983), Fourth Catalog of Orbits of Visual Binary Stars: elements as printed,
# the constants A, B, F, G as printed, and the ephemeris for 1990.0, 2000.0 and 2008.0.
FOURTH_CATALOG = {
    "alpha Cen": (
        (79.920, 1955.560, 0.516, 17.515, 79.24, 204.87, 231.56),
        (8.8020, 6.9032, -13.3015, -3.9252),
        (214.48, 222.21, 237.23),
        (19.670, 14.142, 8.242),
    ),
    "zeta Boo": (
        (123.440, 1897.590, 0.957, 0.595, 142.00, 129.99, 1.47),
        (-0.3730, 0.4634, 0.3689, 0.2895),
        (302.79, 299.79, 296.00),
        (0.968, 0.802, 0.612),
    ),
    "I 27 CD": (
        (86.200, 1924.000, 0.044, 1.115, 33.50, 148.90, 159.00),
        (0.7192, -0.8230, 0.7905, 0.5369),
        (214.86, 265.71, 302.25),
        (0.952, 0.930, 1.023),
    ),
    "Sirius": (
        (50.090, 1894.130, 0.592, 7.500, 136.53, 44.57, 147.27),
        (-2.4293, -6.5242, -6.1022, 0.4161),
        (4.52, 149.69, 98.03),
        (4.536, 4.597, 8.036),
    ),
}


@pytest.mark.parametrize("star", FOURTH_CATALOG)
def test_fourth_catalog_rows(star):
    elements, constants, angles, separations = FOURTH_CATALOG[star]
    orbit = visual(*elements)
    assert_allclose(orbit.thiele_innes.to_value(u.arcsec), constants, atol=0.51e-4)
    separation, angle = orbit.position(years(1990.0, 2000.0, 2008.0))
    # The largest differences that the printed elements leave over the entries' twenty lines.
    assert_allclose(angle.to_value(u.deg), angles, atol=0.0055)
    assert_allclose(separation.to_value(u.arcsec), separations, atol=0.00055)


@pytest.mark.parametrize("e", [0.0, 0.3, 0.9])
@pytest.mark.parametrize("inclination", [0.0, 50.0, 90.0, 137.0, 180.0])
def test_sky_and_velocities_against_the_integrated_two_body_problem(e, inclination):
    """Newton's equation of motion, turned onto the sky by three rotation matrices.

    The axes are North, East and away from us. The integration starts at periastron and is good to
    1e-10 of the orbit; e = 0.9 magnifies its errors a hundredfold.
    """
    node, argument = np.radians(40.0), np.radians(250.0)
    tilt = np.radians(inclination)
    start = np.array([1 - e, 0, 0, 0, np.sqrt((1 + e) / (1 - e)), 0])  # a = 1, GM = 1, P = 2 pi

    def motion(_, state):
        place = state[:3]
        return np.concatenate([state[3:], -place / np.linalg.norm(place) ** 3])

    turn = np.linspace(0, 2 * np.pi, 41)
    path = solve_ivp(motion, (0, 2 * np.pi), start, "DOP853", turn, rtol=1e-12, atol=1e-13).y

    def about_sight(angle):
        c, s = np.cos(angle), np.sin(angle)
        return np.array([[c, -s, 0], [s, c, 0], [0, 0, 1]])

    c, s = np.cos(tilt), np.sin(tilt)
    about_node = np.array([[1, 0, 0], [0, c, -s], [0, s, c]])
    turned = about_sight(node) @ about_node @ about_sight(argument)
    north, east, _ = turned @ path[:3]
    receding = (turned @ path[3:])[2]

    orbit = Elements(
        period=100 * u.day,
        periastron=Time(60000, format="mjd", scale="tdb"),
        eccentricity=e,
        semimajor_axis=1 * u.mas,
        inclination=inclination * u.deg,
        node=node * u.rad,
        argument=argument * u.rad,
    )
    times = orbit.periastron + turn / (2 * np.pi) * 100 * u.day
    x, y = orbit.offsets(times)
    # MJD 60000 is a double of 7e-12 d; the fastest body here moves 3e-11 of the orbit in that.
    assert_allclose(x.to_value(u.mas), east, atol=2e-8)
    assert_allclose(y.to_value(u.mas), north, atol=2e-8)
    # The relative speed's amplitude is K1 + K2 = sin i / sqrt(1 - e^2) in these units.
    amplitude = s / np.sqrt(1 - e**2)
    v1, v2 = orbit.velocities(times, k1=0.4 * amplitude * KMS, k2=0.6 * amplitude * KMS)
    assert_allclose((v2 - v1).to_value(KMS), receding, atol=2e-7)
    assert_allclose(v1.to_value(KMS), -0.4 * receding, atol=2e-7)


def test_position_angle_grows_when_the_inclination_is_below_ninety_degrees():
    times = years(1934.1, 1934.2)
    _, direct = ETA_CRB.position(times)
    assert direct[1] > direct[0]
    _, retrograde = visual(41.623, 1934.008, 0.2763, 0.907, 180 - 59.025, 23.717, 219.907).position(
        times
    )
    assert retrograde[1] < retrograde[0]


def test_node_by_half_a_turn_draws_the_same_path():
    """eta CrB stands in two catalogues with both nodes; only velocities tell them apart."""
    times = years(*np.linspace(1934, 1976, 30))
    other = ETA_CRB.with_other_node()
    assert_allclose(other.node.to_value(u.deg), 203.717)
    assert_allclose(other.argument.to_value(u.deg), 39.907)
    for mine, yours in zip(ETA_CRB.offsets(times), other.offsets(times), strict=True):
        assert_allclose(mine.to_value(u.arcsec), yours.to_value(u.arcsec), atol=1e-14)
    mine, _ = ETA_CRB.velocities(times, k1=5 * KMS)
    yours, _ = other.velocities(times, k1=5 * KMS)
    assert_allclose(mine.to_value(KMS), -yours.to_value(KMS), atol=1e-12)


def test_argument_of_the_primary_is_half_a_turn_away():
    """Spectroscopists give the primary's argument: V1 = gamma + K1 [cos(w1 + v) + e cos w1]."""
    times = years(*np.linspace(1934, 1976, 30))
    w1 = ETA_CRB.argument.to_value(u.rad) + np.pi
    v = ETA_CRB.true_anomaly(times).to_value(u.rad)
    primary, companion = ETA_CRB.velocities(times, k1=5 * KMS, k2=7 * KMS, gamma=3 * KMS)
    shape = np.cos(w1 + v) + 0.2763 * np.cos(w1)
    assert_allclose(primary.to_value(KMS), 3 + 5 * shape, atol=1e-12)
    assert_allclose(companion.to_value(KMS), 3 - 7 * shape, atol=1e-12)


def test_confusing_the_two_arguments_shows():
    """Turning the argument alone by 180 deg puts the companion opposite to its place."""
    wrong = visual(41.623, 1934.008, 0.2763, 0.907, 59.025, 23.717, 39.907)
    times = years(1940.0, 1960.0)
    for right, turned in zip(ETA_CRB.offsets(times), wrong.offsets(times), strict=True):
        assert_allclose(right.to_value(u.mas), -turned.to_value(u.mas), atol=1e-10)


def test_thiele_innes_and_back(rng):
    """The inverse returns what went in, but for the choice between the two nodes."""
    a, tilt = rng.uniform(0.1, 9, 500), np.arccos(rng.uniform(-1, 1, 500))
    node, argument = rng.uniform(0, np.pi, 500), rng.uniform(0, 2 * np.pi, 500)
    back = campbell(*thiele_innes(a, tilt, node, argument))
    for found, given in zip(back, (a, tilt, node, argument), strict=True):
        # cos i near +-1 leaves i only sqrt(1e-16) of precision; node and argument follow.
        assert_allclose(found, given, atol=1e-7)


@pytest.mark.parametrize("inclination", [0.0, 90.0, 180.0])
def test_thiele_innes_where_angles_degenerate(inclination):
    """Face-on, node and argument are defined by their sum only; the sky path must come back."""
    orbit = visual(10.0, 2000.0, 0.4, 1.0, inclination, 70.0, 200.0)
    back = Elements.from_thiele_innes(
        orbit.thiele_innes, period=orbit.period, periastron=orbit.periastron, eccentricity=0.4
    )
    assert_allclose(back.inclination.to_value(u.deg), inclination, atol=1e-5)
    assert_allclose(
        back.thiele_innes.to_value(u.mas), orbit.thiele_innes.to_value(u.mas), atol=1e-5
    )


GOOD = {
    "period": 10 * u.day,
    "periastron": Time(60000, format="mjd", scale="tdb"),
    "eccentricity": 0.1,
    "semimajor_axis": 3 * u.mas,
    "inclination": 30 * u.deg,
    "node": 40 * u.deg,
    "argument": 50 * u.deg,
}


@pytest.mark.parametrize(
    ("name", "value", "message"),
    [
        ("period", 10.0, "period must be a Quantity in d"),
        ("period", 10 * u.mas, "period must be a Quantity in d"),
        ("period", -1 * u.day, "period must be positive"),
        ("periastron", 60000.0, "periastron must be an astropy Time"),
        ("eccentricity", 1.0, r"eccentricity must lie in \[0, 1\)"),
        ("semimajor_axis", 0 * u.mas, "semimajor_axis must be positive"),
        ("inclination", 181 * u.deg, "inclination must lie in 0 to 180 deg"),
        ("node", 1 * u.day, "node must be a Quantity in deg"),
    ],
)
def test_wrong_elements(name, value, message):
    with pytest.raises(ValueError, match=message):
        Elements(**(GOOD | {name: value}))


def test_utc_and_tdb_times_agree():
    """The same instants on two clocks, 69.2 s apart in 2023, give the same place."""
    orbit = Elements(**GOOD)
    tdb = Time([60001.0, 60002.5], format="mjd", scale="tdb")
    for one, two in zip(orbit.offsets(tdb), orbit.offsets(tdb.utc), strict=True):
        assert_allclose(one.to_value(u.mas), two.to_value(u.mas), rtol=1e-9)
