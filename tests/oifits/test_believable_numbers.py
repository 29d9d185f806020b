"""Numbers that no instrument measures: left out, and named with their place."""

import numpy as np
import oifits_files as make
import pytest

from orbits.oifits import T3, Vis, Vis2, observations
from orbits.oifits.checking import check
from orbits.problems import Severity


def told(file, words):
    """The one problem that speaks of `words`."""
    (problem,) = [problem for problem in check(file) if words in problem.what]
    return problem


@pytest.mark.parametrize("error", [1e-9, 1e-150, 5e-324])
def test_one_error_that_would_outweigh_all_others_is_left_out(rng, error):
    file = make.small(rng)
    table = file.of(Vis2)[0]
    table.vis2err[2, 1] = error
    problem = told(file, "1000 times smaller")
    assert problem.severity is Severity.UNUSABLE
    assert "column VIS2ERR" in problem.what
    assert "row 3, channel 2" in problem.what
    (night,) = observations(file)
    assert len(night.v2) == table.flag.size - 1
    assert night.v2.error.min() == np.delete(table.vis2err.ravel(), 7).min()


def test_errors_that_differ_as_those_of_bright_and_faint_stars_do_are_kept(rng):
    file = make.small(rng)
    file.of(Vis2)[0].vis2err[:] = np.geomspace(1e-4, 1e-2, 18).reshape(6, 3)
    (night,) = observations(file)
    assert len(night.v2) == 18


@pytest.mark.parametrize("value", [1e300, -2e9])
def test_a_value_beyond_all_sense_is_left_out(rng, value):
    file = make.small(rng)
    file.of(T3)[0].t3phi[1, 0] = value
    problem = told(file, "column T3PHI is")
    assert problem.severity is Severity.UNUSABLE
    assert "row 2, channel 1" in problem.what
    (night,) = observations(file)
    assert len(night.t3) == 11


@pytest.mark.parametrize(
    ("kind", "factor", "words"),
    [
        ("correlated flux", 1.0, "is no visibility: AMPTYP 'correlated flux'"),
        ("differential", 1.0, "is no visibility: AMPTYP 'differential'"),
        ("absolute", 1000.0, "is no normalised visibility"),
    ],
)
def test_amplitudes_of_something_else_are_not_used(rng, kind, factor, words):
    file = make.full(rng)
    table = file.of(Vis)[0]
    wanted = {"target": "Harrow 7", "observables": ("v2", "visamp")}
    assert len(observations(file, **wanted)[0].visamp) == 18
    table.amptyp = kind
    table.visamp = table.visamp * factor
    assert told(file, words)
    assert len(observations(file, **wanted)[0].visamp) == 0


def test_a_table_without_any_error_is_suspicious(rng):
    file = make.small(rng)
    file.of(Vis2)[0].vis2err[:] = np.nan
    problem = told(file, "column VIS2ERR holds no number")
    assert problem.severity is Severity.SUSPICIOUS
