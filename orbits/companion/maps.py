"""Maps over a field of positions: the best contrast, its error, and the chi-square it gains.

For a faint companion the data are linear in its contrast f: data = null + f s(x, y). With C the
covariance and the nuisance parameters of the null (the primary's diameter) projected out,

    f = N / D,  error = D^(-1/2),  gain = N^2 / D,   N = s^T P r,  D = s^T P s,
    P = C^-1 - C^-1 G (G^T C^-1 G)^-1 G^T C^-1,  G = derivatives by the nuisance parameters,

and N and D over the whole field are one non-uniform Fourier transform each. D does not depend on
the data. For bright companions the chi-square of a ladder of fixed contrasts is mapped likewise.
"""

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from ..binary import Scene, model
from ..constants import MAS
from ..observation import Observation
from ..sampling import Sampling
from .covariance import Covariance
from .fit import Fit, Problem, fit
from .grid import Grid
from .response import Response, bright_residual, faint_response

CONTRASTS = (0.003, 0.006, 0.0125, 0.025, 0.05, 0.1, 0.18, 0.3, 0.45, 0.65, 0.85, 1.0)
"""The ladder for bright companions, and for faint ones beside a primary that is resolved out: a
contrast off by half a rung keeps nine tenths of the gain."""
_BRIGHT = 0.1
_DIAMETERS = (0.7, 0.0)
"""Of the diameter that fits a single star: from `_BRIGHT` on, a companion takes its part of the
blame for a low V2."""
_MAP_PRECISION = 5e-3
"""Of smeared waves in maps; the exact model has the last word."""


@dataclass(frozen=True, eq=False)
class Maps:
    """What each position of a grid offers, indexed [y, x]."""

    grid: Grid
    contrast: np.ndarray
    """(side, side) best contrast, 0 to 1."""
    contrast_error: np.ndarray
    """(side, side) its standard error for a faint companion; inf where nothing can be said."""
    gain: np.ndarray
    """(side, side) chi-square gained by a companion there, against none."""
    diameter: np.ndarray
    """(side, side) the primary's diameter that goes with it, mas."""


