"""Nights searched as one for a companion that stands at the same place in all of them.

The statistic of one night is N^2 / D (see `maps`); that of several is the same of the sums of N
and D over the nights. Nights whose reduced chi-square exceeds 1 count as if their errors were that
much larger, as they do in the search.
"""

from collections.abc import Iterator, Sequence
from functools import cached_property

import numpy as np

from ..progress import SILENT, Silent
from .maps import Field
from .significance import FalseAlarms, highest

_BATCH = 4
"""Transforms at a time; each carries two noise realisations."""
COMPANION = 3
"""Parameters of a companion: x, y, contrast."""


class Stack:
    """One or several fields over the same grid, each about the null of its night."""

    def __init__(self, fields: Sequence[Field]):
        self.fields = tuple(fields)
        self.grid = self.fields[0].grid
        self.scale = np.array([max(1.0, reduced(field)) ** 0.5 for field in self.fields])
        """(nights,) by which the errors of each night are enlarged."""

    @cached_property
    def sensitivity(self) -> np.ndarray:
        """(side, side): D, the inverse variance of the contrast of a faint companion."""
        each = zip(self.fields, self.scale, strict=True)
        return sum(field.sensitivity / scale**2 for field, scale in each)

    @cached_property
    def signal(self) -> np.ndarray:
        """(side, side): N of the data; N / D is the contrast that fits best."""
        total = np.zeros_like(self.sensitivity)
        for field, scale in zip(self.fields, self.scale, strict=True):
            waves = field.waves(field.project(field.residual)[:, None])[0]
            n = field.grid.sum(field.response.u, field.response.v, waves)
            total += n * field.beam / scale**2
        return total

    @cached_property
    def normalisation(self) -> np.ndarray:
        """(side, side): 1 / sqrt(D), the error of a contrast; 0 where D is 0."""
        d = self.sensitivity
        return np.divide(1.0, np.sqrt(d), out=np.zeros_like(d), where=d > 0)

    @property
    def dof(self) -> int:
        """Degrees of freedom of all nights about a companion."""
        free = sum(f.covariance.rank - f.nuisance.shape[1] for f in self.fields)
        return free - COMPANION

    def noise(self, count: int, rng: np.random.Generator) -> Iterator[tuple[np.ndarray, float]]:
        """Yield `count` maps of N / sqrt(D) of noise alone, and the chi-square of each.

        Each is what the search of a night without companion would see: a unit normal variable at
        every position. The maps are overwritten by later ones.
        """
        plans = [f.grid.transform(f.response.u, f.response.v, _BATCH) for f in self.fields]
        for start in range(0, count, 2 * _BATCH):
            k = min(2 * _BATCH, count - start)
            total, chi2 = np.zeros((k, self.grid.side, self.grid.side)), np.zeros(k)
            for field, scale, plan in zip(self.fields, self.scale, plans, strict=True):
                white = field.noise(rng, k)
                total += plan(field.waves(white)) * (field.beam / scale)
                chi2 += (white**2).sum(axis=0)
            yield from zip(total * self.normalisation, chi2, strict=True)

    def false_alarms(
        self, count: int, rng: np.random.Generator, progress: Silent = SILENT
    ) -> FalseAlarms:
        """The law of the search's statistic where there is no companion, from `count` searches."""
        maxima = []
        with progress.task("searching noise", count) as tick:
            for z, chi2 in self.noise(count, rng):
                top = highest(np.square(np.maximum(z, 0.0)))
                maxima.append(top / max(1.0, self.reduced(chi2, top)))
                tick()
        return FalseAlarms.fitted(np.array(maxima))

    def reduced(self, chi2: float, top: float) -> float:
        """Reduced chi-square about a companion that gains `top`."""
        return (chi2 - top) / self.dof if self.dof > 0 else 1.0

    def signatures(self, x: np.ndarray, y: np.ndarray) -> list[np.ndarray]:
        """For each night (rank, p): what a companion at each place does to the whitened data.

        By contrast, to first order, without what the nuisance parameters can imitate, in units of
        the (enlarged) errors.
        """
        return [
            field.project(field.covariance.whiten(field.response.at(x, y).T)) / scale
            for field, scale in zip(self.fields, self.scale, strict=True)
        ]


def reduced(field: Field) -> float:
    """Reduced chi-square of a night about the best faint companion, as the search takes it."""
    dof = field.covariance.rank - field.nuisance.shape[1] - COMPANION
    if dof <= 0:
        return 1.0
    return (field.chi2 - highest(field.faint().gain)) / dof
