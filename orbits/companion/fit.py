"""Least squares with the exact model: from a start value to the nearest solution."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from ..binary import Scene, model
from ..observation import OBSERVABLES, Observation
from ..sampling import Sampling
from .covariance import Covariance

_STEPS = 60
_SETTLED = 1e-7
"""Of chi-square, or absolute where chi-square is below 1: a change that no error bar notices."""

_LEAP = 1e5
"""A step longer than this (mas, or whatever the unit) follows a direction without information."""

_SPOT = 1e-3
"""mas; a diameter whose square is fitted is kept from 0 by this, where slopes are 0 over 0."""


@dataclass(frozen=True, eq=False)
class Problem:
    """Data with their covariance and samples: all that a fit of any scene needs."""

    data: np.ndarray
    """(n,) stacked in the order of `OBSERVABLES`; phases in rad."""
    closure_phases: slice
    """Which of them are closure phases."""
    exposure: np.ndarray
    """(n_visphi,) the exposure of each of the last data, phases of baselines."""
    sampling: Sampling
    covariance: Covariance
    weights: np.ndarray | None = None
    """(rank,) how often each whitened datum counts; once where None."""

    @classmethod
    def of(cls, observation: Observation, sampling: Sampling, covariance: Covariance) -> "Problem":
        """The data of `observation`."""
        data = np.concatenate([getattr(observation, name).value for name in OBSERVABLES])
        first = len(observation.v2)
        closure_phases = slice(first, first + len(observation.t3))
        return cls(data, closure_phases, observation.visphi.row, sampling, covariance)

    def residual(self, predicted: np.ndarray) -> np.ndarray:
        """(n,) data minus `predicted`; phases wrapped, those of baselines about their mean.

        The mean phase of an exposure is not measured (`Covariance`), so that taking one out costs
        nothing, and keeps the others clear of half a turn.
        """
        difference = self.data - predicted
        phase = difference[self.closure_phases]
        difference[self.closure_phases] = (phase + np.pi) % (2 * np.pi) - np.pi
        if self.exposure.size:
            turn = np.exp(1j * difference[-self.exposure.size :])
            mean = np.bincount(self.exposure, turn.real) + 1j * np.bincount(
                self.exposure, turn.imag
            )
            difference[-self.exposure.size :] = np.angle(turn * np.conj(mean[self.exposure]))
        return difference


@dataclass(frozen=True, eq=False)
class Fit:
    """A scene fitted to data."""

    scene: Scene
    values: np.ndarray
    """(p,) all parameters of the scene."""
    free: tuple[int, ...]
    """Indices of those fitted."""
    chi2: float
    dof: int
    covariance: np.ndarray
    """(len(free), len(free)) of the free parameters, from the errors as stated."""
    settled: bool
    priors: Mapping[int, tuple[float, float]] = field(default_factory=dict)
    """Index of a parameter: mean and standard deviation of its Gaussian prior."""
    squares: Mapping[int, float] = field(default_factory=dict)
    """Index of a diameter whose square was fitted too: the standard error of the square (mas2). Its
    uncertainty is a part of `covariance`; a prior on it is one on the square."""
    joint: np.ndarray = field(default_factory=lambda: np.empty((0, 0)))
    """(p, p) covariance of the free parameters and, after them, of the squares."""

    def value(self, name: str) -> float:
        """The value of a parameter by its name."""
        return float(self.values[self.scene.names.index(name)])

    def error(self, name: str) -> float:
        """Its standard error from the errors as stated; 0 where it is fixed."""
        index = self.scene.names.index(name)
        if index not in self.free:
            return 0.0
        place = self.free.index(index)
        return float(np.sqrt(self.covariance[place, place]))

    @property
    def reduced(self) -> float:
        """chi-square per degree of freedom (1 where there is none)."""
        return self.chi2 / self.dof if self.dof > 0 else 1.0


def fit(
    problem: Problem,
    scene: Scene,
    start: np.ndarray,
    free: tuple[int, ...],
    priors: Mapping[int, tuple[float, float]] | None = None,
    *,
    squares: Sequence[int] = (),
    steps: int = _STEPS,
) -> Fit:
    """Minimise chi-square over the `free` parameters by damped Gauss-Newton steps.

    The damping is that of Marquardt (1963, J. SIAM 11, 431): along the diagonal of the normal
    matrix. Gaussian `priors` count as further data. Of the diameters with indices `squares` the
    squares are fitted, signed as the diameters: small ones act on the data through them.
    """
    priors = {} if priors is None else dict(priors)
    values = np.array(start, dtype=float)
    index, squares = [*free, *squares], list(squares)
    values[squares] = _roots(_signed_squares(values[squares]))
    white, jacobian = _linear(problem, scene, values, index, priors, squares)
    chi2 = float(white @ white)
    damping, settled = 1e-3, not index
    for _ in range(steps if index else 0):
        normal, gradient = jacobian.T @ jacobian, jacobian.T @ white
        diagonal = np.diag(normal).copy()
        diagonal[diagonal == 0] = 1.0
        step = np.linalg.solve(normal + damping * np.diag(diagonal), gradient)
        if not np.abs(step).max() < _LEAP:
            damping *= 10
            continue
        trial = values.copy()
        trial[list(free)] += step[: len(free)]
        trial[squares] = _roots(_signed_squares(values[squares]) + step[len(free) :])
        new_white, new_jacobian = _linear(problem, scene, trial, index, priors, squares)
        new = float(new_white @ new_white)
        if new <= chi2:
            settled = chi2 - new < _SETTLED * max(1.0, new) and damping < 1
            values, white, jacobian, chi2 = trial, new_white, new_jacobian, new
            damping = max(damping / 10, 1e-12)
        else:
            # A step that gains nothing at heavy damping is rounding: this is the minimum.
            settled = damping > 1e8
            damping *= 10
        if settled:
            break
    dof = problem.covariance.rank + len(priors) - len(index)
    joint = _inverse(jacobian.T @ jacobian)
    errors = np.sqrt(np.diag(joint))[len(free) :].tolist()
    covariance = joint[: len(free), : len(free)]
    wide = dict(zip(squares, errors, strict=True))
    return Fit(scene, values, tuple(free), chi2, dof, covariance, settled, priors, wide, joint)


def polish(problem: Problem, rough: Fit) -> Fit:
    """Go on from `rough` until the fit settles."""
    return fit(
        problem, rough.scene, rough.values, rough.free, rough.priors, squares=tuple(rough.squares)
    )


def _signed_squares(diameters: np.ndarray) -> np.ndarray:
    return diameters * np.abs(diameters)


def _roots(squares: np.ndarray) -> np.ndarray:
    """Diameters of signed `squares`, kept from 0."""
    return np.where(squares < 0, -1.0, 1.0) * np.maximum(np.sqrt(np.abs(squares)), _SPOT)


def _linear(problem, scene, values, index, priors, squares) -> tuple[np.ndarray, np.ndarray]:
    """Whitened residuals (rank + priors,) and the whitened Jacobian of the model."""
    predicted, jacobian = model(scene, values, problem.sampling, index)
    if squares:
        jacobian[:, -len(squares) :] /= 2 * np.abs(values[squares])
        values = values.copy()
        values[squares] = _signed_squares(values[squares])
    both = np.column_stack([problem.residual(predicted), jacobian])
    white = problem.covariance.whiten(both)
    if problem.weights is not None:
        white = white * np.sqrt(problem.weights)[:, None]
    if priors:
        rows = np.zeros((len(priors), both.shape[1]))
        for row, (parameter, (mean, sigma)) in enumerate(priors.items()):
            rows[row, 0] = (mean - values[parameter]) / sigma
            if parameter in index:
                rows[row, 1 + index.index(parameter)] = 1 / sigma
        white = np.concatenate([white, rows])
    return white[:, 0], white[:, 1:]


def _inverse(normal: np.ndarray) -> np.ndarray:
    """Inverse of a normal matrix, scaled first; directions without information get huge errors."""
    if not len(normal):
        return normal
    scale = np.sqrt(np.diag(normal))
    scale[scale == 0] = 1.0
    unit = normal / np.outer(scale, scale)
    values, vectors = np.linalg.eigh(unit)
    values = np.maximum(values, 1e-14)
    return (vectors / values) @ vectors.T / np.outer(scale, scale)
