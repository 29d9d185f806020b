"""What limits say: contrasts that one night, or several together, exclude."""

from dataclasses import dataclass
from typing import Any

import numpy as np

from .result import Candidate
from .trials import Trial

ANNULI = 20
ROUTES = ("profile", "published", "recovered")


@dataclass(frozen=True, eq=False, kw_only=True)
class Limits:
    """Contrasts that one night, or several together, exclude."""

    target: str
    nights: tuple[tuple[float, str], ...]
    """MJD and instrument of each night."""
    axis: np.ndarray
    """(side,) coordinates of the places along either axis, mas; maps are indexed [y, x]."""
    maps: dict[str, np.ndarray]
    """(side, side) limit by each of `ROUTES`; inf where nothing up to a contrast of 1 is excluded.
    "published" is absent where no night has closure phases."""
    expected: np.ndarray
    """(side, side) contrast whose expected chi-square gain equals the threshold of a claim."""
    critical: np.ndarray
    """(injections, side, side): contrast from which on the search finds a companion in each noise
    realisation."""
    threshold: float
    """Chi-square gain that noise alone reaches with probability `false_alarm` over the field."""
    confidence: float
    completeness: float
    false_alarm: float
    field: float
    """Half the side of the searched field, mas."""
    removed: tuple[Candidate | None, ...]
    """For each night the companion that it shows and that is no part of the limits."""
    trials: tuple[Trial, ...] = ()
    """Companions of the contrast `maps["recovered"]` put into the data and searched for."""
    each: tuple["Limits", ...] = ()
    """Those of the nights by themselves, where there are several."""
    seconds: float

    @property
    def separation(self) -> np.ndarray:
        """(side, side) distance of each place from the star, mas."""
        return np.hypot(self.axis[:, None], self.axis)

    @property
    def separations(self) -> np.ndarray:
        """(ANNULI,) middles of the annuli that make the rows of the curve, mas."""
        return self.field * (np.arange(ANNULI) + 0.5) / ANNULI

    def ring(self, separation: float) -> np.ndarray:
        """(side, side) bool: the places of the annulus about `separation` (mas).

        It is as wide as the rows of the curve are apart; where the map is too coarse to have a
        place in it, the nearest ones are taken.

        Raises
        ------
        ValueError
            If the separation lies beyond the field.
        """
        if not 0 <= separation <= self.field:
            raise ValueError(f"separation must be within 0 and {self.field:g} mas")
        off = np.abs(self.separation - separation)
        return off <= max(self.field / ANNULI / 2, float(off.min())) * (1 + 1e-9)

    def found(self, separation: float, contrast: np.ndarray) -> np.ndarray:
        """Completeness: the share of companions of each `contrast` (m,) that the search finds.

        Over all position angles in the annulus about `separation` (mas), and over noise.
        """
        critical = np.sort(self.critical[:, self.ring(separation)].ravel())
        return np.searchsorted(critical, contrast, side="right") / critical.size

    def reaching(self, separation: float, completeness: float) -> float:
        """The contrast found with `completeness` in the annulus about `separation` (mas)."""
        critical = self.critical[:, self.ring(separation)]
        return float(np.quantile(critical, completeness, method="inverted_cdf"))

    def curve(self) -> dict[str, np.ndarray]:
        """Limits against separation, (ANNULI,) arrays by name.

        `separation` (mas, middle of the annulus), for each route `<route>_median` and
        `<route>_worst` over the position angles, `expected_median`, and `recovered`, the contrast
        found with the completeness asked for over all position angles together. inf where nothing
        is excluded. Rows near the star rest on few places, if the field is wide: limits change
        steeply there, and a smaller field tells them better.
        """
        rings = [self.ring(separation) for separation in self.separations]
        columns = {"separation": self.separations}
        for name, values in {**self.maps, "expected": self.expected}.items():
            columns[f"{name}_median"] = np.array([np.median(values[ring]) for ring in rings])
            if name != "expected":
                columns[f"{name}_worst"] = np.array([values[ring].max() for ring in rings])
        columns["recovered"] = bounded(
            np.array([
                np.quantile(self.critical[:, ring], self.completeness, method="inverted_cdf")
                for ring in rings
            ])
        )  # fmt: skip
        return columns

    def to_json(self) -> dict[str, Any]:
        """One object of plain numbers and words; null where nothing is excluded."""
        columns = self.curve()
        rows = [
            {
                "separation_mas" if name == "separation" else f"contrast_{name}": _plain(values[k])
                for name, values in columns.items()
            }
            for k in range(ANNULI)
        ]
        result = {
            "target": self.target,
            "nights": [{"mjd": mjd, "instrument": name} for mjd, name in self.nights],
            "confidence": self.confidence,
            "completeness": self.completeness,
            "false_alarm_probability": self.false_alarm,
            "threshold": self.threshold,
            "injections": len(self.critical),
            "field_mas": self.field,
            "trials": {
                "searched": len(self.trials),
                "found": sum(one.found for one in self.trials),
            },
            "removed": [None if one is None else one.to_json() for one in self.removed],
            "curve": rows,
            "seconds": self.seconds,
        }
        if self.each:
            result["each_night"] = [one.to_json() for one in self.each]
        return result


def bounded(contrast: np.ndarray) -> np.ndarray:
    """Contrasts above 1, which are no companion's, as inf."""
    return np.where(contrast <= 1, contrast, np.inf)


def _plain(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None