class Field:
    """All that the search of a field needs and that does not depend on the noise of the data.

    Parameters
    ----------
    observation, covariance : Observation, Covariance
    null : Fit
        The scene without the companion that is looked for; its free parameters are projected out.
    grid : Grid
    companion : (str, float)
        Shape and diameter (mas) of the companion.
    """

    def __init__(
        self,
        observation: Observation,
        covariance: Covariance,
        null: Fit,
        grid: Grid,
        companion: tuple[str, float] = ("point", 0.0),
        *,
        smearing: bool = True,
    ):
        self.grid, self.null, self.covariance, self.companion = grid, null, covariance, companion
        self.sampling = Sampling.of(
            observation, radius=grid.radius, smearing=smearing, precision=_MAP_PRECISION
        )
        data, jacobian = model(null.scene, null.values, self.sampling, null.free)
        self.problem = Problem.of(observation, self.sampling, covariance)
        self.null_residual = self.problem.residual(data)
        self.residual = covariance.whiten(self.null_residual)
        self.nuisance = _orthonormal(covariance.whiten(jacobian))
        visibility, _ = null.scene.visibility(null.values, self.sampling)
        self.visibility, self.flux = visibility, scene_flux(null)
        self.response: Response = faint_response(self.sampling, visibility, self.flux, companion)

    @cached_property
    def beam(self) -> np.ndarray | float:
        """(side, side) what the field of view lets through at each position."""
        width = self.null.scene.fibre_fwhm
        if width is None:
            return 1.0
        square = self.grid.axis**2
        return np.exp(-4 * np.log(2) * (square[:, None] + square) / width**2)

    @cached_property
    def sensitivity(self) -> np.ndarray:
        """(side, side): D, the inverse variance of the contrast of a faint companion."""
        removed = np.concatenate([self.covariance.removed, self._nuisance_rows])
        d = self.response.square(self.grid, self._precision, removed)
        # What is left of complete cancellation (a companion upon the primary) is rounding.
        return np.where(d > 1e-6 * d.max(), d, 0.0) * self.beam**2

    @property
    def chi2(self) -> float:
        """Of the data about the null, at the best values of its parameters to first order."""
        white = self.project(self.residual)
        return float(white @ white)

    @cached_property
    def _precision(self):
        return self.covariance.whitener.T @ self.covariance.whitener

    @cached_property
    def _nuisance_rows(self) -> np.ndarray:
        return self.covariance.back(self.nuisance).T

    def project(self, white: np.ndarray) -> np.ndarray:
        """Whitened data (rank, ...) without what the nuisance parameters can explain."""
        return white - self.nuisance @ (self.nuisance.T @ white)

    def noise(self, rng: np.random.Generator, count: int) -> np.ndarray:
        """(rank, count) projected whitened residuals of data without a companion."""
        return self.project(self.covariance.white_noise(rng, count))

    def waves(self, white: np.ndarray) -> np.ndarray:
        """(k, m) coefficients of the maps of N for projected whitened data (rank, k)."""
        return self.response.coefficients(self.covariance.back(white).T)

    def faint(self) -> Maps:
        """The maps of a faint companion."""
        waves = self.waves(self.project(self.residual)[:, None])
        n = self.grid.sum(self.response.u, self.response.v, waves[0]) * self.beam
        contrast, gain = estimate(n, self.sensitivity)
        with np.errstate(divide="ignore"):
            error = 1 / np.sqrt(self.sensitivity)
        diameter = np.full_like(gain, self.null.values[0])
        return Maps(self.grid, contrast, error, gain, diameter)

    def all_contrasts(self, faint: Maps) -> Maps:
        """The maps `faint`, improved wherever a bright companion fits better."""
        gain, contrast, diameter = faint.gain.copy(), faint.contrast.copy(), faint.diameter.copy()
        beam = np.broadcast_to(self.beam, gain.shape)
        reference = self.residual @ self.residual
        fitted = 0 in self.null.free and self.null.values[0] > 0
        for flux in CONTRASTS:
            for part in (1.0, *_DIAMETERS) if fitted and flux >= _BRIGHT else (1.0,):
                trial = reference - self._chi2(flux, part * self.null.values[0])
                better = (trial > gain) & (flux <= beam)
                gain[better] = trial[better]
                contrast[better] = flux / beam[better]
                diameter[better] = part * self.null.values[0]
        return replace(faint, gain=gain, contrast=contrast, diameter=diameter)

    def _chi2(self, contrast: float, diameter: float) -> np.ndarray:
        """(side, side) chi-square of a binary of fixed contrast, its nuisance linearised."""
        null = self.null
        values = null.values.copy()
        values[0] = diameter
        visibility, _ = null.scene.visibility(values, self.sampling)
        _, jacobian = model(null.scene, values, self.sampling, null.free)
        # The companion's light dilutes what a change of the primary does to V2.
        jacobian[: len(self.sampling.v2)] /= (1 + contrast / self.flux) ** 2
        residual = bright_residual(
            self.sampling, visibility, self.flux, self.companion, contrast,
            self.problem.data, self.null_residual,
        )  # fmt: skip
        nuisance = _orthonormal(self.covariance.whiten(jacobian))
        removed = np.concatenate([self.covariance.removed, self.covariance.back(nuisance).T])
        return residual.square(self.grid, self._precision, removed)


def estimate(n: np.ndarray, d: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Contrast within [0, 1] that gains most, and its gain, from N and D of any shape."""
    contrast = np.divide(n, d, out=np.zeros_like(n), where=d > 0)
    np.clip(contrast, 0.0, 1.0, out=contrast)
    return contrast, contrast * (2 * n - contrast * d)


def single_star(problem: Problem, scene: Scene, start: np.ndarray) -> Fit:
    """Fit the diameter of a star without companion, its other parameters as in `start`.

    A visibility with nulls has many minima: a scan of diameters finds the lowest.
    """
    longest = problem.sampling.modulus.max()
    shortest = problem.sampling.modulus.min()
    finest = 1 / (longest * MAS)
    # From unresolved to a disc whose first null the shortest baseline sees.
    largest = min(1.3 / (shortest * MAS), 12 * finest)
    trials = np.arange(0.1, largest / finest, 0.25) * finest
    best = min(
        (fit(problem, scene, np.concatenate([[trial], start[1:]]), ()) for trial in trials),
        key=lambda one: one.chi2,
    )
    found = fit(problem, scene, best.values, (0,))
    found.values[0] = abs(found.values[0])
    return found


def scene_flux(of: Fit) -> float:
    """Total flux of a fitted scene in units of its primary's."""
    names = of.scene.names
    light = [i for i, name in enumerate(names) if name.split("_")[0] in ("contrast", "background")]
    return 1.0 + float(of.values[light].sum())


def _orthonormal(columns: np.ndarray) -> np.ndarray:
    """Orthonormal basis of the span of `columns` (n, p), without those that are zero."""
    size = np.linalg.norm(columns, axis=0)
    return np.linalg.qr(columns[:, size > 0] / size[size > 0])[0]
