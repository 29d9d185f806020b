"""The system file: what belongs together, and what is refused."""

import pytest

from orbits import InputError, read_system

GOOD = """
name = "Harrow 7"
[nights]
files = ["nights/*.fits"]
field = 40
[velocities]
tables = ["v.csv"]
[parallax]
value = 12.3
error = 0.2
[fit]
live_points = 300
"""


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "nights").mkdir()
    for name in ("nights/b.fits", "nights/a.fits", "v.csv"):
        (tmp_path / name).touch()
    return tmp_path


def write(folder, text):
    path = folder / "harrow7.toml"
    path.write_text(text)
    return path


def test_paths_are_relative_to_the_file(folder):
    system = read_system(write(folder, GOOD))
    assert system.name == "Harrow 7"
    assert system.nights == (folder / "nights/a.fits", folder / "nights/b.fits")
    assert system.velocities == (folder / "v.csv",)
    assert (system.parallax.value, system.parallax.error) == (12.3, 0.2)
    assert (system.field, system.live_points) == (40.0, 300)
    assert system.results == folder / "harrow7-results"


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (("live_points", "livepoints"), "unknown key 'fit.livepoints'"),
        (("[fit]", "[fitting]"), "unknown key 'fitting'"),
        (("= 300", '= "many"'), "fit.live_points must be a whole number"),
        (("= 300", "= 300.5"), "fit.live_points must be a whole number"),
        (("v.csv", "w.csv"), "velocities.tables: no file matches 'w.csv'"),
        (("value = 12.3", "value = -1"), "parallax.value must be a positive number"),
        (("error = 0.2", ""), "parallax.error must be a positive number"),
        (('["v.csv"]', "[1]"), "velocities.tables must list file names"),
        (('["v.csv"]', '"v.csv"'), "velocities.tables must be a list"),
        (("[fit]", "fit = 1\n[other"), "not TOML"),
        (("field = 40", 'use = ["v3"]'), "nights.use: no observable 'v3'; there are v2, t3"),
        (("field = 40", "wavelengths = [1.5]"), "nights.wavelengths must be two numbers"),
        (("field = 40", "stations = [1, 2]"), "nights.stations must list names"),
        (("field = 40", "gap = 0"), "nights.gap must be a positive number of hours"),
        (("field = 40", "error_floor = {v3 = 1}"), "unknown key 'nights.error_floor.v3'"),
        (("field = 40", "error_scale = {v2 = 0}"), "nights.error_scale.v2 must be positive"),
    ],
)
def test_faults_are_named(folder, change, message):
    path = write(folder, GOOD.replace(*change))
    with pytest.raises(InputError, match=message) as caught:
        read_system(path)
    assert str(caught.value).startswith(str(path))
