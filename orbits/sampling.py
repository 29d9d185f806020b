"""Where an observation samples the visibility: every baseline and channel once, smearing included.

The sides of a triangle are baselines that the squared visibilities have already, so the complex
visibility is worked out once per distinct baseline, channel and instrument and then looked up.
A channel is a top hat in wavelength, integrated by Gauss-Legendre nodes; the complex visibility is
averaged over them (light of one channel interferes as one fringe). An integration is a top hat in
time: the squared visibility or bispectrum is averaged over it (frames are much shorter).
"""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from .constants import DAY, MAS
from .observation import Observable, Observation

SAMPLED = ("v2", "t3", "t3amp", "visamp")
"""The observables of which there is a model, in the order in which data are stacked."""
_SAME_BASELINE = 1e-6
"""m; sides that agree to this are one: 1e-5 of a turn at 1 arcsec and 0.5 um."""
_MOST_NODES = 40
_WORTH_SMEARING = 0.1
"""rad; a phase that runs by less than this during an integration changes V2 by under 2e-4."""


@dataclass(frozen=True, eq=False)
class Sampling:
    """m distinct samples, each with T nodes in time and K nodes in wavelength."""

    u: np.ndarray
    """(m, T, K) cycles/rad, to the East."""
    v: np.ndarray
    """(m, T, K) cycles/rad, to the North."""
    wavelength: np.ndarray
    """(m, 1, K) m."""
    time_weights: np.ndarray
    """(T,), summing to 1."""
    band_weights: np.ndarray
    """(K,), summing to 1."""
    instrument: np.ndarray
    """(m,) index of the instrument."""
    v2: np.ndarray
    """(n_v2,) the sample of each squared visibility."""
    t3: np.ndarray
    """(n_t3, 3) the samples of the sides A->B, B->C, A->C."""
    turned: np.ndarray
    """(n_t3, 3) True where the side enters the bispectrum as the conjugate of its sample."""
    t3amp: np.ndarray
    """(n_t3amp, 3) as `t3`, for triple amplitudes."""
    t3amp_turned: np.ndarray
    """(n_t3amp, 3) as `turned`."""
    visamp: np.ndarray
    """(n_visamp,) the sample of each visibility amplitude."""

    def __len__(self) -> int:
        return len(self.u)

    @cached_property
    def modulus(self) -> np.ndarray:
        """(m, T, K) length of the spatial frequency, cycles/rad."""
        return np.hypot(self.u, self.v)

    @classmethod
    def of(
        cls,
        observation: Observation,
        *,
        radius: float,
        smearing: bool = True,
        precision: float = 1e-8,
    ) -> "Sampling":
        """The samples of `observation`, for sources within `radius` mas of the centre.

        The number of nodes follows from the largest turn of the phase across a channel, or
        during an integration, that such a source can cause, so that its smeared visibility is
        right to `precision`; without `smearing` it is one.
        """
        tables = [getattr(observation, name) for name in SAMPLED]
        legs, rates = zip(*(_sides(table) for table in tables), strict=True)
        leg = np.concatenate([part.reshape(-1, 2) for part in legs])
        rate = np.concatenate([part.reshape(-1, 2) for part in rates])
        both = {
            name: np.concatenate(
                [
                    np.repeat(getattr(table, name), part.shape[1])
                    for table, part in zip(tables, legs, strict=True)
                ]
            )
            for name in ("wavelength", "bandwidth", "integration", "instrument")
        }
        turned = (leg[:, 0] < 0) | ((leg[:, 0] == 0) & (leg[:, 1] < 0))
        sign = np.where(turned, -1.0, 1.0)[:, None]
        leg, drift = leg * sign, rate * sign * both["integration"][:, None]
        if not smearing or 2 * np.pi * radius * MAS * _largest(drift, both) < _WORTH_SMEARING:
            drift = np.zeros_like(drift)
        key = np.column_stack(
            [
                np.round(leg / _SAME_BASELINE),
                np.round(drift / _SAME_BASELINE),
                both["wavelength"],
                both["bandwidth"],
                both["instrument"],
            ]
        )
        first, which = _distinct(key)
        channel = both["wavelength"][first], both["bandwidth"][first] * smearing
        turn = np.pi * radius * MAS * _turns(leg[first], *channel)
        band_nodes, band_weights = _legendre(turn, precision)
        time_nodes, time_weights = _legendre(
            np.pi * radius * MAS * _largest(drift[first], {"wavelength": channel[0]}), precision
        )
        wavelength = channel[0][:, None] + channel[1][:, None] * band_nodes / 2
        moving = leg[first][:, None, :] + drift[first][:, None, :] * time_nodes[:, None] / 2
        frequency = moving[:, :, None, :] / wavelength[:, None, :, None]
        ends = np.cumsum([part.shape[0] * part.shape[1] for part in legs])[:-1]
        v2, t3, t3amp, visamp = np.split(which, ends)
        # The third side of a triangle closes it: it enters conjugated.
        third = np.array([False, False, True])
        _, t3_turned, t3amp_turned, _ = np.split(turned, ends)
        return cls(
            u=frequency[..., 0],
            v=frequency[..., 1],
            wavelength=wavelength[:, None, :],
            time_weights=time_weights,
            band_weights=band_weights,
            instrument=both["instrument"][first].astype(int),
            v2=v2,
            t3=t3.reshape(-1, 3),
            turned=t3_turned.reshape(-1, 3) ^ third,
            t3amp=t3amp.reshape(-1, 3),
            t3amp_turned=t3amp_turned.reshape(-1, 3) ^ third,
            visamp=visamp,
        )


