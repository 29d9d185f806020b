"""Catalogue files: what is refused, what is found, and that no entry is lost."""

import subprocess
import sys
from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose

from orbits.catalogue import Catalogue, Entry, add_entries, find_entry, find_solutions
from orbits.errors import InputError

ELEMENTS = {
    "period": 117.3,
    "periastron": 60312.8,
    "eccentricity": 0.36,
    "semimajor_axis": 21.4,
    "inclination": 128.0,
    "node": 63.0,
    "argument": 212.0,
}


def entry_of(system="Harrow 7", solution="first", *, texts=None, **numbers) -> Entry:
    return Entry(system=system, solution=solution, numbers={**ELEMENTS, **numbers}, **(texts or {}))


@pytest.fixture
def two(tmp_path):
    path = tmp_path / "two.ecsv"
    add_entries(
        path,
        [
            entry_of(texts={"aliases": ("HX 7", "Old Harrow"), "preferred": True}, k1=23.5),
            entry_of("Tarn 3", eccentricity=0.95, eccentricity_error=0.01, ra=201.7, dec=-12.9),
        ],
    )
    return path


def test_entries_come_back_as_they_went_in(two):
    first, second = Catalogue.read(two)
    assert first.aliases == ("HX 7", "Old Harrow")
    assert first.preferred
    assert not second.preferred
    assert first.number("k1") == 23.5
    assert np.isnan(second.number("k1"))
    assert second.number("eccentricity_error") == 0.01
    assert first.elements.period.to_value("d") == 117.3
    with pytest.raises(ValueError, match="no column 'colour'"):
        first.number("colour")


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("unit: mas", "unit: km", r"column 'semimajor_axis' is in km, which is no mas"),
        ("{name: eccentricity,", "{name: eccentricity, unit: deg,", r"must have no unit"),
        ("{name: period, unit: d,", "{name: period,", r"column 'period' has no unit"),
        ("0.95", "1.95", r"row 2 \(Tarn 3/first\), column eccentricity: 1.95 must be at least 0"),
        ("0.95", "nan", r"row 2, column eccentricity: empty or not a number"),
        ("0.95", "big", r"not a readable ECSV table|row 2, column eccentricity: 'big'"),
        ("128.0", "228.0", r"row 1 \(Harrow 7/first\), column inclination: 228.0 must be within"),
        ("117.3", "-117.3", r"row 1 \(Harrow 7/first\), column period: -117.3 must be above 0"),
        ("Tarn 3", "HARROW  7", r"row 2, columns system and solution: HARROW  7/first stands in"),
        ("node", "knot", r"unknown column 'knot'; known are system"),
        ("True", "perhaps", r"not a readable ECSV table|column preferred"),
        (
            " 0.01 ",
            " -0.01 ",
            r"row 2 \(Tarn 3/first\), column eccentricity_error: -0.01 must be 0",
        ),
    ],
)
def test_faults_of_the_hand_are_named(two, old, new, message):
    text = two.read_text()
    assert old in text
    two.write_text(text.replace(old, new))
    with pytest.raises(InputError, match=message) as caught:
        Catalogue.read(two)
    assert two.name in str(caught.value)


def test_a_missing_column_is_named(two):
    table = Catalogue.read(two).table
    table.remove_column("argument")
    table.write(two, format="ascii.ecsv", overwrite=True)
    with pytest.raises(InputError, match="no column argument; it is needed"):
        Catalogue.read(two)


def test_two_preferred_solutions_are_refused(two):
    table = Catalogue.read(two).table
    table["system"], table["solution"], table["preferred"] = ["A", "A"], ["x", "y"], [True, True]
    table.write(two, format="ascii.ecsv", overwrite=True)
    with pytest.raises(InputError, match="row 2, column preferred: row 1 is the preferred"):
        Catalogue.read(two)


def test_finding(two):
    catalogue = Catalogue.read(two)
    for name in ("harrow7", "HARROW 7", "old  harrow", "hx7/FIRST", "Harrow 7/first"):
        assert catalogue.find(name).key == "Harrow 7/first"
    with pytest.raises(InputError, match="no entry 'Harow 7'; did you mean Harrow 7"):
        catalogue.find("Harow 7")
    with pytest.raises(InputError, match="no entry 'Harrow 7/second'"):
        catalogue.find("Harrow 7/second")


def test_the_preferred_or_else_the_latest_solution_is_found(two):
    later = [
        entry_of("Tarn 3", "a", texts={"date": "1999"}),
        entry_of("Tarn 3", "b", texts={"date": "2011-05"}),
        entry_of("Harrow 7", "b", texts={"date": "2030"}),
    ]
    catalogue = add_entries(two, later)
    assert [e.solution for e in catalogue.solutions("Tarn 3")] == ["b", "a", "first"]
    assert catalogue.find("Harrow 7").solution == "first"
    newest = entry_of("Harrow 7", "c", texts={"preferred": True})
    catalogue = add_entries(two, [newest])
    assert catalogue.find("Harrow 7").solution == "c"
    chosen = catalogue.select(preferred=True)
    assert sorted(entry.key for entry in chosen) == ["Harrow 7/c", "Tarn 3/b"]
    with pytest.raises(InputError, match="Harrow 7/c is there already"):
        add_entries(two, [newest])


