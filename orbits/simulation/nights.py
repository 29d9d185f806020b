"""Simulated nights: what an array would measure of a scene, with noise."""

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from ..observation import Channels, Exposures, Observable, Observation
from .array import Array


@dataclass(frozen=True, eq=False, kw_only=True)
class Spectrum:
    """The spectral channels of an instrument."""

    name: str
    wavelength: np.ndarray
    """(n_channels,) m."""
    bandwidth: np.ndarray
    """(n_channels,) m."""

    @classmethod
    def even(cls, name: str, shortest: float, longest: float, channels: int) -> "Spectrum":
        """`channels` adjoining channels of equal width that fill `shortest` to `longest`, m."""
        edges = np.linspace(shortest, longest, channels + 1)
        return cls(name=name, wavelength=(edges[1:] + edges[:-1]) / 2, bandwidth=np.diff(edges))


@dataclass(frozen=True, kw_only=True)
class Noise:
    """Errors of independent data, Gaussian, and errors that a whole row shares.

    The shared ones stand for a calibration that is wrong by the same amount in every channel.
    """

    v2_relative: float = 0.0
    """Part of V2."""
    v2_floor: float = 0.0
    """Added to it in quadrature."""
    closure_phase: float = 0.0
    """rad."""
    v2_shared: float = 0.0
    """Part of V2, the same for all channels of a row."""
    closure_phase_shared: float = 0.0
    """rad, the same for all channels of a row."""


def blank_night(
    array: Array, spectrum: Spectrum, *, target: str, ra: float, dec: float,
    mjd: np.ndarray, integration: float = 0.0,
) -> Observation:  # fmt: skip
    """The data an array would take at times `mjd` (UTC), with value 0 and error 1.

    Every baseline gives a squared visibility and every triangle a closure phase, in each channel
    of each exposure. `ra` and `dec` in deg, `integration` in s.
    """
    at = array.projected(ra, dec, mjd)
    pairs, triangles = array.pairs, array.triangles
    sides = at[:, pairs[:, 1]] - at[:, pairs[:, 0]]
    first = at[:, triangles[:, 1]] - at[:, triangles[:, 0]]
    second = at[:, triangles[:, 2]] - at[:, triangles[:, 1]]
    channels = Channels(
        wavelength=spectrum.wavelength,
        bandwidth=spectrum.bandwidth,
        instrument=np.zeros(len(spectrum.wavelength), dtype=int),
    )
    when = np.asarray(mjd, float)
    legs = np.stack([first, second], axis=2)
    v2 = _exposures(sides[:, :, None], pairs, when, integration)
    t3 = _exposures(legs, triangles, when, integration)
    return Observation(
        target=target,
        instruments=(spectrum.name,),
        stations=array.stations,
        v2=Observable.filled(v2, channels),
        t3=Observable.filled(t3, channels),
    )


def observe(
    blank: Observation,
    model: Callable[[Observation], tuple[np.ndarray, np.ndarray]],
    noise: Noise,
    rng: np.random.Generator,
) -> Observation:
    """Fill `blank` with what `model` says (V2 and closure phases, rad) and with noise.

    The listed errors are those of the independent noise and the shared one together; where there
    is a shared one, `Observation.correlation` tells how the channels of a row hang together.
    """
    v2, phase = model(blank)
    v2_alone = np.hypot(noise.v2_relative * v2, noise.v2_floor)
    v2_shared = noise.v2_shared * v2
    phase_alone = np.full_like(phase, noise.closure_phase)
    phase_shared = np.full_like(phase, noise.closure_phase_shared)
    filled = replace(
        blank,
        v2=_noisy(blank.v2, v2, v2_alone, v2_shared, rng),
        t3=_noisy(blank.t3, phase, phase_alone, phase_shared, rng),
    )
    if not (noise.v2_shared or noise.closure_phase_shared):
        return filled
    return replace(filled, correlation=_row_correlation(filled, v2_shared, phase_shared))


def _exposures(legs, stations, mjd, integration) -> Exposures:
    """Moments times baselines or triangles, in this order."""
    moments, combinations = legs.shape[:2]
    rows = moments * combinations
    return Exposures(
        legs=legs.reshape(rows, *legs.shape[2:]),
        mjd=np.repeat(mjd, combinations),
        integration=np.full(rows, float(integration)),
        stations=np.tile(stations, (moments, 1)),
        instrument=np.zeros(rows, dtype=int),
    )


def _noisy(blank, value, alone, shared, rng) -> Observable:
    rows = len(blank.exposures)
    noise = alone * rng.standard_normal(len(value)) + shared * rng.standard_normal(rows)[blank.row]
    return replace(blank, value=value + noise, error=np.hypot(alone, shared))


def _row_correlation(filled: Observation, v2_shared, phase_shared):
    """Correlation of all data, V2 before closure phases: shared errors link channels of a row."""
    from scipy import sparse

    row = np.concatenate([filled.v2.row, filled.t3.row + len(filled.v2.exposures)])
    part = np.concatenate([v2_shared / filled.v2.error, phase_shared / filled.t3.error])
    link = sparse.csr_array((part, (np.arange(len(row)), row)))
    return sparse.csr_array(link @ link.T + sparse.diags_array(1 - part**2))
