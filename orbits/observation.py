"""Observation: one target, one night, and whatever instruments took part, as plain arrays.

Sky: x grows to the East, y to the North. A spatial frequency is (u, v) / wavelength with (u, v)
as stored in OIFITS, and V(u, v) = integral I(x, y) exp(-2 pi i (u x + v y)) dx dy.
The bispectrum is V(u1, v1) V(u2, v2) conj(V(u1 + u2, v1 + v2)).
"""

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Self

import numpy as np

from .problems import Problem
from .rows import Rows

if TYPE_CHECKING:
    from scipy.sparse import csr_array


@dataclass(frozen=True, eq=False, kw_only=True)
class Exposures(Rows):
    """Baselines or triangles during one integration each: the rows of an OIFITS table."""

    legs: np.ndarray
    """(r, k, 2): u east and v north of the baselines, m. k is 1 for quantities of a baseline,
    2 for those of a triangle (its sides A->B and B->C; the third, A->C, is their sum)."""
    mjd: np.ndarray
    """(r,) UTC."""
    integration: np.ndarray
    """(r,) integration time, s; 0 where unknown."""
    stations: np.ndarray
    """(r, k + 1) int: indices into `Observation.stations`; -1 where unknown."""
    instrument: np.ndarray
    """(r,) int: index into `Observation.instruments`."""

    @property
    def baselines(self) -> np.ndarray:
        """(r,): length of the longest projected baseline of each, m."""
        return np.hypot(*np.moveaxis(sides(self.legs), -1, 0)).max(axis=1)


