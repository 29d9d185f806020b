"""What a search says: the best companion, the others that the data allow, and how sure."""

from dataclasses import dataclass
from typing import Any

import astropy.units as u
import numpy as np

from ..binary import companion_name
from ..positions import position_angle
from .bootstrap import Bootstrap
from .fit import Fit
from .maps import Maps
from .significance import FalseAlarms


@dataclass(frozen=True, eq=False, kw_only=True)
class Candidate:
    """A solution: a companion that fits the data, with one-sigma errors.

    The errors are those of the data as stated times `error_scale`, which is the square root of the
    reduced chi-square where that exceeds 1, and 1 elsewhere.
    """

    x_mas: float
    """To the East of the primary."""
    y_mas: float
    """To the North of the primary."""
    covariance_xy_mas2: np.ndarray
    """(2, 2)"""
    contrast: float
    contrast_error: float
    primary_diameter_mas: float
    primary_diameter_error_mas: float
    companion_diameter_mas: float
    companion_diameter_error_mas: float
    companion_diameter_prior_mas: float | None
    """The square of the companion's diameter had a Gaussian prior of mean 0 and of the square of
    this as its standard deviation; None where it had none."""
    error_scale: float
    chi2: float
    dof: int
    delta_chi2: float
    """Chi-square of the scene without this companion, less that with it."""
    significance_sigma: float
    """Local: the root of `delta_chi2`, scaled as the errors are."""
    false_alarm_probability: float | None
    """Chance that noise alone looks as good anywhere in the field; None where not measured."""
    weight: float
    """Share of the posterior probability among the solutions kept, for flat priors."""
    companion: int
    """0 for the first companion of the scene, 1 for the second."""
    fit: Fit

    @property
    def separation_mas(self) -> float:
        """Distance from the primary."""
        return float(np.hypot(self.x_mas, self.y_mas))

    @property
    def position_angle_deg(self) -> float:
        """From North through East, 0 <= PA < 360."""
        return float(position_angle(np.float64(self.x_mas), np.float64(self.y_mas)))

    @property
    def separation_error_mas(self) -> float:
        """Error along the position angle."""
        return self._along(self.x_mas, self.y_mas)

    @property
    def position_angle_error_deg(self) -> float:
        """Error across the position angle, as an angle; 180 where the separation is not known."""
        across = self._along(self.y_mas, -self.x_mas)
        return float(min(np.degrees(across / self.separation_mas), 180.0))

    @property
    def separation(self) -> u.Quantity:
        """Distance from the primary."""
        return self.separation_mas * u.mas

    @property
    def position_angle(self) -> u.Quantity:
        """From North through East."""
        return self.position_angle_deg * u.deg

    def to_json(self) -> dict[str, Any]:
        """The numbers, with units in the keys."""
        return {
            "separation_mas": self.separation_mas,
            "separation_err_mas": self.separation_error_mas,
            "position_angle_deg": self.position_angle_deg,
            "position_angle_err_deg": self.position_angle_error_deg,
            "contrast": self.contrast,
            "contrast_err": self.contrast_error,
            "primary_diameter_mas": self.primary_diameter_mas,
            "primary_diameter_err_mas": self.primary_diameter_error_mas,
            "companion_diameter_mas": self.companion_diameter_mas,
            "companion_diameter_err_mas": self.companion_diameter_error_mas,
            "companion_diameter_prior_mas": self.companion_diameter_prior_mas,
            "covariance_xy_mas2": self.covariance_xy_mas2.tolist(),
            "error_scale": self.error_scale,
            "chi2": self.chi2,
            "dof": self.dof,
            "delta_chi2": self.delta_chi2,
            "significance_sigma": self.significance_sigma,
            "false_alarm_probability": self.false_alarm_probability,
            "weight": self.weight,
        }

    def _along(self, x: float, y: float) -> float:
        """Error of the position along the direction (x, y)."""
        unit = np.array([x, y]) / np.hypot(x, y)
        return float(np.sqrt(unit @ self.covariance_xy_mas2 @ unit))


