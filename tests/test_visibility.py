"""Shapes against published zeros and values, and against numerical Hankel transforms."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.integrate import quad
from scipy.special import j0

from orbits.visibility import SHAPES, bessel_ratio, darkening_derivative, shape_visibility

# Zeros of J1, of J2 and of J0: Abramowitz & Stegun 1964, table 9.5; the other rows follow from the
# published expressions evaluated to ten digits.
DISC_NULLS = [3.83170597, 7.01558667, 10.17346814, 13.32369194]
RING_NULLS = [2.40482556, 5.52007811, 8.65372791]
DIGITS = 6e-9  # the values are printed to 8 decimals; slopes there are below 1


@pytest.mark.parametrize(("shape", "nulls"), [("disc", DISC_NULLS), ("ring", RING_NULLS)])
def test_nulls_lie_where_bessel_functions_vanish(shape, nulls):
    assert_allclose(shape_visibility(shape, np.array(nulls))[0], 0, atol=DIGITS)


@pytest.mark.parametrize(
    ("shape", "x", "value"),
    [
        ("disc", 5.13562230, -0.13227949),
        ("disc", 8.41724414, 0.06448253),
        ("disc", 2.21508937, 0.5),
        ("disc", 1.61633995, np.sqrt(0.5)),
        ("ring", 3.83170597, -0.40275940),
        ("ring", 1.52114406, 0.5),
        ("gaussian", 1.38629436, 0.5),
    ],
)
def test_published_values(shape, x, value):
    assert_allclose(shape_visibility(shape, np.array([x]))[0], value, atol=DIGITS)


def test_side_lobes_are_extrema():
    """The slope vanishes at the zeros of J2 (disc) and J1 (ring)."""
    assert_allclose(shape_visibility("disc", np.array([5.13562230, 8.41724414]))[1], 0, atol=DIGITS)
    assert_allclose(shape_visibility("ring", np.array([3.83170597]))[1], 0, atol=DIGITS)


@pytest.mark.parametrize(
    ("alpha", "value", "null"),
    [
        (0.15, 0.590330129, 3.932491),
        (0.3, 0.603060459, 4.032687),
        (0.5, 0.618816181, 4.165426),
        (1.0, 0.653096662, 4.493409),
    ],
)
def test_power_law(alpha, value, null):
    assert_allclose(shape_visibility("power", np.array([2.0]), alpha)[0], value, atol=6e-10)
    assert_allclose(shape_visibility("power", np.array([null]), alpha)[0], 0, atol=6e-7)


@pytest.mark.parametrize(
    ("u", "null", "lobe"),
    [
        (0.0, 3.831706, 0.017498),
        (0.2, 3.917518, 0.015196),
        (0.5, 4.080732, 0.011854),
        (0.7, 4.220503, 0.009825),
        (1.0, 4.493409, 0.007425),
    ],
)
def test_linear_law(u, null, lobe):
    """First null and squared height of the first side lobe."""
    assert_allclose(shape_visibility("linear", np.array([null]), u)[0], 0, atol=6e-7)
    x = np.linspace(null, null + 3, 3001)
    highest = (shape_visibility("linear", x, u)[0] ** 2).max()
    assert_allclose(highest, lobe, atol=6e-7)


def test_linear_law_value():
    assert_allclose(shape_visibility("linear", np.array([2.0]), 0.5)[0], 0.60727355, atol=6e-9)


@pytest.mark.parametrize(("shape", "coefficient"), [("linear", 0.6), ("power", 0.4)])
@pytest.mark.parametrize("x", [0.05, 0.9999, 1.0001, 3.0, 9.0])
def test_limb_darkened_discs_are_hankel_transforms(shape, coefficient, x):
    """V(x) = integral of I(r) J0(x r) r dr over the disc of radius 1, by adaptive quadrature."""

    def brightness(mu):
        return 1 - coefficient * (1 - mu) if shape == "linear" else mu**coefficient

    # r dr = -mu dmu removes the infinite slope of the profile at the limb.
    top = quad(lambda mu: brightness(mu) * j0(x * np.sqrt(1 - mu**2)) * mu, 0, 1, epsabs=1e-13)[0]
    flux = quad(lambda mu: brightness(mu) * mu, 0, 1, epsabs=1e-13)[0]
    value = shape_visibility(shape, np.array([x]), coefficient)[0][0]
    assert_allclose(value, top / flux, atol=1e-11)  # ten times the error asked of quad


def test_full_linear_darkening_is_the_power_law_of_one():
    x = np.linspace(0, 20, 201)
    assert_allclose(
        shape_visibility("linear", x, 1.0)[0], shape_visibility("power", x, 1.0)[0], atol=1e-13
    )


@pytest.mark.parametrize("shape", SHAPES)
def test_derivatives_are_slopes(shape):
    """Central differences: truncation h^2/6 |V'''| < 2e-11, rounding 1e-16/h = 1e-11."""
    x, h = np.linspace(-6, 14, 173), 1e-5
    rise = shape_visibility(shape, x + h, 0.4)[0] - shape_visibility(shape, x - h, 0.4)[0]
    assert_allclose(shape_visibility(shape, x, 0.4)[1], rise / (2 * h), atol=1e-9)


@pytest.mark.parametrize("shape", ["linear", "power"])
def test_darkening_derivative(shape):
    x, h = np.linspace(0, 14, 141), 1e-3
    rise = shape_visibility(shape, x, 0.4 + h)[0] - shape_visibility(shape, x, 0.4 - h)[0]
    # Truncation of the difference: h^2/6 times a third derivative below 1.
    assert_allclose(darkening_derivative(shape, x, 0.4), rise / (2 * h), atol=2e-7)


@pytest.mark.parametrize("order", [0.0, 1.0, 1.5, 2.0, 2.7])
def test_series_and_closed_form_meet(order):
    """The two branches join to rounding at x = 1; the slope there is below 0.5."""
    below, above = bessel_ratio(order, np.array([1 - 1e-12, 1 + 1e-12]))
    assert abs(below - above) < 5e-12


def test_unknown_shape_is_refused():
    with pytest.raises(ValueError, match="one of point, disc"):
        shape_visibility("square", np.array([1.0]))