def test_an_alias_of_two_systems_is_refused(two):
    add_entries(two, [entry_of("Other", texts={"aliases": ("HX 7",)})])
    with pytest.raises(InputError, match="'HX 7' may be Harrow 7 or Other"):
        Catalogue.read(two).find("HX 7")


def test_selecting(two):
    add_entries(two, [entry_of("Fell 9", period=9000.0, ra=201.9, dec=-12.9)])
    catalogue = Catalogue.read(two)

    def names(**conditions):
        return [entry.system for entry in catalogue.select(**conditions)]

    assert names(match="arr") == ["Harrow 7"]
    assert names(match="old ha") == ["Harrow 7"]
    assert names(period=(1000, 1e5)) == ["Fell 9"]
    # 0.2 deg in right ascension at that declination are 0.195 deg; Harrow 7 has no place here.
    assert names(near=(201.7, -12.9, 0.194)) == ["Tarn 3"]
    assert names(near=(201.7, -12.9, 0.196)) == ["Tarn 3", "Fell 9"]
    # At periastron the separation is below a (1 - e), 1.07 mas for Tarn 3 and 13.7 for the rest.
    assert names(separation=(0, 1.1), mjd=60312.8) == ["Tarn 3"]
    assert len(names(match="nothing of this name")) == 0
    with pytest.raises(ValueError, match="without the time"):
        catalogue.select(separation=(0, 1))


def test_several_processes_adding_at_once_lose_nothing(tmp_path):
    path = tmp_path / "shared.ecsv"
    code = """
import sys
from pathlib import Path
from orbits.catalogue import Entry, add_entries
who = sys.argv[2]
numbers = dict(period=1.0, periastron=6e4, eccentricity=0.1, semimajor_axis=1.0, inclination=1.0,
               node=0.0, argument=0.0)
for turn in range(8):
    entry = Entry(system=f"star {turn}", solution=who, numbers=numbers)
    add_entries(Path(sys.argv[1]), [entry])
"""
    workers = [
        subprocess.Popen([sys.executable, "-c", code, str(path), who]) for who in ("a", "b", "c")
    ]
    assert [worker.wait() for worker in workers] == [0, 0, 0]
    keys = {entry.key for entry in Catalogue.read(path)}
    assert keys == {f"star {turn}/{who}" for turn in range(8) for who in "abc"}
    assert [file.name for file in tmp_path.iterdir() if not file.name.startswith(".")] == [
        path.name
    ]


def test_positions_and_samples_stand_beside_the_catalogue(two, rng, tmp_path):
    from astropy.table import Table

    (tmp_path / "seen.csv").write_text(
        "mjd_d,separation_mas,position_angle_deg,separation_error_mas,position_angle_error_deg\n"
        "60320,12.0,200.0,0.1,0.5\n"
    )
    samples = {
        "period_d": [117.2, 117.4],
        "periastron_mjd": [60312.8] * 2,
        "eccentricity": [0.36] * 2,
        "semimajor_axis_mas": [21.4] * 2,
        "inclination_deg": [128.0] * 2,
        "node_deg": [63.0] * 2,
        "argument_deg": [212.0] * 2,
    }
    Table(samples).write(tmp_path / "samples.ecsv")
    texts = {"positions": "seen.csv", "samples": "samples.ecsv"}
    add_entries(two, [entry_of("Beck 1", texts=texts)])
    bundle = find_entry("Beck 1", str(two)).bundle(rng)
    assert bundle.spread == "posterior"
    assert_allclose(bundle.draws.period, [117.2, 117.4])
    assert_allclose(bundle.positions.separation, [12.0])
    broken = replace(find_entry("Beck 1", str(two)), samples="lost.ecsv")
    with pytest.raises(InputError, match=r"lost.ecsv: no such file"):
        broken.bundle(rng)


def test_a_node_of_another_equinox_needs_a_place():
    here = entry_of(equinox=1900.0)
    assert here.turn(1900.0) == 0.0
    with pytest.raises(InputError, match="without ra and dec it cannot be turned"):
        here.turn(2000.0)
    there = replace(here, numbers={**here.numbers, "ra": 90.0, "dec": 60.0})
    # A pair at 6 h, +60: 1.11327 deg in a century (rigorous precession).
    assert_allclose(there.turn(2000.0), 1.1133, atol=2e-3)  # counted at the place of 2000


def test_names_across_the_catalogues_that_come_along():
    assert find_entry("harrow 7").system == "Harrow 7"
    assert [e.solution for e in find_solutions("27 Tau")] == ["Torres 2025", "Zwahlen 2004"]
    with pytest.raises(InputError, match=r"no entry 'Nowhere' in invented.ecsv, published.ecsv"):
        find_entry("Nowhere")
    with pytest.raises(InputError, match="no such file, nor a catalogue that comes along"):
        find_entry("Capella", "missing.ecsv")
