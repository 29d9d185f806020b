"""Published double-lined systems: data simulated from their elements give their masses back.

16 nights over six periods at 0.5 % of the semimajor axis, 20 velocities of each star with the
published errors of K times the square root of 10 (K is then about as well known as published).
Arguments and nodes are invented: masses and parallax do not depend on them.
"""

import astropy.units as u
import numpy as np
from astropy.time import Time

from orbits import Elements, Positions, Priors, Velocities, fit

NIGHTS, EPOCHS = 16, 20
REALISATIONS = 10

# P (d), e, i (deg), a (mas), K1, K2 (km/s) and their errors; M1, M2 and their errors; parallax
# and its error where published. The sources are named in tests/test_masses.py and, for 27 Tau,
# Zwahlen et al. 2004, A&A 425, L45; the errors of K of Mizar A are assumed.
SYSTEMS = {
    "Capella": ((104.02128, 0.00089, 137.156, 56.442), (25.9611, 0.0044, 26.860, 0.017),
                (2.5687, 0.0074, 2.4828, 0.0067), (75.9936, 0.087)),
    "sigma Ori": ((143.2002, 0.77896, 56.378, 4.2860), (72.03, 0.25, 95.53, 0.22),
                  (16.99, 0.20, 12.81, 0.18), (2.58065, 0.0088)),
    "lambda Vir": ((206.7321, 0.0610, 109.86, 19.759), (24.78, 0.17, 27.308, 0.067),
                   (1.897, 0.016, 1.721, 0.023), (18.81, 0.10)),
    "psi Cen": ((38.8121, 0.550, 89.20, 5.055), (49.51, 0.16, 80.48, 0.33),
                (3.187, 0.031, 1.961, 0.015), (13.049, 0.063)),
    "V1334 Cyg": ((1932.8, 0.233, 124.94, 8.54), (14.168, 0.014, 15.036, 0.304),
                  (4.288, 0.133, 4.040, 0.048), (1.38821, 0.0151)),
    "TZ For": ((75.66647, 0.00002, 85.68, 2.993), (38.90, 0.01, 40.87, 0.02),
               (2.057, 0.001, 1.958, 0.001), (5.37924, 0.055)),
    "Mizar A": ((20.53835, 0.5354, 60.5, 9.83), (69.1, 0.7, 67.2, 0.7),
                (2.43, 0.07, 2.50, 0.07), None),
    "beta Aur": ((3.96004, 0.0, 76.0, 3.3), (108.053, 0.072, 110.911, 0.071),
                 (2.389, 0.013, 2.327, 0.013), None),
    "27 Tau 2004": ((290.984, 0.2385, 107.87, 13.08), (26.55, 1.41, 36.89, 0.22),
                    (4.74, 0.25, 3.42, 0.25), (7.576, 0.23)),
}  # fmt: skip


def simulate(elements: Elements, k, rng) -> tuple[Positions, Velocities]:
    """Data of the quality stated above."""
    kms = u.km / u.s
    start = elements.periastron.mjd
    span = 6 * elements.period.to_value(u.day)
    night = start + rng.uniform(0, span, NIGHTS)
    x, y = elements.offsets(Time(night, format="mjd", scale="tdb"))
    error = 0.005 * elements.semimajor_axis.to_value(u.mas)
    positions = Positions(
        mjd=night,
        xy=np.column_stack([x.to_value(u.mas), y.to_value(u.mas)])
        + error * rng.normal(size=(NIGHTS, 2)),
        covariance=np.tile(error**2 * np.eye(2), (NIGHTS, 1, 1)),
        weight=np.ones(NIGHTS),
        night=np.array([str(i) for i in range(NIGHTS)], dtype=object),
        instrument=np.full(NIGHTS, "", dtype=object),
        source=np.full(NIGHTS, "", dtype=object),
        contrast=np.full(NIGHTS, np.nan),
        contrast_error=np.full(NIGHTS, np.nan),
    )
    epoch = start + rng.uniform(0, span, EPOCHS)
    clean = elements.velocities(
        Time(epoch, format="mjd", scale="tdb"), k1=k[0] * kms, k2=k[2] * kms
    )
    errors = np.repeat([k[1], k[3]], EPOCHS) * np.sqrt(EPOCHS / 2)
    velocities = Velocities(
        mjd=np.tile(epoch, 2),
        velocity=np.concatenate([v.to_value(kms) for v in clean])
        + errors * rng.normal(size=2 * EPOCHS),
        error=errors,
        star=np.repeat([0, 1], EPOCHS),
        instrument=np.full(2 * EPOCHS, "", dtype=object),
        source=np.full(2 * EPOCHS, "", dtype=object),
    )
    return positions, velocities


def deviations(index: int, realisation: int) -> dict[str, float]:
    """Masses and parallax less the published ones, in units of both errors together.

    The noise has a seed of its own: it does not depend on what a fit does with its random numbers.
    """
    rng = np.random.default_rng([77, index, realisation])
    (period, e, i, a), k, masses, parallax = list(SYSTEMS.values())[index]
    elements = Elements(
        period=period * u.day,
        periastron=Time(55_000.0, format="mjd", scale="tdb"),
        eccentricity=e,
        semimajor_axis=a * u.mas,
        inclination=i * u.deg,
        node=40.0 * u.deg,
        argument=250.0 * u.deg,
    )
    positions, velocities = simulate(elements, k, rng)
    priors = Priors.for_data(positions, velocities, period=(period / 5, period * 5))
    solution = fit(positions, velocities=velocities, priors=priors, rng=rng)
    wanted = {"primary_msun": masses[:2], "companion_msun": masses[2:]}
    if parallax is not None:
        wanted["parallax_mas"] = parallax
    found = {}
    for column, (value, error) in wanted.items():
        median, plus, minus = solution.summary[column]
        found[column] = (median - value) / np.hypot(plus if value > median else minus, error)
    return found


def run(fraction: float) -> None:
    """Print how far masses and parallax come out from the published ones, and how often within 2.

    One system is one event, for its masses and parallax err together: of them 95 % should hold
    each quantity within two errors, and no more than that can be asked of right errors.
    """
    count = max(1, int(REALISATIONS * fraction))
    table = []
    for index, name in enumerate(SYSTEMS):
        rows = [deviations(index, realisation) for realisation in range(count)]
        for column in rows[0]:
            off = np.array([row[column] for row in rows])
            table.append(off)
            print(f"{name:<12} {column:<15} mean {off.mean():+.2f} (+- {1 / np.sqrt(count):.2f}), "
                  f"largest {np.abs(off).max():.2f} sigma", flush=True)  # fmt: skip
    share = (np.abs(np.array(table)) < 2).mean()
    print(
        f"{len(SYSTEMS)} systems, {count} realisations of the noise: {share:.1%} within 2 sigma of"
    )
    print("the fit's and the published errors together; claimed: 95 % or more")
