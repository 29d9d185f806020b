"""How often noise alone, searched over the whole field in the same way, looks as good.

The statistic of an epoch is the largest chi-square gain of a faint companion over the field,
between the positions of the grid too, divided by the reduced chi-square of the data where that
exceeds 1 (errors stated too small then make no discoveries). Its law under "no companion" is
measured: noise is drawn from the data's own covariance about the fitted single star, and searched.

Beyond the simulated ranks a law for maxima of a smooth random field of two dimensions goes on:

    P(T > t) = 1 - exp(-m(t)),   m(t) = A sqrt(t) exp(-t / 2),

the leading term of the expected number of separate regions above t, for a field that is a squared
standard normal variable at every point (Adler & Taylor 2007, Random Fields and Geometry; Vitells &
Gross 2011, Astropart. Phys. 35, 230), with A fitted to the highest simulated maxima.
"""

from dataclasses import dataclass

import numpy as np

from ..progress import SILENT, Silent
from .maps import Field, estimate

_BATCH_POSITIONS = 1_200_000
"""Positions in the transforms that are made at a time; each carries two noise searches."""
_LEAST = 100
"""Noise searches before the first look whether more of them are needed."""
_BEYOND_DOUBT = 1e-9
_COMPANION = 3
"""Parameters of a companion: x, y, contrast."""
_FEWEST_IN_TAIL = 50
"""Maxima that the law is fitted to at least. Lower ones follow it less: fitted to the upper half,
it gives 0.6 of the true probability at 1 per cent."""
_TRUSTED_RANK = 10
"""A probability is counted, not extrapolated, while at least so many noise searches exceed it."""


@dataclass(frozen=True, eq=False)
class FalseAlarms:
    """The law of the largest gain that noise alone reaches over a field."""

    maxima: np.ndarray
    """(n,) of the noise searches, ascending."""
    amplitude: float
    """A of the law of the tail."""

    @classmethod
    def fitted(cls, maxima: np.ndarray) -> "FalseAlarms":
        """From simulated maxima, by maximum likelihood for the highest twentieth of them."""
        maxima = np.sort(maxima)
        return cls(maxima, _tail_amplitude(maxima))

    def probability(self, statistic: float) -> tuple[float, bool]:
        """P(noise reaches `statistic`), and whether it is extrapolated beyond the counts."""
        n = len(self.maxima)
        above = n - int(np.searchsorted(self.maxima, statistic, side="left"))
        if above >= _TRUSTED_RANK:
            return (above + 1) / (n + 1), False
        return float(-np.expm1(-_expected(self.amplitude, statistic))), True

    def threshold(self, probability: float) -> float:
        """The statistic that noise reaches with `probability` (0 to 1)."""
        from scipy.optimize import brentq

        rank = int(np.ceil(probability * (len(self.maxima) + 1)))
        if rank > _TRUSTED_RANK:
            return float(self.maxima[-(rank - 1)])
        wanted = -np.log1p(-probability)
        return float(brentq(lambda t: _expected(self.amplitude, t) - wanted, 1.0, 1e4))


def noise_maxima(
    field: Field,
    count: int,
    rng: np.random.Generator,
    *,
    enough: float | None = None,
    progress: Silent = SILENT,
) -> np.ndarray:
    """Statistics of up to `count` noise searches of `field`.

    With a statistic `enough` it stops early where the law of the tail puts that one beyond 1e-9:
    no further search could change what is said about it.
    """
    batch = max(1, _BATCH_POSITIONS // field.grid.side**2)
    batch = min(batch, -(-count // 2), 8)
    transform = field.grid.transform(field.response.u, field.response.v, batch)
    maxima = np.empty(0)
    with progress.task("searching noise", count) as tick:
        while len(maxima) < count:
            k = min(2 * batch, count - len(maxima))
            white = field.noise(rng, k)
            n = transform(field.waves(white))
            chi2 = (white**2).sum(axis=0)
            found = [
                scaled(field, estimate(n[i] * field.beam, field.sensitivity)[1], chi2[i])
                for i in range(k)
            ]
            maxima = np.concatenate([maxima, found])
            tick(k)
            early = enough is not None and _LEAST <= len(maxima) < _LEAST + k
            if early and FalseAlarms.fitted(maxima).probability(enough)[0] < _BEYOND_DOUBT:
                break
    return maxima


def scaled(field: Field, gain: np.ndarray, chi2: float) -> float:
    """Largest gain over the field, divided by the reduced chi-square where that exceeds 1.

    `gain` is a map, and `chi2` that of the projected residuals it was made from.
    """
    top = highest(gain)
    dof = field.covariance.rank - field.nuisance.shape[1] - _COMPANION
    reduced = (chi2 - top) / dof if dof > 0 else 1.0
    return top / max(1.0, reduced)


def highest(gain: np.ndarray) -> float:
    """Largest value of a map, between its positions too, by a parabola along either axis."""
    row, column = np.unravel_index(np.argmax(gain), gain.shape)
    top = gain[row, column]
    if not (0 < row < gain.shape[0] - 1 and 0 < column < gain.shape[1] - 1):
        return float(top)
    rise = 0.0
    for before, after in (
        (gain[row - 1, column], gain[row + 1, column]),
        (gain[row, column - 1], gain[row, column + 1]),
    ):
        curvature = 2 * top - before - after
        if curvature > 0:
            rise += (after - before) ** 2 / (8 * curvature)
    return float(top + rise)


def _expected(amplitude: float, t: np.ndarray) -> np.ndarray:
    """m(t): expected number of separate regions above t."""
    return amplitude * np.sqrt(t) * np.exp(-t / 2)


def _tail_amplitude(maxima: np.ndarray) -> float:
    """The amplitude that makes the highest of the `maxima` (ascending) most likely.

    With k of them above a cut c and the others below, the likelihood of P(T <= t) = exp(-m(t)) is
    greatest for k / (sum of m / amplitude over those above, and at c for each of those below).
    """
    used = max(1, min(max(_FEWEST_IN_TAIL, len(maxima) // 20), len(maxima) // 2))
    above, cut = maxima[-used:], max(float(maxima[-used - 1]), 1.0)
    exposure = _expected(1.0, above).sum() + (len(maxima) - used) * _expected(1.0, cut)
    return used / float(exposure)
