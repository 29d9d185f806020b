"""Where an observation samples the visibility: every baseline and channel once, smearing included.

The sides of a triangle are baselines that the squared visibilities have already, so the complex
visibility is worked out once per distinct baseline, channel and instrument and then looked up.
A channel is a top hat in wavelength, integrated by Gauss-Legendre nodes; the complex visibility is
averaged over them (light of one channel interferes as one fringe). An integration is a top hat in
time: the squared visibility or bispectrum is averaged over it (frames are much shorter).
"""

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from .constants import DAY, MAS
from .observation import OBSERVABLES, Channels, Exposures, Observation, sides

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
    visphi: np.ndarray
    """(n_visphi,) the sample of each visibility phase."""
    visphi_turned: np.ndarray
    """(n_visphi,) True where it is the phase of the conjugate of its sample."""

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
        tables = [getattr(observation, name) for name in OBSERVABLES]
        scale = np.pi * radius * MAS
        channels, channel_of = _distinct_channels([table.channels for table in tables])
        shortest = channels.wavelength.min(initial=np.inf)
        still = _WORTH_SMEARING * shortest / (2 * scale) if smearing and scale else np.inf
        lines = _Lines.of([table.exposures for table in tables], still=still)
        # One sample for each line in each channel that any datum needs.
        used = np.zeros((len(lines.leg), len(channels)), dtype=bool)
        places = [
            (line[table.row], column[table.channel][:, None])
            for table, line, column in zip(tables, lines.number, channel_of, strict=True)
        ]
        for place in places:
            used[place] = True
        number = np.cumsum(used).reshape(used.shape) - 1
        v2, t3, t3amp, visamp, visphi = (number[place] for place in places)
        turned = [against[table.row] for table, against in zip(tables, lines.turned, strict=True)]
        row, column = np.nonzero(used)
        leg, drift = lines.leg[row], lines.drift[row]
        wave, band = channels.wavelength[column], channels.bandwidth[column] * smearing
        band_nodes, band_weights = _legendre(scale * _turns(leg, wave, band), precision)
        time_nodes, time_weights = _legendre(scale * _largest(drift, wave), precision)
        wavelength = wave[:, None] + band[:, None] * band_nodes / 2
        moving = leg[:, None, :] + drift[:, None, :] * time_nodes[:, None] / 2
        frequency = moving[:, :, None, :] / wavelength[:, None, :, None]
        # The third side of a triangle closes it: it enters conjugated.
        third = np.array([False, False, True])
        return cls(
            u=frequency[..., 0],
            v=frequency[..., 1],
            wavelength=wavelength[:, None, :],
            time_weights=time_weights,
            band_weights=band_weights,
            instrument=channels.instrument[column].astype(int),
            v2=v2[:, 0],
            t3=t3,
            turned=turned[1] ^ third,
            t3amp=t3amp,
            t3amp_turned=turned[2] ^ third,
            visamp=visamp[:, 0],
            visphi=visphi[:, 0],
            visphi_turned=turned[4][:, 0],
        )


@dataclass(frozen=True, eq=False)
class _Lines:
    """The distinct baselines of several kinds of exposures, each in one sense only."""

    leg: np.ndarray
    """(b, 2) m; u > 0, or u = 0 and v >= 0."""
    drift: np.ndarray
    """(b, 2) how far it moves during an integration, m."""
    number: list[np.ndarray]
    """For each kind, (r, 1 or 3) which baseline each side is."""
    turned: list[np.ndarray]
    """For each kind, (r, 1 or 3) whether the side runs against it."""

    @classmethod
    def of(cls, kinds: Sequence[Exposures], *, still: float) -> "_Lines":
        """The baselines; if none drifts by more than `still`, m, none is said to."""
        legs = [sides(kind.legs) for kind in kinds]
        drifts = [sides(_rates(kind)) * kind.integration[:, None, None] for kind in kinds]
        leg, drift = (np.concatenate([p.reshape(-1, 2) for p in part]) for part in (legs, drifts))
        if np.hypot(*drift.T).max(initial=0.0) < still:
            drift = np.zeros_like(drift)
        turned = (leg[:, 0] < 0) | ((leg[:, 0] == 0) & (leg[:, 1] < 0))
        sign = np.where(turned, -1.0, 1.0)[:, None]
        first, which = _distinct(np.round(np.hstack([leg, drift]) * sign / _SAME_BASELINE))
        ends = np.cumsum([part.shape[0] * part.shape[1] for part in legs])[:-1]
        number, against = (
            [
                flat.reshape(of.shape[:2])
                for flat, of in zip(np.split(all_, ends), legs, strict=True)
            ]
            for all_ in (which, turned)
        )
        return cls((leg * sign)[first], (drift * sign)[first], number, against)


def _distinct_channels(kinds: Sequence[Channels]) -> tuple[Channels, list[np.ndarray]]:
    """The distinct channels of several observables, and for each of these which ones it has."""
    every = Channels.concatenate(kinds)
    key = np.column_stack([every.wavelength, every.bandwidth, every.instrument])
    first, which = _distinct(key)
    return every.select(first), np.split(which, np.cumsum([len(kind) for kind in kinds])[:-1])


def _rates(exposures: Exposures) -> np.ndarray:
    """(r, 1 or 2, 2) how fast the legs turn with the Earth, from rows of the same stations; else 0.

    OIFITS stores no rates, and station coordinates in circulation are unreliable; the rows tell.
    """
    rates = np.zeros_like(exposures.legs)
    known = (exposures.stations >= 0).all(axis=1) & exposures.integration.any()
    label = np.column_stack([exposures.stations, exposures.instrument])[known]
    _, group = np.unique(label, axis=0, return_inverse=True)
    for g in range(group.max(initial=-1) + 1):
        rows = np.flatnonzero(known)[group.ravel() == g]
        times, first, which = np.unique(exposures.mjd[rows], return_index=True, return_inverse=True)
        rates[rows] = _slopes(times * DAY, exposures.legs[rows[first]])[which]
    return rates


def _slopes(seconds: np.ndarray, legs: np.ndarray) -> np.ndarray:
    """How fast `legs` (t, ...) change at the times `seconds` (t,), which ascend."""
    slopes = np.zeros_like(legs)
    # Beyond two hours apart a straight line no longer follows the turning baseline.
    for run in np.split(np.arange(len(seconds)), np.flatnonzero(np.diff(seconds) > 7200) + 1):
        if run.size > 1:
            slopes[run] = np.gradient(legs[run], seconds[run], axis=0)
    return slopes


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
    half = bandwidth / 2
    return float((np.hypot(*leg.T) * bandwidth / (wavelength**2 - half**2)).max(initial=0.0))


def _largest(drift: np.ndarray, wavelength: np.ndarray) -> float:
    """Largest change of spatial frequency during an integration, cycles/rad."""
    return float((np.hypot(*drift.T) / wavelength).max(initial=0.0))


def _legendre(half_turn: float, precision: float) -> tuple[np.ndarray, np.ndarray]:
    """Nodes t in (-1, 1) and weights that average exp(i t half_turn) to `precision`."""
    exact = np.sinc(half_turn / np.pi)
    for count in range(1, _MOST_NODES + 1):
        nodes, weights = np.polynomial.legendre.leggauss(count)
        if abs((weights / 2 * np.cos(half_turn * nodes)).sum() - exact) < precision:
            break
    return nodes, weights / 2
