"""The catalogues that come along: sources, and arithmetic that a slip of the pen would break."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from orbits.catalogue import Catalogue, find_entry, packaged_catalogues
from orbits.masses import double_lined_masses, orbital_parallax, total_mass


@pytest.fixture(scope="module")
def published() -> Catalogue:
    return Catalogue.read(packaged_catalogues()["published"])


def test_every_row_has_its_source(published):
    assert len(published) >= 8
    assert all(len(entry.source) > 10 and entry.date for entry in published)


# Relative difference that the rounding of the printed numbers, and the published error of the
# parallax where it comes from elsewhere, leave between total mass and sum of masses.
@pytest.mark.parametrize(
    ("name", "tolerance"),
    [
        ("Capella", 1e-4),
        ("lam Vir", 3e-4),
        ("HD 195987", 1.5e-3),  # 0.04 of the published errors, as for the masses themselves
        ("Atlas/Zwahlen 2004", 1.2e-2),  # parallax rounded from 132 +- 4 pc; 0.3 sigma
        ("Atlas/Torres 2025", 5e-3),  # the parallax from 136.2 pc to four digits, cubed
        ("omi Leo", 5e-3),  # 41.4 +- 0.05 pc, cubed
        ("sig2 CrB", 2.5e-3),  # a of 1.225, printed to 4e-4, cubed
        ("kap Peg AB", 4e-4),
        ("bet Cen", 3e-3),
    ],
)
def test_visual_orbit_and_parallax_give_the_published_masses(published, name, tolerance):
    entry = published.find(name)
    total = total_mass(*(entry.number(n) for n in ("period", "semimajor_axis", "parallax")))
    assert_allclose(
        total, entry.number("primary_mass") + entry.number("companion_mass"), rtol=tolerance
    )


# Tolerances: what the rounding of the printed inputs can do, for the masses and the parallax.
@pytest.mark.parametrize(
    ("name", "masses", "parallax"),
    [
        ("Capella", 9e-5, 1e-4),
        ("lam Vir", 8e-4, 3e-4),
        ("Mizar A", 7e-3, None),
        ("Atlas/Zwahlen 2004", 5e-3, 4e-3),
        ("Atlas/Torres 2025", 5e-3, 1e-3),
    ],
)
def test_both_velocity_curves_give_the_published_masses(published, name, masses, parallax):
    entry = published.find(name)
    orbit = [entry.number(n) for n in ("period", "eccentricity", "inclination", "k1", "k2")]
    orbit[2] = np.radians(orbit[2])
    expected = [entry.number("primary_mass"), entry.number("companion_mass")]
    assert_allclose(double_lined_masses(*orbit), expected, rtol=masses)
    if parallax is not None:
        found = orbital_parallax(*orbit, entry.number("semimajor_axis"))
        assert_allclose(found, entry.number("parallax"), rtol=parallax)


def test_atlas_shows_the_ambiguity_of_the_node(published, rng):
    """The orbits of 2004 and 2025 differ by half a turn in node and argument: the same path."""
    old, new = (published.find(f"Atlas/{name}") for name in ("Zwahlen 2004", "Torres 2025"))
    for name in ("node", "argument"):
        assert_allclose(new.number(name) - old.number(name), 180, atol=4)  # and what they measured
    mjd = 50600 + np.linspace(0, 291, 30)
    places = [np.stack(entry.bundle(rng).best.offsets(mjd)) for entry in (old, new)]
    # The elements changed by about 1 mas all in all; the wrong node would be off by 26 mas.
    assert np.abs(places[0] - places[1]).max() < 1.5


def test_omicron_leonis_needs_besselian_years(published):
    """The time of the node, RJD 50629.831, is catalogued as 1997.49563: a Besselian year."""
    from orbits.times import tdb_of_year

    mjd = published.find("omi Leo").number("periastron")
    # 1997.49563 is printed to 1e-5 yr, half of which is 0.002 d.
    assert_allclose(tdb_of_year(1997.49563, "besselian"), mjd, atol=0.002)
    assert abs(tdb_of_year(1997.49563, "julian") - mjd) > 0.4


def test_the_demonstration_star_agrees_with_itself():
    """Axis and velocities follow from masses and distance by Kepler's third law."""
    entry = find_entry("Harrow 7", "invented")
    n = entry.number
    assert (n("primary_mass"), n("companion_mass")) == (1.62, 1.31)
    # au and velocity of the Earth-like unit: a in au is (M P^2)^(1/3) in years, to 1.3e-5.
    axis = (2.93 * (117.3 / 365.25) ** 2) ** (1 / 3)
    assert_allclose(n("semimajor_axis") / n("parallax"), axis, rtol=2e-5)
    speed = 29.7847 * (2.93 / axis) ** 0.5 * np.sin(np.radians(128)) / np.sqrt(1 - 0.36**2)
    assert_allclose([n("k1"), n("k2")], speed * np.array([1.31, 1.62]) / 2.93, rtol=3e-5)
