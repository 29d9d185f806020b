"""Hypotheses by their evidence: odds of any size, and the table that shows them."""

import math
from types import SimpleNamespace

import pytest

from orbits import Model
from orbits.cli.orbit import comparison_table
from orbits.fitting.comparison import compare


def solved(log_evidence, chi2=12.0):
    account = {"log_evidence": log_evidence, "log_evidence_err": 0.02, "chi2": chi2, "dof": 40}
    return SimpleNamespace(account=account)


def weighed(*, circular, drift=21.0):
    """Hypotheses of known evidence; ln evidence of the model as given is 20."""
    found = {"circular": solved(circular, chi2=1e8), "drift": solved(drift)}
    base = solved(20.0)
    return compare(["circular", "drift"], Model(), lambda model: found[_name(model)], base)


def _name(model):
    return "circular" if model.circular else "drift"


def test_odds_are_told_where_a_number_holds_them():
    """A ratio of evidence of 1 to 4, and of e to 1."""
    given, circular, drift = weighed(circular=20.0 - math.log(4))
    assert (given.log_odds, given.odds) == (0.0, 1.0)
    # 20 - ln 4 - 20 loses what double precision has beyond 20: relative 20 * 1.1e-16 / 1.4.
    assert circular.log_odds == pytest.approx(-math.log(4), rel=4e-15)
    assert circular.odds == pytest.approx(0.25, rel=1e-14)
    assert drift.odds == pytest.approx(math.e, rel=1e-14)


@pytest.mark.parametrize("sign", [-1, 1])
def test_odds_beyond_numbers_are_told_by_their_logarithm(sign):
    """10^(+-21701125): ln is that times 2.302585, which is added to 20 and taken off again."""
    log_odds = sign * 21701125 * 2.302585092994046
    _, circular, drift = weighed(circular=20.0 + log_odds)
    assert circular.log_odds == pytest.approx(log_odds, rel=1e-15)
    assert circular.odds is None
    lines = comparison_table(weighed(circular=20.0 + log_odds)).splitlines()
    assert f"  10^{sign * 21701125}  " in lines[2]
    assert drift.odds == pytest.approx(math.e, rel=1e-14)


def test_columns_stand_below_each_other():
    """Every cell ends where its title does, however wide; the numbers hold no double blank."""
    for circular in (19.0, -49968685.12):
        lines = comparison_table(weighed(circular=circular)).splitlines()
        assert len({len(line) for line in lines}) == 1
        for title in ("ln evidence", "odds", "chi2", "dof"):
            end = lines[0].index(title) + len(title)
            for line in lines[1:]:
                assert line[end - 1] != " "
                assert line[end : end + 2] in ("  ", "")
