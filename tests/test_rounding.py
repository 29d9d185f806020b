"""Two digits of the error, the value to match."""

import math

import pytest

from orbits.rounding import latex, plain, rounded


@pytest.mark.parametrize(
    ("value", "error", "expected"),
    [
        (117.30042, 0.0123, ("117.300", "0.012")),
        (117.30042, 0.0096, ("117.3004", "0.0096")),
        (0.36, 0.00996, ("0.360", "0.010")),
        (56.442, 0.023, ("56.442", "0.023")),
        (12345.6, 234.0, ("12350", "230")),
        (12345.6, 12.3, ("12346", "12")),
        (-0.0004, 0.012, ("0.000", "0.012")),
        (48147.1, 2.6, ("48147.1", "2.6")),
        (1.139791423, 8e-8, ("1.139791423", "0.000000080")),
    ],
)
def test_two_digits_of_the_error(value, error, expected):
    assert rounded(value, error) == expected


def test_two_errors_share_the_place_of_the_smaller():
    assert rounded(25.1507, 0.09, 0.083) == ("25.151", "0.090", "0.083")


def test_missing_errors_and_values():
    assert plain(140.72816, math.nan) == "140.72816"
    assert plain(140.72816, 0.0) == "140.72816"
    assert plain(1.0, 0.5) == "1.00 ± 0.50"
    assert rounded(math.nan, 0.1) == ("", "")
    assert latex(math.nan, math.nan) == r"\ldots"
    assert latex(0.81554, 0.0031) == r"$0.8155 \pm 0.0031$"
    assert latex(1.5e-12, math.nan) == r"$1.5 \times 10^{-12}$"
