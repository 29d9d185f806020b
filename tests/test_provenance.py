"""The record of what was run."""

import hashlib

import pytest

from orbits.errors import InputError
from orbits.provenance import HISTORY, history, record


def test_the_last_run_of_each_command_is_kept(tmp_path):
    (tmp_path / "night.fits").write_bytes(b"light" * 1000)
    results = tmp_path / "star-results"
    results.mkdir()
    assert history(results) == {}
    inputs = (tmp_path / "night.fits",)
    record(results, "measure", command="nodeline measure star.toml --seed 1", seed=1, inputs=inputs)
    record(results, "orbit", command="nodeline orbit star.toml --seed 2", seed=2, inputs=())
    record(results, "measure", command="nodeline measure star.toml --seed 3", seed=3, inputs=inputs)
    runs = history(results)
    assert {name: run.seed for name, run in runs.items()} == {"measure": 3, "orbit": 2}
    (seen,) = runs["measure"].inputs
    assert seen.path == "night.fits"  # from the folder that holds the results
    assert (seen.bytes, seen.sha256) == (5000, hashlib.sha256(b"light" * 1000).hexdigest())
    assert {"python", "numpy", "nodeline"} <= set(runs["orbit"].versions)


@pytest.mark.parametrize("text", ["no json", "[1, 2]", '{"orbit": {"seed": 1}}', '{"orbit": 3}'])
def test_another_file_of_that_name_is_refused(tmp_path, text):
    (tmp_path / HISTORY).write_text(text)
    with pytest.raises(InputError, match=f"{HISTORY}: not a history of runs"):
        history(tmp_path)