def _sides(table: Observable) -> tuple[np.ndarray, np.ndarray]:
    """(n, 1 or 3, 2) baselines, m, and their rates of change, m/s."""
    legs, rates = table.legs, _rates(table)
    if legs.shape[1] == 2:
        legs = np.concatenate([legs, legs.sum(axis=1, keepdims=True)], axis=1)
        rates = np.concatenate([rates, rates.sum(axis=1, keepdims=True)], axis=1)
    return legs, rates


def _rates(table: Observable) -> np.ndarray:
    """How fast the baselines turn with the Earth, from rows of the same stations; else 0.

    OIFITS stores no rates, and station coordinates in circulation are unreliable; the rows tell.
    """
    if not table.integration.any() or (table.stations < 0).any():
        return np.zeros_like(table.legs)
    _, first, row_of = np.unique(table.row, return_index=True, return_inverse=True)
    mjd, legs = table.mjd[first], table.legs[first]
    per_row = np.zeros_like(legs)
    label = np.column_stack([table.stations[first], table.instrument[first]])
    _, group = np.unique(label, axis=0, return_inverse=True)
    for g in range(group.max() + 1):
        rows = np.flatnonzero(group.ravel() == g)
        rows = rows[np.argsort(mjd[rows], kind="stable")]
        seconds = (mjd[rows] - mjd[rows[0]]) * DAY
        # Beyond two hours apart a straight line no longer follows the turning baseline.
        if rows.size > 1 and np.diff(seconds).min() > 0 and np.diff(seconds).max() < 7200:
            per_row[rows] = np.gradient(legs[rows], seconds, axis=0)
    return per_row[row_of.ravel()]


def _distinct(key: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """First row of each distinct row of `key`, and for every row which one it is."""
    if not len(key):
        return np.empty(0, dtype=int), np.empty(0, dtype=int)
    order = np.lexsort(key.T)
    new = np.ones(len(key), dtype=bool)
    new[1:] = (np.diff(key[order], axis=0) != 0).any(axis=1)
    which = np.empty(len(key), dtype=int)
    which[order] = np.cumsum(new) - 1
    return order[new], which


def _turns(leg: np.ndarray, wavelength: np.ndarray, bandwidth: np.ndarray) -> float:
    """Largest change of spatial frequency across a channel, cycles/rad."""
    if not len(leg):
        return 0.0
    half = bandwidth / 2
    return float((np.hypot(*leg.T) * bandwidth / (wavelength**2 - half**2)).max())


def _largest(drift: np.ndarray, both: dict[str, np.ndarray]) -> float:
    """Largest change of spatial frequency during an integration, cycles/rad."""
    return float((np.hypot(*drift.T) / both["wavelength"]).max()) if len(drift) else 0.0


def _legendre(half_turn: float, precision: float) -> tuple[np.ndarray, np.ndarray]:
    """Nodes t in (-1, 1) and weights that average exp(i t half_turn) to `precision`."""
    exact = np.sinc(half_turn / np.pi)
    for count in range(1, _MOST_NODES + 1):
        nodes, weights = np.polynomial.legendre.leggauss(count)
        if abs((weights / 2 * np.cos(half_turn * nodes)).sum() - exact) < precision:
            break
    return nodes, weights / 2
