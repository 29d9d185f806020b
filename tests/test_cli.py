"""The command line: exit codes, one clear sentence, and nothing left behind."""

import json

import numpy as np
import pytest
from astropy.io import fits

from orbits.demo import scenario
from orbits.simulation.export import night_file
from orbits.simulation.programme import nights


def not_fits(path):
    path.write_text("SIMPLE, but no FITS")


def plain_image(path):
    fits.PrimaryHDU(np.zeros((4, 4))).writeto(path)


def only_a_target(path):
    columns = [
        fits.Column("TARGET_ID", "I", array=[1]),
        fits.Column("TARGET", "16A", array=["Harrow 7"]),
    ]
    table = fits.BinTableHDU.from_columns(columns, name="OI_TARGET")
    table.header["OI_REVN"] = 1
    fits.HDUList([fits.PrimaryHDU(), table]).writeto(path)


def all_flagged(path):
    plan = scenario()
    night = next(nights(plan, np.random.default_rng(2)))
    file = night_file(night, plan.array, plan.spectrum, ra=plan.star.ra, dec=plan.star.dec)
    for table in file.data:
        table.flag = np.ones_like(table.flag)
    file.write(path)


def test_no_usable_row(nodeline, tmp_path):
    path = tmp_path / "night.fits"
    all_flagged(path)
    code, out, err = nodeline("search", path)
    assert code == 3
    assert str(path) in err
    assert len(err.strip().splitlines()) == 1
    assert out == ""


@pytest.mark.parametrize("command", ["search", "inspect"])
@pytest.mark.parametrize("fault", [not_fits, plain_image, only_a_target])
def test_unusable_oifits(nodeline, tmp_path, command, fault):
    path = tmp_path / "night.fits"
    fault(path)
    code, out, err = nodeline(command, path)
    assert code == 3
    assert str(path) in err
    assert len(err.strip().splitlines()) == 1
    assert "OI_" not in out
    assert list(tmp_path.iterdir()) == [path]


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("colour = 'red'", "unknown key 'colour'"),
        ("[positions]\ntables = ['bare.csv']", "column 'separation' has no unit"),
        ("[positions]\ntables = ['gone.csv']", "no file matches 'gone.csv'"),
        ("[nights]\nfiles = ['bare.csv']", "nodeline measure"),
    ],
)
def test_unusable_system(nodeline, tmp_path, text, message):
    (tmp_path / "bare.csv").write_text(
        "mjd_d,separation,position_angle_deg,separation_error_mas,position_angle_error_deg\n"
        "60310,20,90,0.1,0.5\n"
    )
    path = tmp_path / "star.toml"
    path.write_text(text)
    before = sorted(tmp_path.iterdir())
    code, out, err = nodeline("orbit", path)
    assert code == 3
    assert message in err
    assert len(err.strip().splitlines()) == 1
    assert out == ""
    assert sorted(tmp_path.iterdir()) == before


@pytest.mark.parametrize(
    "arguments", [["search"], ["frobnicate"], ["search", "--frobnicate", "x.fits"]]
)
def test_wrong_usage(nodeline, arguments):
    code, out, err = nodeline(*arguments)
    assert code == 2
    assert out == ""
    assert "Traceback" not in err


def test_version(nodeline):
    code, out, _ = nodeline("--version")
    assert (code, out.split()[0]) == (0, "nodeline")


def test_measure_and_search_speak_json(nodeline, tmp_path):
    plan = scenario()
    (tmp_path / "nights").mkdir()
    night = next(nights(plan, np.random.default_rng(2)))
    file = night_file(night, plan.array, plan.spectrum, ra=plan.star.ra, dec=plan.star.dec)
    file.write(tmp_path / "nights" / "one.fits")
    system = tmp_path / "harrow.toml"
    system.write_text('[nights]\nfiles = ["nights/*.fits"]\n')
    code, out, err = nodeline("search", tmp_path / "nights" / "one.fits", "--json")
    assert code == 0, err
    found = json.loads(out)
    assert found["target"] == "Harrow 7"
    contract = {
        "separation_mas", "separation_err_mas", "position_angle_deg", "position_angle_err_deg",
        "contrast", "contrast_err", "primary_diameter_mas", "companion_diameter_mas",
        "covariance_xy_mas2", "chi2", "dof", "delta_chi2", "significance_sigma",
        "false_alarm_probability",
    }  # fmt: skip
    assert contract <= set(found["best"])
    assert {"alternatives", "field_mas", "step_mas", "seconds", "n_v2", "n_t3"} <= set(found)
    code, out, err = nodeline("measure", system, "--json")
    assert code == 0, err
    (night,) = json.loads(out)["nights"]
    assert night["detected"]
    assert night["solutions"][0]["separation_mas"] == pytest.approx(
        found["best"]["separation_mas"], abs=1e-6
    )
    code, _, err = nodeline("measure", system)
    assert code == 3
    assert "exists already" in err