@dataclass(frozen=True, eq=False, kw_only=True)
class Channels(Rows):
    """Spectral channels, those of one instrument after those of another."""

    wavelength: np.ndarray
    """(c,) effective wavelength, m."""
    bandwidth: np.ndarray
    """(c,) effective width of the channel, m; 0 where unknown."""
    instrument: np.ndarray
    """(c,) int: index into `Observation.instruments`."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Observable:
    """One kind of datum of an epoch, flattened to the n data that are kept.

    A datum is one exposure in one spectral channel. What all data of an exposure or of a channel
    share is stored once; the properties of the same names spread it over the data.
    """

    exposures: Exposures
    channels: Channels
    row: np.ndarray
    """(n,) int: the exposure of each datum."""
    channel: np.ndarray
    """(n,) int: the channel of each datum."""
    value: np.ndarray
    """(n,) dimensionless, or rad for phases."""
    error: np.ndarray
    """(n,) one standard deviation, in the unit of `value`; > 0."""

    def __len__(self) -> int:
        return len(self.value)

    @property
    def legs(self) -> np.ndarray:
        """(n, k, 2): as `Exposures.legs`, m."""
        return self.exposures.legs[self.row]

    @property
    def mjd(self) -> np.ndarray:
        """(n,) UTC."""
        return self.exposures.mjd[self.row]

    @property
    def integration(self) -> np.ndarray:
        """(n,) integration time, s; 0 where unknown."""
        return self.exposures.integration[self.row]

    @property
    def stations(self) -> np.ndarray:
        """(n, k + 1) int: as `Exposures.stations`."""
        return self.exposures.stations[self.row]

    @property
    def instrument(self) -> np.ndarray:
        """(n,) int: index into `Observation.instruments`."""
        return self.channels.instrument[self.channel]

    @property
    def wavelength(self) -> np.ndarray:
        """(n,) effective wavelength, m."""
        return self.channels.wavelength[self.channel]

    @property
    def bandwidth(self) -> np.ndarray:
        """(n,) effective width of the channel, m; 0 where unknown."""
        return self.channels.bandwidth[self.channel]

    @property
    def frequencies(self) -> np.ndarray:
        """(n, k, 2): spatial frequencies of the legs, cycles per radian."""
        return self.legs / self.wavelength[:, None, None]

    @property
    def baselines(self) -> np.ndarray:
        """(n,): length of the longest projected baseline of each datum, m."""
        return self.exposures.baselines[self.row]

    def select(self, keep: np.ndarray) -> Self:
        """The data that `keep`, a boolean or index array, names."""
        parts = {name: getattr(self, name)[keep] for name in ("row", "channel", "value", "error")}
        return replace(self, **parts)

    @classmethod
    def filled(cls, exposures: Exposures, channels: Channels, *, value=0.0, error=1.0) -> Self:
        """Every exposure in every channel, row by row.

        Parameters
        ----------
        value, error : float or (r * c,) ndarray
        """
        rows, width = len(exposures), len(channels)
        return cls(
            exposures=exposures,
            channels=channels,
            row=np.repeat(np.arange(rows, dtype=np.int32), width),
            channel=np.tile(np.arange(width, dtype=np.int32), rows),
            value=np.full(rows * width, value, dtype=float),
            error=np.full(rows * width, error, dtype=float),
        )

    @classmethod
    def concatenate(cls, parts: Sequence[Self]) -> Self:
        """All data of `parts`, in their order; channels that all of them share stay the same."""
        if len(parts) == 1:
            return parts[0]
        together = all(part.channels is parts[0].channels for part in parts)
        spectra = parts[:1] if together else parts
        rows = _starts([part.exposures for part in parts])
        first = [0] * len(parts) if together else _starts([part.channels for part in parts])
        return cls(
            exposures=Exposures.concatenate([part.exposures for part in parts]),
            channels=Channels.concatenate([part.channels for part in spectra]),
            row=np.concatenate([p.row + n for p, n in zip(parts, rows, strict=True)]),
            channel=np.concatenate([p.channel + n for p, n in zip(parts, first, strict=True)]),
            value=np.concatenate([part.value for part in parts]),
            error=np.concatenate([part.error for part in parts]),
        )

    @classmethod
    def empty(cls, legs: int) -> Self:
        """No data, for observables of `legs` independent baselines (1, or 2 for triangles)."""
        none, whole = np.empty(0), np.empty(0, dtype=np.int32)
        exposures = Exposures(
            legs=np.empty((0, legs, 2)),
            mjd=none,
            integration=none,
            stations=np.empty((0, legs + 1), dtype=np.int32),
            instrument=whole,
        )
        return cls.filled(exposures, Channels(wavelength=none, bandwidth=none, instrument=whole))


def _starts(tables: Sequence[Rows]) -> list[int]:
    """Where each of the tables begins when they stand one after the other."""
    return [0, *np.cumsum([len(table) for table in tables[:-1]]).tolist()]


def sides(legs: np.ndarray) -> np.ndarray:
    """(..., 1 or 3, 2): all the baselines of legs (..., 1 or 2, 2); the third closes a triangle."""
    if legs.shape[-2] == 1:
        return legs
    return np.concatenate([legs, legs.sum(axis=-2, keepdims=True)], axis=-2)


OBSERVABLES = ("v2", "t3", "t3amp", "visamp", "visphi")
"""The observables that an `Observation` may hold, in the order of its correlation matrix."""
DEFAULT = ("v2", "t3")
"""Those whose meaning does not depend on the instrument and its calibration."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Observation:
    """What was measured of one target in one epoch."""

    target: str
    instruments: tuple[str, ...]
    """INSNAME of each spectral set-up that took part."""
    stations: tuple[str, ...] = ()
    """Station names, each qualified by its array where several arrays took part."""
    v2: Observable = field(default_factory=lambda: Observable.empty(1))
    """Squared visibilities."""
    t3: Observable = field(default_factory=lambda: Observable.empty(2))
    """Closure phases, rad."""
    t3amp: Observable = field(default_factory=lambda: Observable.empty(2))
    """Triple amplitudes; empty unless asked for."""
    visamp: Observable = field(default_factory=lambda: Observable.empty(1))
    """Visibility amplitudes; empty unless asked for."""
    visphi: Observable = field(default_factory=lambda: Observable.empty(1))
    """Visibility phases, rad; empty unless asked for. Their mean in each exposure, and their slope
    over wavenumber, mean nothing; slopes of more than a fraction of a turn are taken out."""
    phase_order: int = 0
    """Order of the polynomials in wavelength that were taken out of `visphi` besides."""
    correlation: "csr_array | None" = None
    """Correlation matrix of all data, stacked in the order of `OBSERVABLES` (V2, closure phases,
    then whatever else was asked for); None if the data are independent."""
    files: tuple[str, ...] = ()
    """The files that its data come from."""
    problems: tuple[Problem, ...] = ()
    """What is wrong with any file that was read together with them, and what was done about it."""

    @property
    def mjd(self) -> float:
        """Mean time of the data, MJD UTC."""
        return float(np.concatenate([getattr(self, name).mjd for name in OBSERVABLES]).mean())

    @property
    def instrument(self) -> str:
        """The names of the instruments, joined for people and tables."""
        return "+".join(self.instruments)

    def select(self, **keep: np.ndarray) -> "Observation":
        """The observation with only some of its data.

        Parameters
        ----------
        **keep : ndarray of bool
            For each observable named (`v2`, `t3` ...), which data stay; all of the others do.
        """
        sizes = {name: len(getattr(self, name)) for name in OBSERVABLES}
        masks = {name: np.ones(size, dtype=bool) for name, size in sizes.items()} | keep
        changes: dict[str, object] = {
            name: getattr(self, name).select(mask) for name, mask in keep.items()
        }
        if self.correlation is not None:
            stay = np.flatnonzero(np.concatenate([masks[name] for name in OBSERVABLES]))
            changes["correlation"] = self.correlation[stay][:, stay]
        return replace(self, **changes)