@dataclass(frozen=True, eq=False, kw_only=True)
class SearchResult:
    """The outcome of a search for one companion in one epoch."""

    target: str
    instrument: str
    mjd: float
    n_v2: int
    n_t3: int
    n_t3amp: int
    n_visamp: int
    n_visphi: int
    best: Candidate
    alternatives: tuple[Candidate, ...]
    """Other solutions that the data allow, the best first."""
    kept_chi2: float
    """Largest chi-square of an alternative above that of the best, scaled as the errors are."""
    null: Fit
    """The scene without the companion."""
    maps: Maps
    statistic: float
    """The largest gain over the field, as noise searches measure it."""
    false_alarms: FalseAlarms | None
    extrapolated: bool
    """True where the false-alarm probability goes beyond the counts of the noise searches."""
    seconds: float
    bootstrap: Bootstrap | None = None
    """Refits of the best solution to resampled data, where asked for."""
    previous: "SearchResult | None" = None
    """The search for the first companion, where this is the one for the second."""

    def to_json(self) -> dict[str, Any]:
        """One object of plain numbers and words."""
        result = {
            "target": self.target,
            "instrument": self.instrument,
            "mjd": self.mjd,
            "n_v2": self.n_v2,
            "n_t3": self.n_t3,
            "n_t3amp": self.n_t3amp,
            "n_visamp": self.n_visamp,
            "n_visphi": self.n_visphi,
            "best": self.best.to_json(),
            "alternatives": [one.to_json() for one in self.alternatives],
            "alternatives_within_chi2": self.kept_chi2,
            "single_star": {
                "primary_diameter_mas": abs(self.null.value("primary_diameter")),
                "chi2": self.null.chi2,
                "dof": self.null.dof,
            },
            "noise_searches": 0 if self.false_alarms is None else len(self.false_alarms.maxima),
            "false_alarm_extrapolated": self.extrapolated,
            "field_mas": self.maps.grid.half * self.maps.grid.step,
            "step_mas": self.maps.grid.step,
            "seconds": self.seconds,
        }
        if self.bootstrap is not None:
            result["best"]["bootstrap"] = self.bootstrap.to_json()
        if self.previous is not None:
            result["first_companion"] = self.previous.to_json()
        return result


def candidates(
    fits: list[Fit], null: Fit, companion: int, chance: float | None
) -> tuple[Candidate, ...]:
    """Candidates for solutions, the best first, with their posterior weights.

    `null` is the scene without the companion, `chance` the false-alarm probability of the best.
    """
    scale2 = max(1.0, fits[0].reduced)
    log_weight = np.array([-0.5 * one.chi2 / scale2 + _log_volume(one, companion) for one in fits])
    weight = np.exp(log_weight - log_weight.max())
    weight /= weight.sum()
    return tuple(
        _candidate(one, null, companion, chance, float(w), scale2)
        for one, w in zip(fits, weight, strict=True)
    )


def _log_volume(one: Fit, companion: int) -> float:
    """Log of the area of the error ellipse of a position."""
    return 0.5 * float(np.linalg.slogdet(_place_covariance(one, companion))[1])


def _place_covariance(one: Fit, companion: int) -> np.ndarray:
    names = (companion_name(axis, companion) for axis in ("x", "y"))
    places = [one.free.index(one.scene.names.index(name)) for name in names]
    return one.covariance[np.ix_(places, places)]


def _candidate(
    one: Fit, null: Fit, companion: int, chance: float | None, weight: float, scale2: float
) -> Candidate:
    scale = float(np.sqrt(scale2))

    def name(what: str) -> str:
        return companion_name(what, companion)

    gain = null.chi2 - one.chi2
    own = one.scene.names.index(name("diameter"))
    diameter, error, prior = max(float(one.values[own]), 0.0), one.error(name("diameter")), None
    if own in one.squares:
        # By how much the diameter grows when its square does by one standard error.
        error = float(np.sqrt(diameter**2 + one.squares[own])) - diameter
        prior = float(np.sqrt(one.priors[own][1]))
    return Candidate(
        x_mas=one.value(name("x")),
        y_mas=one.value(name("y")),
        covariance_xy_mas2=_place_covariance(one, companion) * scale2,
        contrast=one.value(name("contrast")),
        contrast_error=one.error(name("contrast")) * scale,
        primary_diameter_mas=abs(one.value("primary_diameter")),
        primary_diameter_error_mas=one.error("primary_diameter") * scale,
        companion_diameter_mas=diameter,
        companion_diameter_error_mas=error * scale,
        companion_diameter_prior_mas=prior,
        error_scale=scale,
        chi2=one.chi2,
        dof=one.dof,
        delta_chi2=gain,
        significance_sigma=float(np.sqrt(max(gain, 0.0) / scale2)),
        false_alarm_probability=chance,
        weight=weight,
        companion=companion,
        fit=one,
    )
