"""From tables to observations: targets, nights, instruments, errors."""

from pathlib import Path

import astropy.units as u
import numpy as np
import oifits_files as make
import pytest
from astropy.io import fits
from astropy.time import Time

from orbits import InputError, read, read_epochs
from orbits.oifits import ErrorBars, Selection, Target, Vis, observations, select
from orbits.oifits.checking import check, check_together
from orbits.oifits.joining import join
from orbits.oifits.schema import ExtraColumn


@pytest.fixture
def full(rng, tmp_path):
    """The path of a file with two targets, two instruments and two nights."""
    make.full(rng).write(tmp_path / "full.fits")
    return tmp_path / "full.fits"


def test_several_targets_must_be_chosen_from(full):
    with pytest.raises(InputError, match=r"several targets; choose one of 'Harrow 7', 'Calib"):
        read(full)
    with pytest.raises(InputError, match=r"no target 'Harrow 8'; there is 'Harrow 7', 'Calib"):
        read(full, target="Harrow 8")
    observation = read(full, target="harrow  7")
    assert observation.target == "Harrow 7"
    assert (len(observation.v2), len(observation.t3)) == (16, 12)  # one flagged, one NaN
    assert observation.instruments == ("SIM_H",)
    assert observation.stations == ("S1", "S2", "S3", "S4")
    assert read(full, target="Calibrator of it").instrument == "SIM_K"


def test_observables_that_would_do_are_named(rng):
    file = make.full(rng)
    file.data, file.correlations = file.of(Vis), []
    with pytest.raises(InputError, match=r"closure phases of Harrow 7; it has amplitudes: ask for"):
        observations(file)


def test_stations_go_by_their_numbers_where_no_array_names_them(rng):
    file = make.small(rng)
    file.arrays = []
    for table in file.data:
        table.arrname = None
    (night,) = observations(file)
    assert night.stations == ("1", "2", "3", "4")
    np.testing.assert_array_equal(night.v2.exposures.stations + 1, file.data[0].sta_index)
    part = select(file, Selection(stations=("1", "2", "3")))
    assert {len(table) for table in part.data} == {3, 1}
    with pytest.raises(InputError, match="no station 'S1'; there is no OI_ARRAY: give STA_INDEX"):
        select(file, Selection(stations=("S1",)))
    # Zeros stand for no station at all.
    file.data[0].sta_index[:] = 0
    (night,) = observations(file)
    assert (night.v2.exposures.stations == -1).all()


def test_every_datum_is_the_one_of_its_row_and_channel(full, rng):
    """Against a loop over rows and channels of the table as it was written."""
    file = make.full(np.random.default_rng(20260314))
    observation = read(full, target="Harrow 7")
    table, wave = file.data[1], file.wavelengths[0].eff_wave.astype(float)
    number = 0
    for row in range(6):
        for channel in range(3):
            if table.flag[row, channel] or np.isnan(table.vis2data[row, channel]):
                continue
            v2 = observation.v2
            assert v2.value[number] == table.vis2data[row, channel]
            assert v2.error[number] == table.vis2err[row, channel]
            assert v2.wavelength[number] == wave[channel]
            assert v2.legs[number].tolist() == [[table.ucoord[row], table.vcoord[row]]]
            assert (v2.row[number], v2.channel[number]) == (row, channel)
            assert (v2.stations[number] + 1).tolist() == table.sta_index[row].tolist()
            number += 1
    assert number == len(observation.v2)


def test_nights_are_told_apart_by_the_gap(rng, tmp_path):
    file = make.small(rng)
    times = [0.0, 0.2, 0.45, 1.0, 1.3]  # days: 6 h within a night, 13 h between nights
    file.data = [make.vis2(rng, night=t) for t in times]
    file.write(tmp_path / "nights.fits")
    sizes = [len(epoch.v2) for epoch in read_epochs(tmp_path / "nights.fits")]
    assert sizes == [3 * 18, 2 * 18]
    assert len(read_epochs(tmp_path / "nights.fits", gap=5 * u.hour)) == 5 - 1
    assert len(read_epochs(tmp_path / "nights.fits", gap=20 * u.hour)) == 1
    with pytest.raises(InputError, match=r"2 nights.*choose one of 2026-03-14T05:12, 2026-03-15"):
        read(tmp_path / "nights.fits")
    assert len(read(tmp_path / "nights.fits", night="2026-03-15").v2) == 36


