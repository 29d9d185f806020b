"""Tables of positions and velocities: what is read, what is refused and how it says so."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from orbits import InputError, read_positions, read_velocities, write_positions, write_velocities
from orbits.positions import (
    Positions,
    ellipse_covariance,
    error_ellipse,
    offsets,
    position_angle,
)
from orbits.times import utc_of_tdb

POSITIONS_ECSV = """\
# %ECSV 1.0
# ---
# datatype:
# - {name: mjd, unit: d, datatype: float64}
# - {name: separation, unit: arcsec, datatype: float64}
# - {name: position_angle, unit: deg, datatype: float64}
# - {name: separation_error, unit: mas, datatype: float64}
# - {name: position_angle_error, unit: deg, datatype: float64}
mjd separation position_angle separation_error position_angle_error
60310.0 0.02 90.0 0.1 0.5
60320.0 0.01 0.0 0.2 0.5
"""

POSITIONS_CSV = """\
mjd_d,separation_mas,position_angle_deg,error_major_mas,error_minor_mas,error_angle_deg,night,weight
60310.0,20.0,90.0,0.3,0.1,20.0,first,3
60310.0,20.0,270.0,0.3,0.1,20.0,first,1
60320.0,10.0,0.0,0.3,0.1,20.0,,
"""

VELOCITIES_CSV = """\
mjd_d,velocity_kms,error_kms,star
60310.0,12.5,0.2,primary
60310.0,-14.0,0.3,companion
"""


def save(folder, name, text):
    path = folder / name
    path.write_text(text)
    return path


def test_units_of_the_file_are_converted(tmp_path):
    positions = read_positions(save(tmp_path, "p.ecsv", POSITIONS_ECSV))
    assert_allclose(positions.xy, [[20.0, 0.0], [0.0, 10.0]], atol=1e-14)
    # 20 mas East: the error in separation lies along x, that in angle along y.
    assert_allclose(
        positions.covariance[0], np.diag([0.1**2, (20 * np.radians(0.5)) ** 2]), atol=1e-16
    )  # rounding of the sine of 180 deg
    assert_allclose(
        positions.covariance[1], np.diag([(10 * np.radians(0.5)) ** 2, 0.2**2]), atol=1e-16
    )
    assert len(set(positions.night)) == 2


def test_plain_csv_carries_its_units_in_the_names(tmp_path):
    positions = read_positions(save(tmp_path, "p.csv", POSITIONS_CSV))
    assert_allclose(positions.xy, [[20.0, 0.0], [-20.0, 0.0], [0.0, 10.0]], atol=1e-14)
    assert_allclose(positions.weight, [0.75, 0.25, 1.0])
    assert positions.night[0] == positions.night[1] != positions.night[2]


def test_years_need_their_kind(tmp_path):
    text = "year,separation_mas,position_angle_deg,separation_error_mas,position_angle_error_deg\n"
    path = save(tmp_path, "p.csv", text + "1950.0,20,90,1,1\n")
    with pytest.raises(InputError, match="year_kind"):
        read_positions(path)


def test_positions_survive_writing(tmp_path):
    before = read_positions(save(tmp_path, "p.csv", POSITIONS_CSV))
    write_positions(tmp_path / "q.ecsv", before)
    after = read_positions(tmp_path / "q.ecsv")
    # Going through separation and angle costs a few roundings; MJD near 6e4 keeps 1e-11 d.
    assert_allclose(after.xy, before.xy, atol=1e-12)
    assert_allclose(after.covariance, before.covariance, atol=1e-14)
    assert_allclose(after.mjd, before.mjd, rtol=0, atol=3e-11)
    assert_allclose(after.weight, before.weight)


def test_velocities_survive_writing(tmp_path):
    before = read_velocities(save(tmp_path, "v.csv", VELOCITIES_CSV))
    assert list(before.star) == [0, 1]
    write_velocities(tmp_path / "w.ecsv", before)
    after = read_velocities(tmp_path / "w.ecsv")
    assert_allclose(after.velocity, before.velocity)
    assert_allclose(utc_of_tdb(after.mjd), [60310.0, 60310.0], rtol=0, atol=3e-11)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (("separation_mas", "separation"), r"column 'separation' has no unit"),
        (("separation_mas", "separation_deg"), None),  # an angle may come in degrees
        (("separation_mas", "separation_kms"), r"'separation_kms' is in km / s, which is no mas"),
        (("separation_mas", "distance_mas"), r"unknown column 'distance_mas'"),
        (("60320.0,10.0", "60320.0,ten"), r"row 3, column separation_mas: 'ten' is not a number"),
        (("60320.0,10.0", ",10.0"), r"row 3, column mjd: empty or not a number"),
        ((",0.3,0.1,20.0,,", ",-0.3,0.1,20.0,,"), r"row 3, column error_major: -0.3"),
        (("first,3", "first,-3"), r"row 1, column weight: -3.0 is negative"),
        (("error_minor_mas", "separation_error_mas"), r"no column error_minor"),
    ],
)
def test_faults_are_named_with_file_row_and_column(tmp_path, change, message):
    path = save(tmp_path, "p.csv", POSITIONS_CSV.replace(*change))
    if message is None:
        assert read_positions(path).separation[0] == pytest.approx(20.0 * 3600e3)
        return
    with pytest.raises(InputError, match=message) as caught:
        read_positions(path)
    assert str(caught.value).startswith(str(path))


def test_unknown_star_is_refused(tmp_path):
    path = save(tmp_path, "v.csv", VELOCITIES_CSV.replace("companion", "B"))
    with pytest.raises(InputError, match="row 2, column star: 'B' is none of"):
        read_velocities(path)


@pytest.mark.parametrize("text", ["", "mjd_d,separation_mas\n", "a,b\n1,2,3,4\n5\n"])
def test_what_is_no_table_is_refused(tmp_path, text):
    with pytest.raises(InputError, match=r"p\.csv"):
        read_positions(save(tmp_path, "p.csv", text))


def test_missing_file_is_refused(tmp_path):
    with pytest.raises(InputError, match="no such file"):
        read_positions(tmp_path / "none.ecsv")


def test_error_ellipse_inverts_its_covariance(rng):
    minor = rng.uniform(0.1, 1.0, 50)
    major = minor * rng.uniform(1.01, 30.0, 50)
    angle = rng.uniform(0.0, 180.0, 50)
    found = error_ellipse(ellipse_covariance(major, minor, angle))
    # The minor axis is the root of a difference: it loses (major/minor)^2 = 900 roundings.
    assert_allclose(found[0], major, rtol=1e-12)
    assert_allclose(found[1], minor, rtol=1e-12)
    assert_allclose(found[2], angle, atol=1e-10)


def test_ellipse_is_the_scatter_it_describes(rng):
    """Drawn along and across a direction, points have the stated covariance in (x, y)."""
    t = np.radians(37.0)
    along, across = 2.0 * rng.standard_normal(200_000), 0.5 * rng.standard_normal(200_000)
    x = along * np.sin(t) + across * np.cos(t)
    y = along * np.cos(t) - across * np.sin(t)
    expected = ellipse_covariance(2.0, 0.5, 37.0)
    # A variance estimated from n points scatters by sqrt(2/n) of itself: 4 sigma of 4 mas2.
    assert_allclose(np.cov(x, y), expected, atol=4 * 4.0 * np.sqrt(2 / 200_000))


def test_position_angle_stays_below_a_full_turn():
    """North is 0, East 90; the angle just West of North must not round up to 360."""
    assert_allclose(position_angle(np.array([0, 1, 0, -1.0]), np.array([1, 0, -1, 0.0])),
                    [0, 90, 180, 270])  # fmt: skip
    assert position_angle(np.array([-1e-20]), np.array([1.0]))[0] == 0.0


def test_polar_errors_are_the_axes_of_an_ellipse_along_the_radius():
    """An ellipse whose major axis points at the primary, one across, and one that holds it."""
    angle = np.array([30.0, 200.0, 30.0])
    xy = np.stack(offsets(np.array([5.0, 8.0, 0.01]), angle), axis=-1)
    turned = angle + np.array([0.0, 90.0, 0.0])
    covariance = ellipse_covariance(np.full(3, 0.2), np.full(3, 0.1), turned)
    blank = np.full(3, "", dtype=object)
    found = Positions(
        mjd=np.full(3, 60000.0),
        xy=xy,
        covariance=covariance,
        weight=np.ones(3),
        night=blank,
        instrument=blank,
        source=blank,
        contrast=np.full(3, np.nan),
        contrast_error=np.full(3, np.nan),
    )
    along, across = found.polar_errors
    assert_allclose(along, [0.2, 0.1, 0.2], rtol=1e-12)
    assert_allclose(across, [np.degrees(0.1 / 5), np.degrees(0.2 / 8), 180.0], rtol=1e-12)
