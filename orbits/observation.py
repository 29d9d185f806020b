"""Observation: one target, one epoch, one instrument set-up, as plain arrays.

Sky: x grows to the East, y to the North. A spatial frequency is (u, v) / wavelength with (u, v)
as stored in OIFITS, and V(u, v) = integral I(x, y) exp(-2 pi i (u x + v y)) dx dy.
The bispectrum is V(u1, v1) V(u2, v2) conj(V(u1 + u2, v1 + v2)).
"""

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np

from .problems import Problem
from .rows import Rows

if TYPE_CHECKING:
    from scipy.sparse import csr_array


@dataclass(frozen=True, eq=False, kw_only=True)
class Observable(Rows):
    """One kind of datum of an epoch, flattened to the n data that are kept.

    A datum is one row of an OIFITS table in one spectral channel.
    """

    legs: np.ndarray
    """(n, k, 2): u east and v north of the baselines, m. k is 1 for quantities of a baseline,
    2 for those of a triangle (its sides A->B and B->C; the third, A->C, is their sum)."""
    wavelength: np.ndarray
    """(n,) effective wavelength, m."""
    bandwidth: np.ndarray
    """(n,) effective width of the channel, m; 0 where unknown."""
    value: np.ndarray
    """(n,) dimensionless, or rad for phases."""
    error: np.ndarray
    """(n,) one standard deviation, in the unit of `value`; > 0."""
    mjd: np.ndarray
    """(n,) UTC."""
    integration: np.ndarray
    """(n,) integration time, s; 0 where unknown."""
    stations: np.ndarray
    """(n, k + 1) int: indices into `Observation.stations`; -1 where unknown."""
    row: np.ndarray
    """(n,) int: the table row the datum came from, numbered through the observation."""
    channel: np.ndarray
    """(n,) int: spectral channel within its instrument."""
    instrument: np.ndarray
    """(n,) int: index into `Observation.instruments`."""

    @property
    def frequencies(self) -> np.ndarray:
        """(n, k, 2): spatial frequencies of the legs, cycles per radian."""
        return self.legs / self.wavelength[:, None, None]

    @property
    def baselines(self) -> np.ndarray:
        """(n,): length of the longest projected baseline of each datum, m."""
        sides = self.legs
        if sides.shape[1] == 2:
            sides = np.concatenate([sides, sides.sum(axis=1, keepdims=True)], axis=1)
        return np.hypot(sides[..., 0], sides[..., 1]).max(axis=1)

    @classmethod
    def empty(cls, legs: int) -> "Observable":
        """No data, for observables of `legs` independent baselines (1, or 2 for triangles)."""
        none, whole = np.empty(0), np.empty(0, dtype=np.int64)
        return cls(
            legs=np.empty((0, legs, 2)),
            wavelength=none,
            bandwidth=none,
            value=none,
            error=none,
            mjd=none,
            integration=none,
            stations=np.empty((0, legs + 1), dtype=np.int64),
            row=whole,
            channel=whole,
            instrument=whole,
        )


OBSERVABLES = ("v2", "t3", "t3amp", "visamp", "visphi")
"""The observables that an `Observation` may hold, in the order of its correlation matrix."""


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
    """Visibility phases, rad, differential or absolute as the instrument makes them; empty unless
    asked for."""
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
