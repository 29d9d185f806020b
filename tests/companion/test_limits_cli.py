"""The command lines of limits, spectrum, posterior and of companions put into files."""

import gzip
import json
from pathlib import Path

import numpy as np
import pytest
from astropy.table import Table
from numpy.testing import assert_allclose
from skies import night_of

from orbits.cli import app
from orbits.cli.frame import run
from orbits.simulation.nights import Noise


@pytest.fixture
def night(tmp_path, rng):
    path = tmp_path / "night.fits"
    noise = Noise(v2_floor=0.01, closure_phase=0.01)
    night_of("Harrow 9", noise, rng, channels=3, primary_diameter=1.0).write(path)
    return path


def command(monkeypatch, capsys, *arguments):
    """Exit code, stdout and stderr of a command."""
    monkeypatch.setattr("sys.argv", ["nodeline", *map(str, arguments)])
    code = run(app)
    return code, *capsys.readouterr()


QUICK = ("--field", 15, "--positions", 9, "--injections", 20)


def test_limits_writes_tables_and_a_picture_once(night, tmp_path, monkeypatch, capsys):
    system = tmp_path / "harrow.toml"
    system.write_text(
        'name = "Harrow 9"\n[nights]\nfiles = ["night.fits"]\n[parallax]\nvalue = 12.0\n'
        "error = 0.2\n[primary]\nmagnitude = 4.9\n"
    )
    arguments = ("limits", system, *QUICK, "--json", "--output", tmp_path / "out")
    code, out, words = command(monkeypatch, capsys, *arguments)
    assert code == 0, words
    told = json.loads(out)
    assert told["parallax_mas"] == 12.0
    assert told["primary_magnitude"] == 4.9
    assert len(told["curve"]) == 20
    names = {path.name for path in (tmp_path / "out").iterdir()}
    assert names == {"limits.ecsv", "limits-map.ecsv", "completeness.ecsv", "limits.png"}
    curve = Table.read(tmp_path / "out" / "limits.ecsv")
    # 12 mas of parallax: 1 / 12 au for each mas, and a modulus of 5 log10(100 / 12) = 4.604.
    assert_allclose(curve["separation_au"], curve["separation"] / 12.0)
    seen = curve[np.isfinite(curve["recovered"])]
    absolute = seen["absolute_mag_recovered"] - seen["delta_mag_recovered"]
    assert_allclose(absolute, 4.9 - 4.604, atol=1e-3)
    assert command(monkeypatch, capsys, *arguments)[0] == 3


def test_interrupted_limits_leave_no_half_written_file(night, tmp_path, monkeypatch, capsys):
    """Ctrl-C in the middle of the second table: the first is whole, nothing else is there."""
    folder = tmp_path / "out"

    class Interrupted:
        def write(self, path, **_):
            Path(path).write_text("# half of it")
            raise KeyboardInterrupt

    monkeypatch.setattr("orbits.companion.limit_tables.map_table", lambda _: Interrupted())
    code, _, words = command(monkeypatch, capsys, "limits", night, *QUICK, "--output", folder)
    assert code == 130
    assert "no file was left half written" in words
    assert [path.name for path in folder.iterdir()] == ["limits.ecsv"]
    assert len(Table.read(folder / "limits.ecsv")) == 20


def test_companion_goes_in_and_comes_out(night, tmp_path, monkeypatch, capsys):
    lit, dark = tmp_path / "lit.fits", tmp_path / "dark.fits"
    place = ("9", "140", "0.06")
    code, out, _ = command(
        monkeypatch, capsys, "simulate", night, "--inject", *place, "--output", lit, "--json"
    )
    assert code == 0
    assert json.loads(out)["injected"] is True
    code, out, _ = command(
        monkeypatch, capsys, "spectrum", lit, "--field", 15, "--output", tmp_path / "s.ecsv",
        "--picture", tmp_path / "s.png", "--json",
    )  # fmt: skip
    assert code == 0
    assert len(json.loads(out)["channels"]) == 3
    code, out, _ = command(
        monkeypatch, capsys, "posterior", lit, "--field", 15, "--live-points", 50, "--json",
        "--positions", tmp_path / "positions.ecsv",
    )  # fmt: skip
    assert code == 0
    assert json.loads(out)["log_evidence_against_single_star"] > 10
    code, _, _ = command(monkeypatch, capsys, "simulate", lit, "--remove", *place, "--output", dark)
    assert code == 0
    assert command(monkeypatch, capsys, "spectrum", dark, "--field", 15)[0] == 4


