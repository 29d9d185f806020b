"""Complex visibility of the shapes a star can have, all of them round.

With x = pi * diameter * baseline / wavelength every disc here is made of one function,

    Lambda_n(x) = Gamma(n + 1) J_n(x) / (x / 2)^n,    Lambda_n(0) = 1,
    d Lambda_n / dx = -x Lambda_{n+1}(x) / (2 (n + 1)),

so that values and derivatives come from the same few lines.

Sources: uniform, linear-law: Hanbury Brown et al. 1974, MNRAS 167, 475; power law: Hestroffer 1997,
A&A 327, 199; Gaussian and thin ring: Berger & Segransan 2007, New Astron. Rev. 51, 576.
"""

import numpy as np

SHAPES = ("point", "disc", "linear", "power", "gaussian", "ring")
"""Names of the shapes. `linear` and `power` take a limb-darkening coefficient."""

_SERIES_BELOW = 1.0
_SERIES_TERMS = 10
_ORDER_STEP = 1e-4


def shape_visibility(
    shape: str, x: np.ndarray, coefficient: float = 0.0
) -> tuple[np.ndarray, np.ndarray]:
    """Visibility of a shape and its derivative with respect to x = pi * diameter * B / wavelength.

    Parameters
    ----------
    shape : str
        One of `SHAPES`; the diameter of "gaussian" is its full width at half maximum.
    x : ndarray
        Dimensionless; the visibility is even in it.
    coefficient : float
        u of "linear", I = 1 - u (1 - mu); alpha of "power", I = mu^alpha; otherwise unused.

    Returns
    -------
    visibility, derivative : ndarray
        Real, of the shape of `x`.

    Raises
    ------
    ValueError
        If `shape` is not known.
    """
    x = np.asarray(x, dtype=float)
    if shape == "point":
        return np.ones_like(x), np.zeros_like(x)
    if shape == "disc":
        return bessel_ratio(1.0, x), -x / 4 * bessel_ratio(2.0, x)
    if shape == "ring":
        return bessel_ratio(0.0, x), -x / 2 * bessel_ratio(1.0, x)
    if shape == "gaussian":
        value = np.exp(-(x**2) / (4 * np.log(2)))
        return value, -x / (2 * np.log(2)) * value
    if shape == "power":
        order = coefficient / 2 + 1
        return bessel_ratio(order, x), -x / (2 * (order + 1)) * bessel_ratio(order + 1, x)
    if shape == "linear":
        whole, curved = (1 - coefficient) / 2, coefficient / 3
        value = whole * bessel_ratio(1.0, x) + curved * bessel_ratio(1.5, x)
        slope = -x * (whole / 4 * bessel_ratio(2.0, x) + curved / 5 * bessel_ratio(2.5, x))
        return value / (whole + curved), slope / (whole + curved)
    raise ValueError(f"shape must be one of {', '.join(SHAPES)}, got {shape!r}")


def darkening_derivative(shape: str, x: np.ndarray, coefficient: float) -> np.ndarray:
    """Derivative of `shape_visibility` with respect to the limb-darkening coefficient.

    For the power law it differentiates the order of a Bessel function, which has no closed form:
    a central difference whose truncation (about 1e-9) and rounding (1e-12) are both negligible.
    """
    x = np.asarray(x, dtype=float)
    if shape == "linear":
        whole, curved = (1 - coefficient) / 2, coefficient / 3
        disc, dark = bessel_ratio(1.0, x), bessel_ratio(1.5, x)
        return (dark - disc) / (6 * (whole + curved) ** 2)
    if shape == "power":
        above = bessel_ratio((coefficient + _ORDER_STEP) / 2 + 1, x)
        below = bessel_ratio((coefficient - _ORDER_STEP) / 2 + 1, x)
        return (above - below) / (2 * _ORDER_STEP)
    return np.zeros_like(x)


def bessel_ratio(order: float, x: np.ndarray) -> np.ndarray:
    """Gamma(n + 1) J_n(x) / (x / 2)^n for n = `order` >= 0 and any real x."""
    from scipy.special import gamma, jv

    x = np.abs(np.asarray(x, dtype=float))
    small = x < _SERIES_BELOW
    safe = np.where(small, _SERIES_BELOW, x)  # keeps the branch not taken finite
    if order in (0.0, 1.0, 2.0):
        large = _whole_order(int(order), safe)
    else:
        large = gamma(order + 1) * jv(order, safe) * (2 / safe) ** order
    return np.where(small, _series(order, np.minimum(x, _SERIES_BELOW)), large)


def _whole_order(order: int, x: np.ndarray) -> np.ndarray:
    from scipy.special import j0, j1

    if order == 0:
        return j0(x)
    ratio = 2 * j1(x) / x
    return ratio if order == 1 else 8 / x**2 * (ratio - j0(x))


def _series(order: float, x: np.ndarray) -> np.ndarray:
    """Power series; exact to rounding for |x| <= 1, where the closed forms lose digits."""
    q = -(x**2) / 4
    total = np.ones_like(x)
    for k in range(_SERIES_TERMS, 0, -1):
        total = 1 + q / (k * (order + k)) * total
    return total
