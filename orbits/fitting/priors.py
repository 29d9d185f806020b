"""What is believed before the data: proper densities, all of them stated in every result."""

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Self

import numpy as np

from ..positions import Positions
from ..velocities import Velocities

Range = tuple[float, float]


@dataclass(frozen=True, kw_only=True)
class Priors:
    """Prior densities of the parameters.

    Period, semimajor axis, velocity amplitudes and jitters are log-uniform in their ranges, the
    eccentricity is uniform, the orientation isotropic, the phase uniform. Zero points, drifts and
    calibration errors are normal about 0.
    """

    period: Range
    """d."""
    semimajor_axis: Range = (1e-3, 1e6)
    """mas."""
    eccentricity: Range = (0.0, 0.9999)
    amplitude: Range = (0.01, 1000.0)
    """Velocity semi-amplitude of each star, km/s."""
    systemic: float = 200.0
    """Standard deviation of the systemic velocity, km/s."""
    zero_point: float = 10.0
    """Standard deviation of an instrument's zero point against the first one's, km/s."""
    drift: float = 10.0
    """Standard deviation of the drift of the systemic velocity, km/s per year."""
    position_jitter: Range = (1e-4, 1e4)
    """Extra error of the positions, mas."""
    velocity_jitter: Range = (1e-3, 100.0)
    """Extra error of the velocities, km/s."""
    outlier_fraction: float = 0.5
    """Upper end of the uniform density of the share of outliers among the positions."""
    scale: float = 0.01
    """Standard deviation of an instrument's relative error of scale (wavelength calibration)."""
    position_angle_zero: float = 1.0
    """Standard deviation of an instrument's error of orientation, deg."""
    normal: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    """Further knowledge: mean and standard deviation of elements, masses and other results.

    Each multiplies the likelihood by a normal density, as a measurement of its own would: ln of the
    evidence then is that of the data and this knowledge together. The densities above stay as they
    are, also where they and the normal one concern the same quantity.
    """

    def __post_init__(self) -> None:
        for name in ("period", "semimajor_axis", "amplitude", "position_jitter", "velocity_jitter"):
            low, high = getattr(self, name)
            if not 0 < low < high < np.inf:
                raise ValueError(f"{name} needs a range 0 < low < high, got ({low}, {high})")
        low, high = self.eccentricity
        if not 0 <= low < high < 1:
            raise ValueError(f"eccentricity needs a range within [0, 1), got ({low}, {high})")
        for name in ("systemic", "zero_point", "drift", "scale", "position_angle_zero"):
            if not getattr(self, name) > 0:
                raise ValueError(f"{name} must be positive, got {getattr(self, name)}")
        if not 0 < self.outlier_fraction < 1:
            raise ValueError(f"outlier_fraction must lie in (0, 1), got {self.outlier_fraction}")
        for name, (_, error) in self.normal.items():
            if not error > 0:
                raise ValueError(f"the prior of {name} needs a positive error, got {error}")

    @classmethod
    def for_data(
        cls, positions: Positions | None, velocities: Velocities | None, **given: object
    ) -> Self:
        """Wide densities that suit the data, but for what is `given`.

        Periods run from the shortest interval between two nights, or a tenth of the span of the
        data if that is less (0.5 d at least), to a thousand times the span. Semimajor axes run from
        a third of the largest separation (or of the typical error, if that is more), which no orbit
        can undercut, to a thousand times that separation.
        """
        made: dict[str, object] = {"period": default_periods(positions, velocities)}
        if positions is not None:
            largest = float(positions.separation.max())
            typical = float(np.sqrt(np.trace(positions.covariance, axis1=1, axis2=2) / 2).mean())
            largest = max(largest, typical)
            made["semimajor_axis"] = (largest / 3, largest * 1000)
            made["position_jitter"] = (typical / 100, typical * 100)
        if velocities is not None:
            typical = float(velocities.error.mean())
            made["velocity_jitter"] = (typical / 100, typical * 100)
        return replace(cls(**made), **given)

    def to_json(self) -> dict:
        """The densities in words and numbers, of parameters that a fit does not use too."""
        words = {
            "period_d": {"log_uniform": list(self.period)},
            "semimajor_axis_mas": {"log_uniform": list(self.semimajor_axis)},
            "eccentricity": {"uniform": list(self.eccentricity)},
            "orientation": "isotropic",
            "phase": "uniform",
            "k_kms": {"log_uniform": list(self.amplitude)},
            "gamma_kms": {"normal": [0.0, self.systemic]},
            "zero_point_kms": {"normal": [0.0, self.zero_point]},
            "drift_kms_per_year": {"normal": [0.0, self.drift]},
            "position_jitter_mas": {"log_uniform": list(self.position_jitter)},
            "velocity_jitter_kms": {"log_uniform": list(self.velocity_jitter)},
            "outlier_fraction": {"uniform": [0.0, self.outlier_fraction]},
            "scale": {"normal": [0.0, self.scale]},
            "position_angle_zero_deg": {"normal": [0.0, self.position_angle_zero]},
        }
        return words | {name: {"normal": list(pair)} for name, pair in self.normal.items()}


def default_periods(positions: Positions | None, velocities: Velocities | None) -> Range:
    """The range of periods that is searched when none is given, d."""
    times = np.sort(np.concatenate([t.mjd for t in (positions, velocities) if t is not None]))
    span = max(float(times[-1] - times[0]), 1.0)
    gaps = np.diff(times)
    gaps = gaps[gaps > 0.2]  # a night's exposures follow each other; the next night does not
    shortest = float(gaps.min()) if gaps.size else 1.0
    return max(0.5, min(shortest, span / 10)), 1000.0 * span
