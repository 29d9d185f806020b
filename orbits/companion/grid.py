"""A square field of positions, and sums of plane waves over all of them at once.

f(x, y) = Re sum_j c_j exp(-2 pi i (u_j x + v_j y)) at every position of the grid is a non-uniform
Fourier transform of type 1: its cost is that of one FFT of the grid plus a few operations for
each of the waves (Barnett, Magland & af Klinteberg 2019, SIAM J. Sci. Comput. 41, C479).
"""

from dataclasses import dataclass

import numpy as np

from ..constants import MAS

_SETTINGS = {"eps": 1e-7, "isign": -1, "upsampfac": 1.25, "nthreads": 1}
"""Precision far below the 1e-5 that is asked of a map; a finer inner grid would take three times as
long for it, and one thread gives the same digits on every machine."""
_SINGLE = 1e-5
"""A precision from which single-precision numbers, half the work, are enough."""
_CHUNK = 1_000_000
"""Waves summed at a time, which bounds the memory."""


@dataclass(frozen=True)
class Grid:
    """Positions x (East) and y (North) = -half..half times `step`; maps are indexed [y, x]."""

    half: int
    step: float
    """mas"""

    @property
    def side(self) -> int:
        """Number of positions along one side."""
        return 2 * self.half + 1

    @property
    def axis(self) -> np.ndarray:
        """(side,) coordinates along either axis, mas."""
        return self.step * np.arange(-self.half, self.half + 1)

    @property
    def radius(self) -> float:
        """Distance of the corners, mas."""
        return float(np.sqrt(2) * self.half * self.step)

    def transform(
        self, u: np.ndarray, v: np.ndarray, batch: int = 1, precision: float = _SETTINGS["eps"]
    ) -> "Transform":
        """A plan for sums over m waves of spatial frequency (u, v), cycles/rad."""
        return Transform(self, u, v, batch, precision)

    def sum(self, u: np.ndarray, v: np.ndarray, coefficients: np.ndarray) -> np.ndarray:
        """(side, side): Re sum_j c_j exp(-2 pi i (u_j x + v_j y))."""
        import finufft

        total = np.zeros((self.side, self.side))
        for start in range(0, len(u), _CHUNK):
            part = slice(start, start + _CHUNK)
            total += finufft.nufft2d1(
                *self._angles(u[part], v[part]), coefficients[part], total.shape, **_SETTINGS
            ).real
        return total

    def _angles(self, u: np.ndarray, v: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Turn of the phase per step to the North and to the East, rad in [-pi, pi].

        Positions are whole steps, so that whole turns per step do not matter.
        """
        turns = 2 * np.pi * MAS * self.step * np.stack([v, u])
        north, east = turns - 2 * np.pi * np.round(turns / (2 * np.pi))
        return north, east


class Transform:
    """Sums of m plane waves over a grid, for many sets of coefficients at the same frequencies.

    A complex transform carries two real maps: one in its real part, one in its imaginary part.
    """

    def __init__(self, grid: Grid, u: np.ndarray, v: np.ndarray, batch: int, precision: float):
        import finufft

        self.grid = grid
        self.batch = batch
        self.dtype = np.complex128 if precision < _SINGLE else np.complex64
        settings = {**_SETTINGS, "eps": precision, "dtype": self.dtype}
        self.plan = finufft.Plan(1, (grid.side, grid.side), n_trans=batch, **settings)
        angles = grid._angles(np.concatenate([u, -u]), np.concatenate([v, -v]))
        self.plan.setpts(*(angle.astype(self.dtype(0).real.dtype) for angle in angles))

    def __call__(self, coefficients: np.ndarray) -> np.ndarray:
        """(k, side, side) real sums for `coefficients` (k, m); k is at most twice `batch`."""
        k, m = coefficients.shape
        packed = np.zeros((self.batch, 2 * m), dtype=self.dtype)
        first, second = coefficients[0::2], coefficients[1::2]
        packed[: len(first), :m] = first / 2
        packed[: len(first), m:] = np.conj(first) / 2
        packed[: len(second), :m] += 0.5j * second
        packed[: len(second), m:] += 0.5j * np.conj(second)
        maps = self.plan.execute(packed if self.batch > 1 else packed[0])
        maps = maps.reshape(self.batch, self.grid.side, self.grid.side)
        out = np.empty((k, self.grid.side, self.grid.side))
        out[0::2] = maps.real[: len(first)]
        out[1::2] = maps.imag[: len(second)]
        return out