def test_phases_come_in_radians_within_half_a_turn(rng):
    file = make.small(rng)
    file.data[1].t3phi[0] = [190.0, -180.37, 540.0]
    (observation,) = observations(file)
    expected = np.radians([-170.0, 179.63, -180.0])
    np.testing.assert_allclose(observation.t3.value[:3], expected, rtol=1e-14)


def test_flipping_reverses_closure_phases_only(rng, tmp_path):
    make.small(rng).write(tmp_path / "night.fits")
    plain, other = (read(tmp_path / "night.fits", flip_phase=f) for f in (False, True))
    np.testing.assert_array_equal(other.t3.value, -plain.t3.value)
    np.testing.assert_array_equal(other.v2.value, plain.v2.value)


def test_scales_and_floors_of_errors(rng):
    file = make.small(rng)
    errors = ErrorBars(scale={"v2": 2.0}, floor={"v2": 0.03, "t3": 1.5 * u.deg})
    file.data[0].vis2err[0] = [0.01, 0.02, 0.03]
    (observation,) = observations(file, errors=errors)
    np.testing.assert_array_equal(observation.v2.error[:3], [0.03, 0.04, 0.06])
    np.testing.assert_allclose(observation.t3.error, np.radians(1.5), rtol=1e-15)


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ({"scale": {"v3": 2.0}}, "unknown observable 'v3'"),
        ({"scale": {"v2": 0.0}}, "scale of v2 must be positive, got 0.0"),
        ({"floor": {"v2": -1.0}}, "floor of v2 must not be negative"),
    ],
)
def test_senseless_changes_of_errors_are_refused(arguments, words):
    with pytest.raises(ValueError, match=words):
        ErrorBars(**arguments)


def test_other_observables_are_there_when_asked_for(rng):
    file = make.full(rng)
    wanted = ("v2", "t3", "t3amp", "visamp", "visphi")
    (plain,) = observations(file, target="Harrow 7")
    (more,) = observations(file, target="Harrow 7", observables=wanted)
    assert len(plain.visamp) == len(plain.visphi) == 0
    assert (len(more.visamp), len(more.visphi), len(more.t3amp)) == (18, 18, 0)
    np.testing.assert_array_equal(more.visamp.value, file.data[0].visamp.ravel())
    # Each of the three channels is referred to the two others, and the mean means nothing.
    referred, got = (
        np.reshape(phase, (6, 3)) for phase in (file.data[0].visphi, more.visphi.value)
    )
    expected = np.radians(np.diff(referred)) * 2 / 3
    np.testing.assert_allclose(np.diff(got), expected, atol=1e-14)
    assert more.correlation.shape == (16 + 12 + 36, 16 + 12 + 36)
    (calibrator,) = observations(file, target="Calibrator of it", observables=wanted)
    np.testing.assert_array_equal(calibrator.t3amp.value, 0.5)
    with pytest.raises(ValueError, match="unknown observable"):
        read_epochs("nowhere.fits", observables=("v4",))


SELECTIONS = {
    "instrument": (Selection(instrument="sim_k"), lambda d: d["ins"] == "SIM_K"),
    "dates": (
        Selection(dates=(Time(61113.5, format="mjd"), Time(61115.0, format="mjd"))),
        lambda d: d["mjd"] > 61113.5,
    ),
    "wavelengths": (Selection(wavelengths=[1.52, 1.7] * u.um), lambda d: 1.52 < d["wave"] < 1.7),
    "baselines": (Selection(baselines=[50, 100] * u.m), lambda d: 50 < d["baseline"] < 100),
    "stations": (Selection(stations=("s1", "S3")), lambda d: set(d["stations"]) <= {1, 3}),
}


