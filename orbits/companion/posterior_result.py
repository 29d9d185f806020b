"""What the posterior of an epoch says: samples, separate modes, and the evidence."""

from dataclasses import dataclass
from typing import Any

import astropy.units as u
import numpy as np

from ..positions import Positions
from ..times import tdb_of_utc
from .result import SearchResult

SQUARE = "_squared"
"""What the name of a diameter ends in where its square, signed as a fit takes it, is meant."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Mode:
    """A normal density in place of one of the separate parts of a posterior."""

    weight: float
    """Its share of the posterior."""
    mean: np.ndarray
    """(p,)"""
    covariance: np.ndarray
    """(p, p)"""


@dataclass(frozen=True, eq=False, kw_only=True)
class EpochPosterior:
    """What one epoch says of its companion."""

    target: str
    instrument: str
    mjd: float
    names: tuple[str, ...]
    """Of the p parameters, as in `orbits.binary.Scene`; mas. Instead of the diameter of a companion
    that is not resolved there is its square, `diameter_squared`, mas2: negative as often as not."""
    samples: np.ndarray
    """(n, p) of equal weight."""
    mode: np.ndarray
    """(n,) the mode of each sample; -1 where it lies at none of them."""
    modes: tuple[Mode, ...]
    """The heaviest first; their weights and the share of samples at none of them sum to 1."""
    log_evidence: float
    """ln of the mean likelihood of a pair over the prior, less that of the single star."""
    log_evidence_error: float
    error_scale: float
    """Root of the reduced chi-square where that exceeds 1; errors are scaled by it."""
    calls: int
    """Evaluations of the model."""
    seconds: float
    search: SearchResult

    def column(self, name: str) -> np.ndarray:
        """(n,) samples of a parameter."""
        return self.samples[:, self.names.index(name)]

    def positions(self, night: str, *, least: float = 1e-3) -> Positions:
        """The modes as alternatives of one night, for the fit of an orbit.

        Those with a share below `least` are left out, and the others weighted anew.
        """
        kept = [one for one in self.modes if one.weight >= least]
        x, y, f = (self.names.index(name) for name in ("x", "y", "contrast"))
        n, weight = len(kept), np.array([one.weight for one in kept])
        return Positions(
            mjd=np.full(n, tdb_of_utc(self.mjd)),
            xy=np.array([one.mean[[x, y]] for one in kept]),
            covariance=np.array([one.covariance[np.ix_([x, y], [x, y])] for one in kept]),
            weight=weight / weight.sum(),
            night=np.full(n, night, dtype=object),
            instrument=np.full(n, self.instrument, dtype=object),
            source=np.full(n, "posterior", dtype=object),
            contrast=np.array([one.mean[f] for one in kept]),
            contrast_error=np.array([one.covariance[f, f] ** 0.5 for one in kept]),
        )

    def table(self):
        """The samples as a table with units."""
        from astropy.table import Table

        table = Table(meta={"target": self.target, "mjd": self.mjd})
        for name in self.names:
            unit = u.mas**2 if name.endswith(SQUARE) else u.mas
            values = self.column(name)
            table[name] = values if name == "contrast" else values * unit
        table["mode"] = self.mode
        return table

    def to_json(self) -> dict[str, Any]:
        """One object of plain numbers and words."""
        return {
            "target": self.target,
            "instrument": self.instrument,
            "mjd": self.mjd,
            "parameters": list(self.names),
            "modes": [
                {
                    "weight": one.weight,
                    "mean": one.mean.tolist(),
                    "covariance": one.covariance.tolist(),
                }
                for one in self.modes
            ],
            "elsewhere": float(np.mean(self.mode < 0)),
            "log_evidence_against_single_star": self.log_evidence,
            "log_evidence_err": self.log_evidence_error,
            "samples": len(self.samples),
            "error_scale": self.error_scale,
            "seconds": self.seconds,
        }