def test_limits_heed_errors_and_parts_of_the_data(night, tmp_path, monkeypatch, capsys):
    """With errors ten times what the noise is, the limit is z errors: ten times z + n of before.

    z is 2.8 at 99.73% of one side, and n, the noise of the first limit, nearly always below 3.
    """
    scaled = ("--error-scale", "v2=10", "--error-scale", "t3=10")
    typical = []
    for options in ((), scaled):
        code, out, words = command(monkeypatch, capsys, "limits", night, *QUICK, "--json", *options)
        assert code == 0, words
        curve = [row["contrast_profile_median"] for row in json.loads(out)["curve"]]
        typical.append(np.median([contrast for contrast in curve if contrast is not None]))
    assert typical[1] > 10 * typical[0] * 2.8 / (2.8 + 3)
    system = tmp_path / "part.toml"
    system.write_text(
        'name = "Harrow 9"\n[nights]\nfiles = ["night.fits"]\nstations = ["T1", "T9"]\n'
    )
    code, _, words = command(monkeypatch, capsys, "limits", system, *QUICK)
    assert code == 3
    assert "no station 'T" in words


@pytest.mark.parametrize("packed", [False, True])
def test_data_are_no_scenario(packed, night, tmp_path, monkeypatch, capsys):
    if packed:
        zipped = night.with_suffix(".fits.gz")
        zipped.write_bytes(gzip.compress(night.read_bytes()))
        night = zipped
    out = tmp_path / "x"
    code, _, words = command(monkeypatch, capsys, "simulate", night, "--output", out)
    assert code == 3
    assert f"{night}: FITS data, not a scenario" in words
    assert "--inject" in words


@pytest.mark.parametrize(
    "section", ['nights]\nfiles = ["night.fits"]', 'positions]\ntables = ["p.csv"]']
)
def test_a_system_is_no_scenario(section, tmp_path, monkeypatch, capsys):
    system = tmp_path / "harrow.toml"
    system.write_text(f'name = "Harrow 9"\n[{section}\n')
    given = ("simulate", system, "--output", tmp_path / "x")
    code, _, words = command(monkeypatch, capsys, *given)
    assert code == 3
    assert f"{system}: a system file" in words
    assert f"nodeline measure {system}" in words


@pytest.mark.parametrize("text", ["name = ", 'name = "x"\n[nights]\ndates = [60000]\n', "\xff"])
def test_a_scenario_with_a_mistake_is_one(text, tmp_path, monkeypatch, capsys):
    path = tmp_path / "scenario.toml"
    path.write_text(text, encoding="latin-1")
    code, _, words = command(monkeypatch, capsys, "simulate", path, "--output", tmp_path / "x")
    assert code == 3
    assert "not TOML" in words or "star is missing" in words


def test_wrong_usage_is_said(night, tmp_path, monkeypatch, capsys):
    for confidence in (1.5, 0.4):
        code, _, words = command(
            monkeypatch, capsys, "limits", night, *QUICK, "--confidence", confidence
        )
        assert code == 2
        assert "between 0.5 and 1" in words
    both = ("--inject", 1, 2, 0.1, "--remove", 1, 2, 0.1)
    out = tmp_path / "x.fits"
    assert command(monkeypatch, capsys, "simulate", night, *both, "--output", out)[0] == 2
    wrong = ("--inject", 1, 2, 3.0)
    assert command(monkeypatch, capsys, "simulate", night, *wrong, "--output", out)[0] == 2
    nowhere = ("--inject", 15, "nan", 0.1)
    code, _, words = command(monkeypatch, capsys, "simulate", night, *nowhere, "--output", out)
    assert code == 2
    assert "must be a finite number" in " ".join(words.split())
    assert not out.exists()
