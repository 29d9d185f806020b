"""Dates as people write them."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from orbits.dates import dates_between, read_date, show_date
from orbits.errors import InputError

DELAY = 69.184 / 86400  # TDB - UTC since 2017, d, apart from 2 ms


@pytest.mark.parametrize(
    ("text", "mjd"),
    [
        ("2026-12-01", 61375 + DELAY),
        ("2026-12-01T22:30", 61375.9375 + DELAY),
        ("2026-12-01 22:30:00Z", 61375.9375 + DELAY),
        ("61375.5", 61375.5 + DELAY),
        ("MJD 61375.5", 61375.5 + DELAY),
        ("2461376.0", 61375.5 + DELAY),
        ("jd 2461376", 61375.5 + DELAY),
        ("2000.0", 51544.5),
        ("J2000", 51544.5),
        ("B1950.0", 33281.92345905),  # JD 2433282.42345905
        ("B2000.0", 51544.03340),
    ],
)
def test_forms_of_dates(text, mjd):
    assert_allclose(read_date(text), mjd, rtol=0, atol=1e-5)


@pytest.mark.parametrize("text", ["soon", "2026-13-01", "12/01/2026", "X2000", ""])
def test_no_date(text):
    with pytest.raises(InputError, match="is no date; write it as"):
        read_date(text)


def test_dates_are_shown_as_they_were_written():
    assert show_date(read_date("2026-12-01T22:29:59.999"), minutes=True) == "2026-12-01 22:30"
    assert show_date(read_date("2026-12-01T23:59:59.999")) == "2026-12-02"
    for text in ("2026-12-01 22:30", "1850-01-31 00:00", "2210-07-09 12:01"):
        assert show_date(read_date(text), minutes=True) == text
    assert show_date(-1e6) == "year -879.0"  # 2000 - 1051544.5 / 365.25


def test_ranges_have_both_ends():
    assert_allclose(dates_between(100.0, 101.0, "6 h"), 100 + np.arange(5) / 4)
    assert len(dates_between(100.0, 100.0, "1 yr")) == 1
    for step in ("0 d", "-1 d", "1 km", "often"):
        with pytest.raises(InputError, match=r"step"):
            dates_between(100.0, 101.0, step)
    with pytest.raises(InputError, match="no dates lie"):
        dates_between(100.0, 99.0, "1 d")
