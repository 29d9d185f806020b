"""Injection and recovery by the search itself: the check of the limits that are made without it.

The observed noise stays in the data; the companion is multiplied in with the exact model, and the
whole search runs: diameter of the star fitted anew, maps, exact fits at their peaks.
"""

from dataclasses import dataclass

import numpy as np

from ..binary import companion_name
from ..observation import Observation
from .epoch import Epoch
from .fit import Fit
from .injection import View, exchange
from .maps import Field
from .recovery import LOBE

_BETWEEN = 9
"""Points on the way from where a companion was put to where it was found."""


@dataclass(frozen=True)
class Trial:
    """One companion put into the data, and what became of it."""

    x_mas: float
    y_mas: float
    contrast: float
    claimed: bool
    """Something passed the threshold of a claim."""
    in_place: bool
    """The best solution lies on the lobe of the place."""

    @property
    def found(self) -> bool:
        """Claimed, and claimed at its place."""
        return self.claimed and self.in_place


def with_companion(epoch: Epoch, null: Fit, x: float, y: float, contrast: float) -> Observation:
    """The data of `epoch` with the companion that it looks for put in (mas)."""
    known = dict(zip(null.scene.names, null.values.tolist(), strict=True))
    own = {"x": x, "y": y, "contrast": contrast, "diameter": epoch.stars.fixed.get("diameter", 0.0)}
    added = {companion_name(name, epoch.last): value for name, value in own.items()}
    lit = View(epoch.scene, epoch.scene.vector({**known, **added}))
    return exchange(epoch.observation, View(null.scene, null.values), lit, smearing=epoch.smearing)


def same_lobe(field: Field, start: tuple[float, float], end: tuple[float, float]) -> bool:
    """Whether the response to a companion at `start` stays high all the way to `end` (mas)."""
    part = np.linspace(0.0, 1.0, _BETWEEN)
    x, y = (a + part * (b - a) for a, b in zip(start, end, strict=True))
    white = field.project(field.covariance.whiten(field.response.at(x, y).T))
    size = np.linalg.norm(white, axis=0)
    rho = np.divide(white[:, 0] @ white, size[0] * size, out=np.zeros_like(size), where=size > 0)
    return bool(rho.min() > LOBE)
