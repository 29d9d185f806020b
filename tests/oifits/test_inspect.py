"""nodeline inspect: what it tells, in words and in JSON, and the copies and pictures it makes."""

import json

import numpy as np
import oifits_files as make
import pytest

from orbits import read
from orbits.cli import app
from orbits.cli.frame import run
from orbits.oifits import load, observations
from orbits.oifits.inspection import inspect

MAS = np.pi / 180 / 3600 / 1000


@pytest.fixture
def nodeline(capsys, monkeypatch):
    """Run the command; returns the exit code, stdout and stderr."""

    def call(*arguments):
        monkeypatch.setattr("sys.argv", ["nodeline", *map(str, arguments)])
        code = run(app)
        return code, *capsys.readouterr()

    return call


@pytest.fixture
def full(rng, tmp_path):
    make.full(rng).write(tmp_path / "full.fits")
    return tmp_path / "full.fits"


def test_the_numbers_are_those_of_the_file(rng):
    """Baselines, angles and counts against the formulas, evaluated here by loops."""
    file = make.full(rng)
    result = inspect(file)
    pairs = np.concatenate([make.legs(make.PAIRS, night) for night in (0.0, 1.0)])
    lengths = np.hypot(*pairs.T)
    assert result["shortest_baseline_m"] == pytest.approx(lengths.min(), rel=1e-12)
    assert result["longest_baseline_m"] == pytest.approx(lengths.max(), rel=1e-12)
    # Wavelengths are single precision in the file: 6e-8.
    assert result["resolution_mas"] == pytest.approx(1.5e-6 / 2 / lengths.max() / MAS, rel=1e-6)
    assert result["alias_mas"] == pytest.approx(2.2e-6 / 2 / lengths.min() / MAS, rel=1e-6)
    field = 1.55e-6**2 / 0.05e-6 / lengths.max() / MAS
    assert result["field_mas"] == pytest.approx(field, rel=1e-6)
    # 1.4886 deg of closure phase for a contrast of 0.01, so 1 deg is 0.00672.
    assert result["faintest_contrast"] == pytest.approx(0.01 / 1.4886, rel=1e-4)
    assert result["data"]["v2"] == {"kept": 22, "flagged": 1, "left_out": 1}
    assert result["data"]["t3"] == {"kept": 16, "flagged": 0, "left_out": 0}
    assert [target["name"] for target in result["targets"]] == ["Harrow 7", "Calibrator of it"]
    assert [(n["night"], n["n_v2"], n["n_t3"]) for n in result["targets"][1]["nights"]] == [
        ("2026-03-15T00:00", 6, 4)
    ]


def test_files_of_which_nothing_is_wanted_are_left_out(nodeline, full, tmp_path):
    """Two nights in two files; only the second is asked for."""
    part = tmp_path / "part.fits"
    code, _, _ = nodeline("inspect", full, "--target", "Harrow 7", "--convert", part)
    assert code == 0
    options = ("--target", "Calibrator of it", "--convert", tmp_path / "copy.fits", "--json")
    code, out, _ = nodeline("inspect", part, full, *options)
    assert code == 0
    result = json.loads(out)
    assert [entry["file"] for entry in result["files"]] == [str(full)]
    assert result["left_out"][0].startswith(f"{part}: no target 'Calibrator of it'")
    code, _, err = nodeline("inspect", part, "--target", "Calibrator of it")
    assert code == 3
    assert "no target" in err


def test_json_is_one_object_and_nothing_else(nodeline, full):
    code, out, err = nodeline("inspect", full, "--json")
    result = json.loads(out)
    assert code == 0
    assert list(result) == ["files", "together"]
    assert result["files"][0]["file"] == str(full)
    assert "Harrow 7" in err


def test_words_fit_on_a_screen_and_speak_of_the_sign(nodeline, full):
    code, out, _ = nodeline("inspect", full)
    assert code == 0
    lines = out.splitlines()
    assert len(lines) <= 40
    assert max(map(len, lines)) <= 120
    assert "wrong sign of the phases cannot be seen in one file" in out
    assert "--flip-phase" in out
    assert "VIS2DATA or VIS2ERR is NaN in row 4, channel 3" in out


def test_what_is_not_oifits_ends_with_code_3_and_one_sentence(nodeline, tmp_path):
    path = tmp_path / "notes.txt"
    path.write_text("no stars here")
    code, out, err = nodeline("inspect", path)
    assert (code, out) == (3, "")
    assert err == f"nodeline: {path}: not a FITS file\n"


def test_a_file_that_breaks_the_standard_is_told_so(nodeline, rng, tmp_path):
    file = make.small(rng)
    file.data[0].vis2err[0, 0] = -0.1
    file.write(tmp_path / "night.fits")
    code, out, _ = nodeline("inspect", tmp_path / "night.fits", "--json")
    assert code == 0
    assert json.loads(out)["files"][0]["breaches"] == [
        "error: OI_VIS2 (HDU 4): column VIS2ERR is negative in unflagged data"
    ]
    assert "standard     1 breach\n" in nodeline("inspect", tmp_path / "night.fits")[1]


def test_strict_makes_the_suspicious_unusable(nodeline, rng, tmp_path):
    file = make.small(rng)
    file.data[0].vis2data[0, 0] = 1.9
    file.write(tmp_path / "night.fits")
    assert nodeline("inspect", tmp_path / "night.fits")[0] == 0
    code, out, err = nodeline("inspect", tmp_path / "night.fits", "--strict")
    assert code == 3
    assert "suspicious" in out
    assert "refused as strictly asked: OI_VIS2 (HDU 4): column VIS2DATA is far outside" in err
    copy = tmp_path / "copy.fits"
    assert nodeline("inspect", tmp_path / "night.fits", "--strict", "--convert", copy)[0] == 3
    assert not copy.exists()


