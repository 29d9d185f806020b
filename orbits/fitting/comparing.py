"""What is left of the data when the best sample is taken off."""

from collections.abc import Mapping
from typing import TYPE_CHECKING

import astropy.units as u
import numpy as np
from astropy.time import Time

from ..constants import JULIAN_YEAR
from ..elements import Elements
from ..positions import Positions
from ..velocities import STARS, Velocities

if TYPE_CHECKING:
    import pandas as pd


def orbit_of(sample: Mapping[str, float]) -> Elements:
    """The elements of a sample; velocities alone leave size and orientation open: 1 and 0."""
    return Elements(
        period=sample["period_d"] * u.day,
        periastron=Time(sample["periastron_mjd"], format="mjd", scale="tdb"),
        eccentricity=sample["eccentricity"],
        semimajor_axis=sample.get("semimajor_axis_mas", 1.0) * u.mas,
        inclination=sample.get("inclination_deg", 0.0) * u.deg,
        node=sample.get("node_deg", 0.0) % 360.0 * u.deg,
        argument=sample["argument_deg"] % 360.0 * u.deg,
    )


def calibration_of(
    sample: Mapping[str, float], instrument: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """(n,) scale and orientation, rad, of the instrument of each row of positions."""

    def of(stem: str, unit: str, none: float) -> np.ndarray:
        alone = sample.get(f"{stem}{unit}", none)  # of the only instrument
        return np.array([sample.get(f"{stem}_{name}{unit}", alone) for name in instrument])

    return of("scale", "", 1.0), np.radians(of("angle", "_deg", 0.0))


def position_residuals(sample: Mapping[str, float], positions: Positions) -> "pd.DataFrame":
    """Measured less computed place of each row: night, mjd, instrument, east_mas, north_mas, chi2.

    Instruments have their errors of scale and orientation, the errors are those stated. Where a
    night has alternatives, each is compared.
    """
    import pandas as pd

    x, y = orbit_of(sample).offsets(Time(positions.mjd, format="mjd", scale="tdb"))
    x, y = x.to_value(u.mas), y.to_value(u.mas)
    scale, turn = calibration_of(sample, positions.instrument)
    c, s = scale * np.cos(turn), scale * np.sin(turn)
    rest = positions.xy - np.column_stack([c * x + s * y, c * y - s * x])
    square = np.einsum("ni,nij,nj->n", rest, np.linalg.inv(positions.covariance), rest)
    return pd.DataFrame(
        {
            "night": positions.night,
            "mjd": positions.mjd,
            "instrument": positions.instrument,
            "east_mas": rest[:, 0],
            "north_mas": rest[:, 1],
            "chi2": square,
        }
    )


def velocity_residuals(
    sample: Mapping[str, float], velocities: Velocities, middle: float
) -> "pd.DataFrame":
    """The same of velocities: mjd, star, instrument, velocity_kms, chi2.

    A drift counts from `middle`, that of all data.
    """
    import pandas as pd

    kms = u.km / u.s
    k1, k2 = sample.get("k1_kms", 0.0), sample.get("k2_kms", sample.get("k_sum_kms", 0.0))
    times = Time(velocities.mjd, format="mjd", scale="tdb")
    one, two = (
        v.to_value(kms) for v in orbit_of(sample).velocities(times, k1=k1 * kms, k2=k2 * kms)
    )
    shift = np.array([sample.get(f"zero_point_{name}_kms", 0.0) for name in velocities.instrument])
    years = (velocities.mjd - middle) / JULIAN_YEAR
    shift += sample.get("gamma_kms", 0.0) + sample.get("drift_kms_per_year", 0.0) * years
    model = np.choose(velocities.star, [one + shift, two + shift, two - one])
    rest = velocities.velocity - model
    return pd.DataFrame(
        {
            "mjd": velocities.mjd,
            "star": [STARS[star] for star in velocities.star],
            "instrument": velocities.instrument,
            "velocity_kms": rest,
            "chi2": (rest / velocities.error) ** 2,
        }
    )
