"""By how much a bright companion answers less than in proportion to its contrast.

Maps are linear in the contrast (see `maps`), but a companion dilutes the light of its star: to V2
alone a contrast f looks like one of f / (1 + f)^2, to phases alone nearly like f. With r(f) the
exact change of the data, and s, P as in `maps`, the search sees the amplitude of a faint companion
of contrast

    F(f) = s^T P r(f) / s^T P s  =  f / (1 + c f),

which defines c for each place: it varies little with f and is taken at the limit itself. A
chi-square feels all of the change, that which looks like no faint companion too, and there

    F(f) = [r(f)^T P r(f) / s^T P s]^(1/2).
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from ..binary import model
from ..progress import SILENT, Silent
from .injection import View
from .maps import Field
from .stack import Stack

_LINEAR = 0.01
"""Contrast below which c, which is about 1, changes nothing that matters."""
_ROUNDS = 2
"""Evaluations of each place, the second at the limit that the first leads to."""
_NEAR = 0.05
"""A first correction smaller than this needs no second: c changes by less than its part in it."""


def saturation(
    stack: Stack, place: np.ndarray, linear: np.ndarray, *, whole: bool = False,
    progress: Silent = SILENT,
) -> np.ndarray:  # fmt: skip
    """c of P places for companions at their limits.

    Parameters
    ----------
    place : ndarray of int, shape (P,)
        Indices of the flattened grid.
    linear : ndarray of shape (P,)
        Contrasts that are excluded there to first order; for those below 0.01 c is 0.
    whole : bool
        For limits by chi-square, and not for what a search sees.
    """
    nights = [_Exact.of(field) for field in stack.fields]
    c = np.zeros(len(place))
    bright = np.flatnonzero((linear > _LINEAR) & np.isfinite(linear))
    with progress.task("companions too bright to be linear", len(bright)) as tick:
        for k in bright:
            for _ in range(_ROUNDS):
                contrast = min(1.0, float(unsaturated(linear[k], c[k])))
                answer = _answer(stack, nights, int(place[k]), contrast, whole=whole)
                c[k] = (contrast / answer - 1) / contrast if answer > 0 else np.inf
                if abs(c[k]) * contrast < _NEAR:
                    break
            tick()
    return c


def unsaturated(linear: np.ndarray, c: np.ndarray) -> np.ndarray:
    """The contrasts that look like the faint ones `linear`; inf where no companion does."""
    with np.errstate(invalid="ignore"):  # an infinite c, or an infinite limit
        left = 1 - c * linear
        return np.where(left > 0, linear / np.where(left > 0, left, 1.0), np.inf)


@dataclass(frozen=True, eq=False)
class _Exact:
    """One night, and what its scene without the companion predicts."""

    field: Field
    scene: View
    predicted: np.ndarray

    @classmethod
    def of(cls, field: Field) -> "_Exact":
        scene = View.of(field.null)
        return cls(field, scene, model(scene.scene, scene.values, field.sampling)[0])

    def change(self, x: float, y: float, contrast: float) -> np.ndarray:
        """(rank,) what a companion changes, whitened and without what nuisances imitate."""
        lit = self.scene.beside(x=x, y=y, contrast=contrast, diameter=self.field.companion[1])
        data = model(lit.scene, lit.values, self.field.sampling)[0]
        wrapped = replace(self.field.problem, data=data).residual(self.predicted)
        return self.field.project(self.field.covariance.whiten(wrapped))


def _answer(
    stack: Stack, nights: Sequence[_Exact], place: int, contrast: float, *, whole: bool
) -> float:
    """F of a contrast at one place."""
    row, column = divmod(place, stack.grid.side)
    x, y = float(stack.grid.axis[column]), float(stack.grid.axis[row])
    seen = own = 0.0
    faint = stack.signatures(np.array([x]), np.array([y]))
    for night, scale, signature in zip(nights, stack.scale, faint, strict=True):
        beam = np.broadcast_to(night.field.beam, (stack.grid.side,) * 2)[row, column]
        expected, change = beam * signature[:, 0], night.change(x, y, contrast) / scale
        seen += float((change if whole else expected) @ change)
        own += float(expected @ expected)
    if own == 0:
        return 0.0
    return (seen / own) ** 0.5 if whole else seen / own