def test_files_that_hold_the_same_data_are_told(nodeline, rng, tmp_path):
    file = make.small(rng)
    paths = [tmp_path / "night.fits", tmp_path / "merged.fits"]
    for path in paths:
        file.write(path)
    code, out, err = nodeline("inspect", *paths, "--json")
    assert code == 0
    told = [problem["what"] for problem in json.loads(out)["together"]]
    assert told == [f"{n} rows of {paths[1]} are the same as in {paths[0]}" for n in (6, 4)]
    assert f"{told[0]}; used twice" in err


def test_a_copy_has_the_selection_and_the_history(nodeline, full, tmp_path):
    copy = tmp_path / "copy.fits"
    code, out, _ = nodeline(
        "inspect", full, "--target", "Harrow 7", "--station", "S1", "--station", "S2",
        "--station", "S3", "--flip-phase", "--convert", copy, "--json",
    )  # fmt: skip
    assert code == 0
    assert json.loads(out)["convert"]["breaches"] == []
    file = load(copy)
    assert file.history[0] == "made for a test"
    assert file.history[1].endswith("of full.fits")
    assert file.history[2:5] == [
        "only stations S1 S2 S3",
        "only target Harrow 7",
        "sign of all phases reversed",
    ]
    before, after = read(full, target="Harrow 7"), read(copy)
    inside = (before.t3.stations < 3).all(axis=1)
    np.testing.assert_array_equal(after.t3.value, -before.t3.value[inside])


@pytest.mark.parametrize(
    ("options", "kept"),
    [
        (("--wavelengths", "1.52", "1.58"), 6 - 1),  # one is flagged
        (("--baselines", "0", "65"), None),
        (("--dates", "2026-03-14T12:00", "2026-03-16"), 6),
        (("--instrument", "sim_k"), 6),
    ],
)
def test_the_options_select(nodeline, full, rng, options, kept):
    """The file has 18 V2 of three channels in one night and 6 of one channel in the next."""
    code, out, _ = nodeline("inspect", full, *options, "--json")
    assert code == 0
    if kept is None:
        pairs = make.legs(make.PAIRS), make.legs(make.PAIRS, 1.0)
        short = [np.hypot(*pair.T) < 65 for pair in pairs]
        table = make.full(np.random.default_rng(20260314)).data[1]
        usable = ~table.flag & np.isfinite(table.vis2data)
        kept = int(usable[short[0]].sum() + short[1].sum())
    assert json.loads(out)["files"][0]["data"]["v2"]["kept"] == kept


def test_several_files_become_one_copy(nodeline, rng, tmp_path):
    paths = [tmp_path / f"{k}.fits" for k in range(2)]
    for day, path in enumerate(paths):
        file = make.small(rng)
        for table in file.data:
            table.mjd[:] += day
        file.write(path)
    code, out, _ = nodeline("inspect", *paths, "--convert", tmp_path / "both.fits")
    assert code == 0
    assert out.count("Harrow 7") == 2
    assert "valid OIFITS 2" in out
    assert len(load(tmp_path / "both.fits").data) == 4
    code, _, err = nodeline("inspect", *paths, "--convert", tmp_path / "both.fits")
    assert code == 3
    assert "exists already" in err


def test_a_picture_is_drawn_of_the_data(nodeline, full, tmp_path):
    picture = tmp_path / "night.png"
    code, _, _ = nodeline("inspect", full, "--target", "Harrow 7", "--plot", picture)
    assert code == 0
    assert picture.read_bytes().startswith(b"\x89PNG")
    assert nodeline("inspect", full, "--plot", tmp_path / "night.gif")[0] == 2
    other = tmp_path / "by_time.svg"
    options = ("--target", "Harrow 7", "--plot", other)
    assert nodeline("inspect", full, *options, "--colour", "mood")[0] == 2
    assert nodeline("inspect", full, *options, "--colour", "time")[0] == 0
    assert "MJD" in other.read_text()


def test_the_drawing_shows_every_datum_where_it_was_measured(rng, tmp_path):
    """Points of the panels against spatial frequencies computed from the table."""
    from orbits.plots.coverage import draw_coverage

    make.small(rng).write(tmp_path / "night.fits")
    observation = read(tmp_path / "night.fits")
    _, visibility, phase = draw_coverage([observation]).axes[:3]
    drawn = visibility.collections[-1].get_offsets()
    table = load(tmp_path / "night.fits").data[0]
    waves = make.spectrum().eff_wave.astype(float)
    frequency = np.hypot(table.ucoord, table.vcoord)[:, None] / waves
    np.testing.assert_allclose(drawn[:, 0], frequency.ravel() / 1e6, rtol=1e-12)
    np.testing.assert_array_equal(drawn[:, 1], table.vis2data.ravel())
    assert len(phase.collections[-1].get_offsets()) == 12
    assert not visibility.texts


def test_data_beyond_the_frame_are_counted(rng, tmp_path):
    from orbits.plots.coverage import draw_coverage

    file = make.small(rng)
    file.data = [make.vis2(rng, night=0.01 * k) for k in range(60)]  # 1080 data
    file.data[0].vis2data[0, :2] = [40.0, -7.0]
    (observation,) = observations(file)
    visibility = draw_coverage([observation]).axes[1]
    assert [text.get_text() for text in visibility.texts] == ["2 beyond the frame"]
    assert visibility.get_ylim() == (-0.05, 1.05)
