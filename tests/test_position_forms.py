"""The forms in which positions and velocities come: offsets, equinoxes, differences."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from orbits import InputError, read_positions, read_velocities
from orbits.positions import ellipse_covariance


def ecsv(path, columns, rows, **meta):
    """Write a small ECSV table; `columns` are (name, unit)."""
    lines = ["# %ECSV 1.0", "# ---", "# datatype:"]
    for name, unit in columns:
        kind = "string" if unit == "text" else "float64"
        given = f", unit: {unit}" if unit not in ("", "text") else ""
        lines.append(f"# - {{name: {name}, datatype: {kind}{given}}}")
    if meta:
        lines.append("# meta: {" + ", ".join(f"{k}: {v}" for k, v in meta.items()) + "}")
    lines.append(",".join(name for name, _ in columns))
    lines.insert(2, "# delimiter: ','")
    path.write_text("\n".join(lines + [",".join(map(str, row)) for row in rows]) + "\n")
    return path


POLAR = [("mjd", "d"), ("separation", "mas"), ("position_angle", "deg"),
         ("error_major", "mas"), ("error_minor", "mas"), ("error_angle", "deg")]  # fmt: skip


def test_offsets_and_correlation(tmp_path):
    """3 east and 4 north are 5 mas at atan2(3, 4); the covariance is the textbook's."""
    columns = [("mjd", "d"), ("east", "mas"), ("north", "mas"), ("error_east", "mas"),
               ("error_north", "mas"), ("correlation", "")]  # fmt: skip
    found = read_positions(ecsv(tmp_path / "p.ecsv", columns, [(60000, 3, 4, 0.2, 0.1, -0.5)]))
    assert_allclose(found.separation, 5.0)
    assert_allclose(found.position_angle, 36.86989765)
    assert_allclose(found.covariance[0], [[0.04, -0.01], [-0.01, 0.01]])
    with pytest.raises(InputError, match="row 1, column correlation"):
        read_positions(ecsv(tmp_path / "q.ecsv", columns, [(60000, 3, 4, 0.2, 0.1, 1.0)]))


@pytest.mark.parametrize(
    ("ra", "dec", "year", "turned"),
    [
        # Rigorous precession of a 1 arcsec pair from J2000 to another equinox: what has to be
        # taken off again. The printed digits are good to 1e-5 deg.
        (90.0, 60.0, 2050, 0.55661),
        (270.0, 45.0, 2050, -0.39362),
        (200.0, -1.45, 1900, 0.18461),
        (30.0, 80.0, 1900, -1.49985),
    ],
)
def test_equinox_of_the_position_angle(tmp_path, ra, dec, year, turned):
    rows = [(60000, 10, 50 + turned, 0.2, 0.1, 20 + turned)]
    path = ecsv(tmp_path / "p.ecsv", POLAR, rows, equinox=year, ra=ra, dec=dec)
    found = read_positions(path)
    # FK5 and today's precession differ by 0.003 arcsec per year: 1e-4 deg over a century.
    assert_allclose(found.position_angle, 50.0, atol=2e-4)
    assert_allclose(found.covariance, ellipse_covariance([0.2], [0.1], [20.0]), atol=1e-6)


def test_equinox_of_date_and_proper_motion(tmp_path):
    """d(alpha) sin(delta): -0.17331 deg in a century at +60 deg for d(alpha) = -0.20012 deg."""
    motion = -0.20012 * np.cos(np.radians(60.0)) * 3_600_000 / 100  # mas per year
    mjd = 51544.5 + 100 * 365.25
    rows = [(mjd, 10, 50, 0.2, 0.1, 20)]
    still = read_positions(ecsv(tmp_path / "a.ecsv", POLAR, rows, equinox="date", ra=90, dec=60))
    moving = read_positions(
        ecsv(tmp_path / "b.ecsv", POLAR, rows, equinox="date", ra=90, dec=60, pm_ra=motion)
    )
    change = moving.position_angle - still.position_angle
    assert_allclose(change, 0.17331, atol=2e-5)
    # The linear rule: 0.0055675 deg per year times sin(ra) / cos(dec); good to 1 % in a century.
    assert_allclose(50.0 - still.position_angle, 0.0055675 * 100 * 2, rtol=0.01)


def test_an_equinox_without_the_star(tmp_path):
    path = ecsv(tmp_path / "p.ecsv", POLAR, [(60000, 10, 50, 0.2, 0.1, 20)], equinox=1950)
    with pytest.raises(InputError, match="needs 'equinox'"):
        read_positions(path)


def test_velocity_differences(tmp_path):
    columns = [("mjd", "d"), ("velocity", "km / s"), ("error", "km / s"), ("star", "text")]
    found = read_velocities(ecsv(tmp_path / "v.ecsv", columns, [(60000, 7, 1, "difference")]))
    assert found.star.tolist() == [2]
    with pytest.raises(InputError, match="none of primary, companion, difference"):
        read_velocities(ecsv(tmp_path / "w.ecsv", columns, [(60000, 7, 1, "tertiary")]))
