"""Kepler's equation against the cost of one sine and one cosine, and against 50 digits."""

import mpmath
import numpy as np

from orbits.kepler import eccentric_anomaly

from . import best_time, row

SIZE = 1_000_000
ECCENTRICITIES = (0.0, 0.3, 0.9, 0.99, 1 - 1e-4, 1 - 1e-8)


def run() -> None:
    """Print time ratios, the largest residual and the largest error in units of the last place."""
    rng = np.random.default_rng(1)
    m = rng.uniform(-np.pi, np.pi, SIZE)
    sine_and_cosine = best_time(lambda: (np.sin(m), np.cos(m)))
    for e in ECCENTRICITIES:
        taken = best_time(lambda e=e: eccentric_anomaly(m, e))
        row(f"Kepler's equation, a million M, e = {e:.10g}", taken / sine_and_cosine, "sin and cos")
    e = np.concatenate([rng.uniform(0, 1, SIZE // 2), 1 - 10 ** rng.uniform(-8, 0, SIZE // 2)])
    taken = best_time(lambda: eccentric_anomaly(m, e))
    row("Kepler's equation, a million M and e to 1 - 1e-8", taken / sine_and_cosine, "sin and cos")
    E, long_e = eccentric_anomaly(m, e).astype(np.longdouble), e.astype(np.longdouble)
    residual = np.abs(E - long_e * np.sin(E) - m.astype(np.longdouble)).max()
    row("largest residual of them in extended precision", float(residual), "rad (claimed 1e-15)")
    some = rng.choice(SIZE, 2000, replace=False)
    small = np.pi * 10 ** rng.uniform(-12, 0, 1000)
    worst = max(
        abs(units(float(one), float(two)))
        for one, two in zip(np.r_[m[some], small], np.r_[e[some], e[-1000:]], strict=True)
    )
    row("largest error of 3000 against 50 digits", worst, "units in the last place")


def units(m: float, e: float) -> float:
    """Error of E in units of its last place, by Newton's method from it in 50 digits."""
    found = float(eccentric_anomaly(m, e))
    with mpmath.workdps(50):
        E, m, e = mpmath.mpf(found), mpmath.mpf(m), mpmath.mpf(e)
        for _ in range(4):
            E -= (E - e * mpmath.sin(E) - m) / (1 - e * mpmath.cos(E))
        return float((mpmath.mpf(found) - E) / mpmath.mpf(float(np.spacing(abs(found)))))
