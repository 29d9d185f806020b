"""Errors from the scatter of the data themselves: refits to resampled blocks of them.

A block is the smallest set of data that is independent of the rest: a row of a table (a baseline or
triangle of one exposure in all channels), joined with every row whose errors it shares by a listed
or assumed correlation (Efron & Tibshirani 1993, An Introduction to the Bootstrap, ch. 8).
"""

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from scipy import sparse

from ..binary import companion_name
from ..errors import InputError
from ..observation import OBSERVABLES, Observation
from ..progress import SILENT, Silent
from .covariance import Covariance
from .fit import Fit, Problem, fit

FEWEST_BLOCKS = 8
"""With fewer, resampling says more about the draw than about the data."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Bootstrap:
    """Positions and contrasts of the companion in refits to resampled data."""

    blocks: int
    x_mas: np.ndarray
    """(k,)"""
    y_mas: np.ndarray
    """(k,)"""
    contrast: np.ndarray
    """(k,)"""

    @property
    def covariance_xy_mas2(self) -> np.ndarray:
        """(2, 2)"""
        return np.cov(self.x_mas, self.y_mas)

    @property
    def contrast_error(self) -> float:
        """Standard deviation of the contrasts."""
        return float(np.std(self.contrast, ddof=1))

    def to_json(self) -> dict[str, Any]:
        """The errors as plain numbers."""
        mean = np.array([self.x_mas.mean(), self.y_mas.mean()])
        separation = float(np.hypot(*mean))
        along = mean / separation
        across = np.array([along[1], -along[0]])
        c = self.covariance_xy_mas2
        return {
            "separation_err_mas": float(np.sqrt(along @ c @ along)),
            "position_angle_err_deg": float(np.degrees(np.sqrt(across @ c @ across) / separation)),
            "contrast_err": self.contrast_error,
            "covariance_xy_mas2": c.tolist(),
            "samples": len(self.x_mas),
            "blocks": self.blocks,
        }


def bootstrap(
    observation: Observation,
    problem: Problem,
    solution: Fit,
    *,
    companion: int = 0,
    count: int = 200,
    rng: np.random.Generator,
    progress: Silent = SILENT,
) -> Bootstrap:
    """Refit `solution` to `count` resamplings of the independent blocks of `observation`.

    Raises
    ------
    InputError
        If there are fewer than `FEWEST_BLOCKS` blocks.
    """
    block = independent_blocks(observation, problem.covariance)
    blocks = int(block.max()) + 1
    if blocks < FEWEST_BLOCKS:
        raise InputError(
            f"{observation.target}: the data make only {blocks} independent blocks; a bootstrap "
            f"needs {FEWEST_BLOCKS}"
        )
    # Each whitened datum is made of data of one block.
    first = problem.covariance.whitener.indptr[:-1]
    owner = block[problem.covariance.whitener.indices[first]]
    found = np.empty((count, len(solution.scene.names)))
    with progress.task("resampling", count) as tick:
        for k in range(count):
            times = np.bincount(rng.integers(blocks, size=blocks), minlength=blocks)
            resampled = replace(problem, weights=times[owner].astype(float))
            found[k] = fit(
                resampled, solution.scene, solution.values, solution.free, solution.priors,
                squares=tuple(solution.squares),
            ).values  # fmt: skip
            tick()
    names = solution.scene.names
    x, y, contrast = (
        found[:, names.index(companion_name(name, companion))] for name in ("x", "y", "contrast")
    )
    return Bootstrap(blocks=blocks, x_mas=x, y_mas=y, contrast=contrast)


def independent_blocks(observation: Observation, covariance: Covariance) -> np.ndarray:
    """(n,) number of the independent block that each datum belongs to, from 0."""
    tables = [getattr(observation, name) for name in OBSERVABLES]
    rows = np.concatenate([table.row for table in tables])
    kind = np.repeat(np.arange(len(tables)), [len(table) for table in tables])
    _, row = np.unique(np.column_stack([kind, rows]), axis=0, return_inverse=True)
    n = len(rows)
    members = [
        sparse.csr_array((np.ones(n), (row.ravel(), np.arange(n)))),
        abs(covariance.whitener),
        sparse.csr_array(abs(covariance.common).T),
    ]
    sets = sparse.csr_array(sparse.vstack(members))
    return sparse.csgraph.connected_components(sets.T @ sets, directed=False)[1]
