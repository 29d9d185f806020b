"""nodeline search: JSON and nothing else, exit codes, pictures, options refused."""

import json
from dataclasses import replace

import numpy as np
import pytest
from matplotlib.image import imread

from orbits.binary import predict
from orbits.oifits import load
from orbits.simulation.array import Array
from orbits.simulation.export import night_file
from orbits.simulation.nights import Spectrum, blank_night

BEST = {
    "separation_mas", "separation_err_mas", "position_angle_deg", "position_angle_err_deg",
    "contrast", "contrast_err", "primary_diameter_mas", "companion_diameter_mas",
    "covariance_xy_mas2", "chi2", "dof", "delta_chi2", "significance_sigma",
    "false_alarm_probability",
}  # fmt: skip
TOP = {
    "target", "instrument", "mjd", "n_v2", "n_t3", "best", "alternatives", "field_mas", "step_mas",
    "seconds",
}  # fmt: skip


@pytest.fixture(scope="module")
def nights(tmp_path_factory):
    """Files of a night with a companion of 6 per cent at 9 mas, PA 120 deg, and of one without."""
    folder = tmp_path_factory.mktemp("nights")
    array = Array(
        name="FOUR", latitude=-24.6, longitude=-70.4, stations=("A", "B", "C", "D"), diameter=1.8,
        local=np.array([[0, 0, 0], [48, 22, 0], [-35, 81, 0], [66, 103, 0]], float),
    )  # fmt: skip
    spectrum = Spectrum.even("K", 2.0e-6, 2.4e-6, 6)
    blank = blank_night(
        array, spectrum, target="Demo 1", ra=40.0, dec=-30.0, mjd=60000.1 + np.arange(3) / 24
    )
    angle = np.radians(120)
    scenes = {"lit": {"x": 9 * np.sin(angle), "y": 9 * np.cos(angle), "contrast": 0.06}, "dark": {}}
    rng = np.random.default_rng(3)
    for name, scene in scenes.items():
        tables = {}
        for kind, value in zip(("v2", "t3"), predict(blank, **scene), strict=True):
            table, error = getattr(blank, kind), {"v2": 0.02, "t3": 0.01}[kind]
            noisy = value + error * rng.standard_normal(len(table))
            tables[kind] = replace(table, value=noisy, error=np.full(len(table), error))
        file = night_file(replace(blank, **tables), array, spectrum, ra=40.0, dec=-30.0)
        file.write(folder / f"{name}.fits")
    return folder


def test_json_is_all_that_goes_to_stdout(nodeline, nights):
    code, out, err = nodeline("search", nights / "lit.fits", "--field", 15, "--json")
    assert code == 0
    result = json.loads(out)
    assert set(result) >= TOP
    assert set(result["best"]) >= BEST
    assert all(set(one) >= BEST | {"weight"} for one in result["alternatives"])
    best = result["best"]
    assert abs(best["separation_mas"] - 9) < 4.5 * best["separation_err_mas"]
    assert abs(best["position_angle_deg"] - 120) < 4.5 * best["position_angle_err_deg"]
    assert abs(best["contrast"] - 0.06) < 4.5 * best["contrast_err"]
    assert "closure phases" in err


def test_nothing_found_is_exit_code_4_and_still_a_result(nodeline, nights):
    code, out, err = nodeline(
        "search", nights / "dark.fits", "--field", 15, "--json", "--noise-searches", 200
    )
    assert code == 4
    assert json.loads(out)["best"]["false_alarm_probability"] > 0.01
    assert "no companion can be claimed" in err


def test_words_for_people(nodeline, nights):
    code, out, _ = nodeline("search", nights / "lit.fits", "--field", 15, "--bootstrap", 20)
    assert code == 0
    assert "mas, PA" in out
    assert "false alarm below 1e-9 over the field, extrapolated" in out
    assert "errors by resampling 30 blocks" in out


def test_pictures_are_written_once(nodeline, nights, tmp_path):
    arguments = ("search", nights / "lit.fits", "--field", 15, "--pictures", tmp_path)
    assert nodeline(*arguments)[0] == 0
    pictures = sorted(tmp_path.iterdir())
    assert [path.name.split("-")[-1] for path in pictures] == ["data.png", "field.png"]
    for path in pictures:
        # Neither blank nor black.
        assert 0.05 < (imread(path)[..., :3].min(axis=-1) < 0.9).mean() < 0.6
    code, _, err = nodeline(*arguments)
    assert code == 3
    assert "--force" in err


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (("--field", -1), "--field must be positive"),
        (("--fit", "radius"), "no parameter radius"),
        (("--fix", "slope"), "expected NAME=VALUE"),
        (("--prior", "slope=1"), "expected NAME=MEAN,SIGMA"),
        (("--primary-shape", "square"), "one of point"),
        (("--use", "flux"), "unknown observable 'flux'"),
        (("--error-floor", "v3=0.1"), "unknown observable 'v3'"),
        (("--error-scale", "v2=-1"), "scale of v2 must be positive"),
    ],
)
def test_wrong_usage_is_exit_code_2(nodeline, nights, options, words):
    code, _, err = nodeline("search", nights / "lit.fits", *options)
    assert code == 2
    assert words in " ".join(err.replace("│", " ").split())


def test_errors_can_be_scaled_and_raised(nodeline, nights):
    """Where no error is left as stated, chi-square falls by the square of the factor."""
    told = []
    for options in ((), ("--error-scale", "v2=2", "--error-scale", "t3=2")):
        code, out, _ = nodeline(
            "search",
            nights / "lit.fits",
            "--field",
            15,
            "--json",
            "--noise-searches",
            100,
            *options,
        )
        assert code == 0
        told.append(json.loads(out)["best"])
    # But for the prior of the companion's diameter the solution is the same.
    assert told[1]["chi2"] == pytest.approx(told[0]["chi2"] / 4, rel=0.02)
    code, out, _ = nodeline(
        "search", nights / "lit.fits", "--field", 15, "--json", "--noise-searches", 100,
        "--error-floor", "t3=30",
    )  # fmt: skip
    assert code == 0
    assert json.loads(out)["best"]["delta_chi2"] < told[0]["delta_chi2"]


def test_correlated_errors_can_be_asked_for(nodeline, nights):
    """The file lists no correlations; the options add them, and the errors change."""
    errors = []
    for options in ((), ("--shared-baselines", "--v2-calibration", 0.03, "--t3-calibration", 0.5)):
        code, out, _ = nodeline(
            "search",
            nights / "lit.fits",
            "--field",
            15,
            "--json",
            "--noise-searches",
            100,
            *options,
        )
        assert code == 0
        errors.append(json.loads(out)["best"]["contrast_err"])
    assert errors[1] > 1.2 * errors[0]


def test_what_is_wrong_with_the_file_is_said_in_a_line(nodeline, nights, tmp_path):
    file = load(nights / "lit.fits")
    v2, t3 = file.data
    v2.vis2err[0, 0], t3.t3phierr[0, 0] = -1.0, 0.0
    file.write(tmp_path / "spoilt.fits")
    code, _, err = nodeline("search", tmp_path / "spoilt.fits", "--field", 15, "--json")
    assert code == 0
    told = [line for line in err.splitlines() if line.startswith("nodeline: unusable: ")]
    assert len(told) == 1
    assert "spoilt.fits: OI_VIS2 (HDU 4): column VIS2ERR is negative in row 1, channel 1" in told[0]
    assert "(and 1 more: nodeline inspect tells all)" in told[0]
    assert "nodeline:" not in nodeline("search", nights / "lit.fits", "--field", 15, "--json")[2]
