"""A fitted system made by hand, for tests of what comes after the fit."""

import numpy as np
import pandas as pd

from orbits.bundle import Orbits
from orbits.fitting.solution import Solution
from orbits.positions import Positions, ellipse_covariance
from orbits.velocities import Velocities

TRUTH = {
    "period_d": 117.3,
    "periastron_mjd": 60312.8,
    "eccentricity": 0.36,
    "semimajor_axis_mas": 21.4,
    "inclination_deg": 128.0,
    "node_deg": 63.0,
    "argument_deg": 212.0,
    "k1_kms": 23.5,
    "k2_kms": 29.06,
    "gamma_kms": -14.2,
    "parallax_mas": 31.9,
    "total_msun": 2.93,
    "primary_msun": 1.62,
    "companion_msun": 1.31,
}
ERRORS = dict.fromkeys(TRUTH, 0.01) | {"eccentricity": 0.001, "periastron_mjd": 0.05}


def solution(*, name: str = "Harrow 7", draws: int = 200) -> Solution:
    """Independent normal samples around the truth, with ten positions and twelve velocities."""
    rng = np.random.default_rng(3)
    samples = pd.DataFrame({key: rng.normal(TRUTH[key], ERRORS[key], draws) for key in TRUTH})
    samples["solution"] = 0
    columns = {key.rpartition("_")[0] or key: [value] for key, value in TRUTH.items()}
    orbit = Orbits.of(columns)
    mjd = 60320.0 + 11.0 * np.arange(10)
    covariance = ellipse_covariance(np.full(10, 0.2), np.full(10, 0.1), np.linspace(0, 160, 10))
    offsets = np.stack(orbit.offsets(mjd), axis=-1)[0]
    noise = np.array([rng.multivariate_normal([0, 0], matrix) for matrix in covariance])
    blank = np.full(10, "", dtype=object)
    positions = Positions(
        mjd=mjd,
        xy=offsets + noise,
        covariance=covariance,
        weight=np.ones(10),
        night=np.array([f"night {n}" for n in range(10)], dtype=object),
        instrument=np.full(10, "THICKET_H", dtype=object),
        source=blank,
        contrast=np.full(10, 0.42),
        contrast_error=np.full(10, 0.01),
    )
    times, star = 60305 + 10.0 * np.arange(12), np.arange(12) % 2
    exact = np.stack(orbit.velocities(times))[:, 0][star, np.arange(12)]
    shift = np.where(np.arange(12) < 6, 0.0, 1.5)
    velocities = Velocities(
        mjd=times,
        velocity=exact + shift + rng.normal(0, 0.2, 12),
        error=np.full(12, 0.2),
        star=star,
        instrument=np.where(shift == 0, "one", "two").astype(object),
        source=np.full(12, "", dtype=object),
    )
    best = TRUTH | {"zero_point_two_kms": 1.5}
    samples["zero_point_two_kms"] = 1.5
    account = {
        "log_evidence": -12.3,
        "log_evidence_err": 0.1,
        "effective_samples": 1000.0,
        "chi2": 40.1,
        "dof": 22,
        "data": {
            "positions": {"chi2": 18.0, "data": 20},
            "velocities": {"chi2": 22.1, "data": 12},
        },
        "seconds": 3.2,
    }
    return Solution(
        name=name,
        samples=samples,
        best=best,
        account=account,
        positions=positions,
        velocities=velocities,
        scan=pd.DataFrame({"period_d": [100.0, 117.3, 130.0], "chi2": [900.0, 40.1, 800.0]}),
    )


def system(folder, **options):
    """A system file in `folder` whose orbit is fitted; returns its path."""
    path = folder / "harrow-7.toml"
    table = folder / "positions.csv"
    table.write_text(
        "mjd_d,separation_mas,position_angle_deg,separation_error_mas,position_angle_error_deg\n"
        "60320,12.0,200.0,0.1,0.5\n"
    )
    path.write_text('name = "Harrow 7"\n[positions]\ntables = ["positions.csv"]\n')
    solution(**options).write(folder / "harrow-7-results")
    return path