@pytest.mark.parametrize(("selection", "wanted"), SELECTIONS.values(), ids=SELECTIONS)
def test_selection_keeps_exactly_what_is_asked_for(rng, selection, wanted):
    """Against a loop over all squared visibilities of the file."""
    file = make.full(rng)

    def data(source):
        for table in source.data:
            if table.extname != "OI_VIS2":
                continue
            waves = source.wavelength(table.insname).eff_wave
            for row in range(len(table)):
                for channel, wave in enumerate(waves):
                    yield {
                        "ins": table.insname,
                        "mjd": table.mjd[row],
                        "wave": wave * 1e6,
                        "baseline": np.hypot(table.ucoord[row], table.vcoord[row]),
                        "stations": tuple(table.sta_index[row].tolist()),
                        "value": str(table.vis2data[row, channel]),  # NaN equals itself as text
                    }

    kept = list(data(select(file, selection)))
    assert kept == [datum for datum in data(file) if wanted(datum)]
    assert 0 < len(kept) < len(list(data(file)))


@pytest.mark.parametrize(
    ("selection", "words"),
    [
        (Selection(instrument="SIM_X"), r"no instrument 'SIM_X'; there is 'SIM_H'"),
        (Selection(stations=("S9",)), r"no station 'S9'; there is 'S1'"),
        (Selection(baselines=[900, 901] * u.m), r"nothing remains.*baselines 900 to 901 m"),
    ],
)
def test_a_selection_of_nothing_says_so(rng, selection, words):
    with pytest.raises(InputError, match=words):
        select(make.small(rng), selection)


def test_dates_of_a_selection_are_told_in_utc():
    """2024-01-01 0 h UTC is 0 h 1 min 9.184 s TT: 37 leap seconds and 32.184 s. And a date for
    which there are no leap seconds yet is no cause for a warning."""
    dates = Time(["2024-01-01T00:01:09.184", "2080-01-01T00:01:09.184"], scale="tt")
    selection = Selection(dates=tuple(dates))
    assert str(selection) == "dates 2024-01-01T00:00:00.000 to 2080-01-01T00:00:00.000"
    with pytest.raises(InputError, match="nothing remains"):
        select(make.small(np.random.default_rng(1)), Selection(dates=(dates[1], dates[1])))


def test_files_join_by_content_not_by_number(rng, tmp_path):
    """The same names with other contents, and the same contents under other numbers."""
    one, two, three = (make.small(rng) for _ in range(3))
    two.target.target_id[:] = 7  # the same star under another number
    two.target.target = np.array(["HARROW  7"])
    for table in two.data:
        table.target_id[:] = 7
        table.mjd[:] += 1
    three.target.target[:] = "Other"  # another star under the same number
    three.wavelengths[0].eff_wave[:] += np.float32(1e-7)  # another set-up under the same name
    three.arrays[0].staxyz[:] += 5.0
    for number, file in enumerate((one, two, three)):
        file.write(tmp_path / f"{number}.fits")
    paths = [tmp_path / f"{number}.fits" for number in range(3)]
    first, second = read_epochs(paths, target="Harrow 7")
    assert (len(first.v2), len(second.v2)) == (18, 18)
    assert first.instruments == second.instruments == ("SIM_H",)
    other = read(paths, target="Other")
    assert other.instruments == ("SIM_H_2",)
    np.testing.assert_array_equal(np.unique(other.v2.wavelength), three.wavelengths[0].eff_wave)
    assert (first.files, second.files) == ((str(paths[0]),), (str(paths[1]),))


FAR = {"raep0": [200.0], "decep0": [50.0]}


