"""Injection and recovery by the search itself: the check of the limits that are made without it.

The observed noise stays in the data; the companion is multiplied in with the exact model, and the
whole search runs: diameter of the star fitted anew, maps, exact fits at their peaks.
"""

from dataclasses import dataclass

import numpy as np

from ..errors import NothingFound
from ..observation import Observation
from .injection import View, exchange
from .maps import Field
from .night import Night, NightSearch
from .recovery import LOBE, TWIN

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


def trial(
    search: NightSearch, night: Night, *, x: float, y: float, contrast: float, threshold: float
) -> Trial:
    """Put one companion at x, y (mas) into the data of `night`, and search for it."""
    lit = with_companion(night, x=x, y=y, contrast=contrast)
    return looked_for(search, night, lit, x=x, y=y, contrast=contrast, threshold=threshold)


def looked_for(
    search: NightSearch, night: Night, lit: Observation, *, x: float, y: float, contrast: float,
    threshold: float,
) -> Trial:  # fmt: skip
    """Search the data `lit`, which are those of `night` or like them with a companion."""
    try:
        result = search.search(lit, companions=1 + night.epoch.last)
    except NothingFound:
        return Trial(x, y, contrast, claimed=False, in_place=False)
    place = result.best.x_mas, result.best.y_mas
    claimed = result.statistic >= threshold
    return Trial(x, y, contrast, claimed, same_lobe(night.field, (x, y), place))


def with_companion(night: Night, *, x: float, y: float, contrast: float) -> Observation:
    """The data of `night` with a companion of the kind that it is searched for."""
    before = View.of(night.field.null)
    after = before.beside(x=x, y=y, contrast=contrast, diameter=night.field.companion[1])
    return exchange(night.epoch.observation, before, after, smearing=night.epoch.smearing)


def same_lobe(field: Field, start: tuple[float, float], end: tuple[float, float]) -> bool:
    """Whether the response to a companion at `start` stays high all the way to `end` (mas).

    Or to its opposite, where that cannot be told from it.
    """
    twin = -start[0], -start[1]
    if _rho(field, start, *np.transpose([twin]))[0] > TWIN and _joined(field, twin, end):
        return True
    return _joined(field, start, end)


def _joined(field: Field, start: tuple[float, float], end: tuple[float, float]) -> bool:
    part = np.linspace(0.0, 1.0, _BETWEEN)
    x, y = (a + part * (b - a) for a, b in zip(start, end, strict=True))
    return bool(_rho(field, start, x, y).min() > LOBE)


def _rho(field: Field, start: tuple[float, float], x: np.ndarray, y: np.ndarray) -> np.ndarray:
    """(p,) response at places x, y to a companion at `start`, all in mas; see `recovery`."""
    x, y = np.append(start[0], x), np.append(start[1], y)
    white = field.project(field.covariance.whiten(field.response.at(x, y).T))
    size = np.linalg.norm(white, axis=0)
    scale = size[0] * size
    rho = np.divide(white[:, 0] @ white, scale, out=np.zeros_like(size), where=scale > 0)
    return rho[1:]
