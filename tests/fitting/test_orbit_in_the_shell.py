"""nodeline orbit: exit codes, the contract of its JSON, files, hypotheses."""

import json
import sys

import numpy as np
import pytest
from made_binaries import binary, moving, seen

from orbits import write_positions, write_velocities
from orbits.cli import app
from orbits.cli.frame import run

SYSTEM = """
name = "Harrow 7"
[positions]
tables = ["positions.ecsv"]
[velocities]
tables = ["velocities.ecsv"]
[fit]
live_points = 100
[priors]
period = [50, 500]
"""


@pytest.fixture
def system(tmp_path):
    rng = np.random.default_rng(31)
    write_positions(tmp_path / "positions.ecsv", seen(binary(), 12, rng))
    write_velocities(tmp_path / "velocities.ecsv", moving(binary(), 12, rng))
    path = tmp_path / "harrow.toml"
    path.write_text(SYSTEM)
    return path


@pytest.fixture
def orbit(monkeypatch, capsys):
    def call(*arguments):
        monkeypatch.setattr(sys, "argv", ["nodeline", "orbit", *map(str, arguments)])
        code = run(app)
        return code, *capsys.readouterr()

    return call


def test_json_keeps_the_contract_and_files_are_kept(system, orbit):
    code, out, err = orbit(system, "--json", "--compare", "drift")
    assert code == 0
    tree = json.loads(out)
    assert tree["name"] == "Harrow 7"
    wanted = {"period_d", "periastron_mjd", "eccentricity", "semimajor_axis_mas",
              "inclination_deg", "node_deg", "argument_deg"}  # fmt: skip
    assert set(tree["elements"]) == wanted
    assert set(tree["velocities"]) >= {"k1_kms", "k2_kms", "gamma_kms"}
    assert set(tree["masses"]) >= {"total_msun", "primary_msun", "companion_msun"}
    for part in ("elements", "velocities", "masses"):
        for value in tree[part].values():
            assert set(value) == {"median", "plus", "minus"}
    assert set(tree) >= {"parallax_mas", "log_evidence", "log_evidence_err", "effective_samples",
                         "chi2", "dof", "seconds"}  # fmt: skip
    assert [one["name"] for one in tree["comparison"]] == ["as given", "drift"]
    # No drift was put in: the wider prior of the drift must cost evidence.
    assert tree["comparison"][1]["odds"] < 1
    assert "period_d" in err  # people's table went to stderr
    folder = system.with_name("harrow-results")
    stored = json.loads((folder / "orbit.json").read_text())
    assert stored["elements"] == tree["elements"]

    code, out, err = orbit(system)
    assert (code, out) == (3, "")
    assert "exists already" in err


def test_the_same_seed_gives_the_same_result(system, orbit):
    first = json.loads(orbit(system, "--json", "--seed", 5)[1])
    again = json.loads(orbit(system, "--json", "--seed", 5, "--force", "--cores", 2)[1])
    first.pop("seconds"), again.pop("seconds")
    assert first == again


def test_an_interrupted_fit_goes_on(system, orbit, monkeypatch):
    """Ctrl-C in the fit of the second hypothesis: the same command gives the same digits."""
    from orbits.fitting import explore

    folder = system.with_name("harrow-results")
    options = (system, "--json", "--compare", "circular")
    whole = json.loads(orbit(*options)[1])
    for path in folder.iterdir():
        path.unlink()
    real, calls = explore.sample, []

    def sample(*given, **named):
        calls.append(1)
        if len(calls) == explore.RUNS + 3:
            raise KeyboardInterrupt
        return real(*given, **named)

    monkeypatch.setattr(explore, "sample", sample)
    code, out, err = orbit(*options)
    assert (code, out) == (130, "")
    assert "the same command continues from there" in err
    assert not (folder / "orbit.json").exists()
    assert len(list(folder.glob("unfinished/*/*.npz"))) >= explore.RUNS + 2 + 4
    code, out, err = orbit(*options)
    assert code == 0
    assert err.count("continuing an interrupted fit from") == 2
    assert len(calls) <= 2 * explore.RUNS + 1
    whole.pop("seconds")  # of a continued fit only the last part could be timed
    assert json.loads(out) == whole
    assert "effective samples\n" in err
    assert not (folder / "unfinished").exists()
    assert "orbit" in json.loads((folder / "history.json").read_text())


def test_unusable_input(system, orbit, tmp_path):
    def failing(text):
        system.write_text(text)
        code, _, err = orbit(system)
        assert not system.with_name("harrow-results").exists()
        return code, err

    code, err = failing(SYSTEM.replace("period = [50, 500]", "period = [500, 50]"))
    assert code == 3
    assert "period needs a range" in err
    code, err = failing(SYSTEM + "[priors.normal]\nheight = [1, 1]\n")
    assert code == 3
    assert f"{system}: priors.normal: 'height' is not among what these data give" in err
    code, err = failing('name = "empty"\n')
    assert code == 3
    assert "no nights, positions or velocities" in err
    code, err = failing(SYSTEM.replace("live_points = 100", "outlier = true"))
    assert code == 3
    assert "unknown key 'fit.outlier'" in err
    code, _, err = orbit(system, "--compare", "square")
    assert code == 2
    assert "no hypothesis 'square'" in err


def test_too_few_data_are_refused_by_the_name_of_their_file(system, orbit, tmp_path):
    """Once, although the sentence comes from a fit that knows no files."""
    write_positions(tmp_path / "two.ecsv", seen(binary(), 2, np.random.default_rng(31)))
    system.write_text('name = "two"\n[positions]\ntables = ["two.ecsv"]\n')
    code, out, err = orbit(system)
    assert (code, out) == (3, "")
    assert err.startswith(f"nodeline: {system}: 2 nights with a position and no velocities")
    assert err.count(str(system)) == 1