@pytest.mark.parametrize(
    ("other", "one"),
    [
        (FAR, False),
        ({"raep0": [84.1], "decep0": [-1.2 + 1.01 / 60]}, False),
        ({"raep0": [84.1 - 360], "decep0": [-1.2 + 0.99 / 60]}, True),
        ({"raep0": [0.0], "decep0": [0.0]}, True),
        ({"raep0": [np.nan], "decep0": [-1.2]}, True),
        ({**FAR, "equinox": [1950.0]}, True),
    ],
    ids=["far", "beyond an arcminute", "within", "0, 0", "NaN", "another equinox"],
)
def test_a_name_is_one_star_unless_it_stands_at_two_places(rng, tmp_path, other, one):
    first, second, third = (make.small(rng) for _ in range(3))
    second.target = Target(target_id=[1], target=["harrow 7"], **other)
    third.target.target[:] = "Calibrator"
    third.data = third.data[:1]
    for number, file in enumerate((first, third, second)):
        for table in file.data:
            table.mjd[:] += 0.02 * number
        file.write(tmp_path / f"{number}.fits")
    paths = [tmp_path / f"{number}.fits" for number in range(3)]
    night = read(paths, target="Harrow 7")
    said = [str(p) for p in night.problems if "from that of others" in p.what]
    if one:
        assert (len(night.v2), said) == (36, [])
        return
    assert (len(night.v2), len(said)) == (18, 1)
    assert f"target 'harrow 7' of {paths[2]} is " in said[0]
    assert said[0].endswith("taken as another star, 'harrow 7_2'")
    seen = read(paths, target="Harrow 7_2")
    np.testing.assert_array_equal(seen.v2.value, second.data[0].vis2data.ravel())


def test_unknown_columns_of_targets_survive_joining_if_they_are_alike(rng, tmp_path):
    files = [make.small(rng) for _ in range(3)]
    for number, file in enumerate(files):
        file.target.target[:] = f"Star {number}"
        form = "D" if number < 2 else "E"
        raw = np.array([[4.0 + number]], dtype=">f8" if number < 2 else ">f4").view(np.uint8)
        file.target.extra["MAGNITUDE"] = ExtraColumn({"TTYPE": "MAGNITUDE", "TFORM": form}, raw)
    join(files[:2]).write(tmp_path / "both.fits")
    with fits.open(tmp_path / "both.fits") as opened:
        assert opened["OI_TARGET"].data["MAGNITUDE"].tolist() == [4.0, 5.0]
    whole = join(files)
    assert not whole.target.extra
    (said,) = [p for p in check_together(whole) if "MAGNITUDE" in p.what]
    assert said.done == "left out of what is joined"


def test_each_night_names_the_files_that_its_data_come_from(rng, tmp_path):
    nights = {"first": [0.0], "second": [1.0], "both": [0.1, 1.1], "spoilt": [0.0]}
    for name, times in nights.items():
        file = make.small(rng)
        file.data = [make.vis2(rng, night=t) for t in times]
        file.data[0].flag[:] = name == "spoilt"
        file.write(tmp_path / f"{name}.fits")
    epochs = read_epochs([tmp_path / f"{name}.fits" for name in nights])
    found = [[Path(file).stem for file in epoch.files] for epoch in epochs]
    assert found == [["first", "both"], ["second", "both"]]


def test_joined_correlations_stay_with_their_file(rng):
    """Two files with the same CORRNAME: a datum correlates within its own file only."""
    files = [make.full(rng), make.full(rng)]
    for table in files[1].data:
        table.mjd[:] += 10
    parts = [observations(file, target="Harrow 7")[0] for file in files]
    both = observations(join(files), target="Harrow 7")
    assert len(both) == 2
    for part, night in zip(parts, both, strict=True):
        np.testing.assert_array_equal(night.correlation.toarray(), part.correlation.toarray())


def test_a_target_under_two_numbers_is_one(rng):
    file = make.small(rng)
    file.target = file.target.select(np.array([0, 0]))
    file.target.target_id[:] = [1, 2]
    file.data[1].target_id[:] = 2
    (observation,) = observations(file)
    assert (len(observation.v2), len(observation.t3)) == (18, 12)
    assert "target 'harrow 7' has 2 ids" in [problem.what for problem in check(file)]
