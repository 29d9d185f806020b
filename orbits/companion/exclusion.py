"""Contrasts that a chi-square excludes: by its difference, and by its total.

With N and D of a position (see `maps`) the chi-square of a companion of contrast f there is

    chi2(f) = chi2(0) - 2 f N + f^2 D

to first order. The difference knows that D alone says how well a contrast is measured; the total
asks whether the fit as a whole has become improbable, for which a chi-square must grow by several
times its own scatter sqrt(2 nu), however precise the data: with 2400 data, by 200 instead of 9.
"""

import numpy as np


def profile_limit(n: np.ndarray, d: np.ndarray, confidence: float) -> np.ndarray:
    """Contrast excluded by the difference of chi-square from its minimum over f >= 0.

    One parameter, one-sided: a companion of the true contrast f is wrongly excluded in a share
    1 - `confidence` of all nights, and less often where its estimate would be negative, since
    f = 0 is then what it is compared with (the profile likelihood ratio with a boundary; Cowan et
    al. 2011, Eur. Phys. J. C 71, 1554). inf where the data say nothing. `confidence` is above 0.5:
    below, the quantile is negative, and its square would rise again.
    """
    from scipy.stats import norm

    error2 = _inverse(d)
    best = n * np.where(np.isfinite(error2), error2, 0.0)
    rise = norm.isf(1 - confidence) ** 2 * error2
    return best + np.sqrt(rise + np.minimum(best, 0.0) ** 2)


def published_limit(
    n: np.ndarray, d: np.ndarray, chi2: float, dof: int, confidence: float
) -> np.ndarray:
    """Contrast excluded by the total chi-square, after Absil et al. (2011, A&A 535, A68).

    The errors are scaled so that the single star has a reduced chi-square of 1, and f is rejected
    where the probability of a chi-square as large as dof chi2(f) / chi2(0), for `dof` degrees of
    freedom, is below 1 - `confidence` (0.27 per cent for 3 sigma). The expression is from memory
    of that paper, not checked against its text. `chi2` is chi2(0). `confidence` is above 0.5.
    """
    from scipy.stats import chi2 as law

    allowed = chi2 * (law.isf(1 - confidence, dof) / dof - 1)  # chi2(f) - chi2(0)
    # The median lies below `dof`: with few of them, a low confidence rejects all that fits worse.
    allowed = max(allowed, 0.0)
    error2 = _inverse(d)
    best = n * np.where(np.isfinite(error2), error2, 0.0)
    return best + np.sqrt(best**2 + allowed * error2)


def _inverse(d: np.ndarray) -> np.ndarray:
    return np.divide(1.0, d, out=np.full_like(d, np.inf), where=d > 0)
