"""Simulated nights: what an array would measure of a scene, with noise."""

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from ..observation import Observable, Observation
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
    common = {"spectrum": spectrum, "mjd": np.asarray(mjd, float), "integration": integration}
    v2 = _blank(sides[:, :, None], pairs, first_row=0, **common)
    legs = np.stack([first, second], axis=2)
    return Observation(
        target=target,
        instruments=(spectrum.name,),
        stations=array.stations,
        v2=v2,
        t3=_blank(legs, triangles, first_row=sides[..., 0].size, **common),
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


def _blank(legs, stations, *, spectrum, mjd, integration, first_row) -> Observable:
    """Spread rows (exposures x baselines or triangles) over the channels of `spectrum`."""
    exposures, combinations = legs.shape[:2]
    rows, channels = exposures * combinations, len(spectrum.wavelength)
    n = rows * channels
    return Observable(
        legs=np.repeat(legs.reshape(rows, *legs.shape[2:]), channels, axis=0),
        wavelength=np.tile(spectrum.wavelength, rows),
        bandwidth=np.tile(spectrum.bandwidth, rows),
        value=np.zeros(n),
        error=np.ones(n),
        mjd=np.repeat(mjd, combinations * channels),
        integration=np.full(n, float(integration)),
        stations=np.repeat(np.tile(stations, (exposures, 1)), channels, axis=0),
        row=np.repeat(first_row + np.arange(rows), channels),
        channel=np.tile(np.arange(channels), rows),
        instrument=np.zeros(n, dtype=np.int64),
    )


def _noisy(blank, value, alone, shared, rng) -> Observable:
    rows, which = np.unique(blank.row, return_inverse=True)
    noise = alone * rng.standard_normal(len(value)) + shared * rng.standard_normal(len(rows))[which]
    return replace(blank, value=value + noise, error=np.hypot(alone, shared))


def _row_correlation(filled: Observation, v2_shared, phase_shared):
    """Correlation of all data, V2 before closure phases: shared errors link channels of a row."""
    from scipy import sparse

    row = np.concatenate([filled.v2.row, filled.t3.row])
    part = np.concatenate([v2_shared / filled.v2.error, phase_shared / filled.t3.error])
    rows, which = np.unique(row, return_inverse=True)
    link = sparse.csr_array((part, (np.arange(len(row)), which)), shape=(len(row), len(rows)))
    return sparse.csr_array(link @ link.T + sparse.diags_array(1 - part**2))
