"""The fit from data to solution: scan, refine, adapt, sample."""

import time

import numpy as np

from ..errors import InputError, NothingFound
from ..positions import Positions
from ..progress import SILENT, Silent
from ..system import Parallax
from ..velocities import Velocities
from .adaptation import adapt
from .data import Data, make_data
from .explore import Work, explore
from .knowledge import check_knowledge
from .laplace import normals
from .model import Model
from .outcome import solution_of
from .pieces import FORGOTTEN, Forgotten, fingerprint
from .priors import Priors
from .proposal import Proposal
from .refine import refine
from .scan import Scan, doubtful, scan
from .solution import Solution

STARTS = 40
"""Minima of the scan that are refined."""
DOUBTFUL_STARTS = 200
"""The same where nights have alternatives or outliers, which make false minima."""
SOLUTIONS = 16
"""Solutions that the proposal may hold."""
NEGLIGIBLE = 16.0
"""A solution whose ln evidence is lower by this much than the best is not kept."""


def fit(
    positions: Positions | None,
    *,
    velocities: Velocities | None = None,
    parallax: Parallax | None = None,
    model: Model | None = None,
    priors: Priors | None = None,
    live_points: int = 500,
    name: str = "orbit",
    cores: int = 1,
    rng: np.random.Generator,
    progress: Silent = SILENT,
    keep: Forgotten = FORGOTTEN,
) -> Solution:
    """Fit an orbit to positions, velocities or both, and sample its posterior.

    Parameters
    ----------
    positions, velocities, parallax
        The data; at least one of the first two.
    model
        What besides a Keplerian orbit may explain the data.
    priors
        Prior densities; wide ones that suit the data where None.
    live_points
        Live points of the nested sampling; the number of samples grows with it.
    cores
        Threads of the scan, and processes that sample where the data do not confine the orbit. The
        result does not depend on it. A script that asks for several must start its work under
        ``if __name__ == "__main__":``.
    keep
        Where finished pieces are kept, for a fit that is interrupted: see `pieces.Kept`.

    Raises
    ------
    InputError
        If there are too few data to say anything about an orbit.
    NothingFound
        If the data show no motion.
    """
    begin = time.monotonic()
    priors = priors or Priors.for_data(positions, velocities)
    data = make_data(positions, velocities, parallax, priors, model or Model())
    check_knowledge(data)
    _require_enough(data)
    # Each piece has random numbers of its own, whether the others are made now or were before.
    seeds = rng.integers(2**63, size=4)
    own = [np.random.default_rng(seed) for seed in seeds]
    pieces = keep.of(fingerprint(data.fingerprint, live_points, seeds))
    found = pieces.take(
        "scan", Scan, lambda: scan(data, cores=cores, rng=own[0], progress=progress)
    )
    adapted = pieces.take("proposal", Proposal, lambda: propose(data, found, own[1]))
    work = Work(live_points=live_points, cores=cores, progress=progress, pieces=pieces)
    explored = explore(data, adapted, work, own[2])
    solution = solution_of(data, explored, found, name=name, rng=own[3])
    if not pieces.continued:  # else the time is that of the rest alone
        solution.account["seconds"] = time.monotonic() - begin
    return solution


def propose(data: Data, found: Scan, rng: np.random.Generator) -> Proposal:
    """The adapted mixture around the solutions that the scan leads to."""
    most = DOUBTFUL_STARTS if doubtful(data) else STARTS
    fits = refine(data, found, most=most, rng=rng)
    solutions = sorted(normals(data, fits), key=lambda s: -s.log_weight)
    kept = [s for s in solutions if s.log_weight > solutions[0].log_weight - NEGLIGIBLE]
    return adapt(data, Proposal.around(kept[:SOLUTIONS], data.space.dimensions), rng)


def _require_enough(data: Data) -> None:
    """Raise a sentence where no orbit can be meant."""
    if data.velocities is None and data.nights < 3:
        raise InputError(
            f"{data.nights} night{'s' if data.nights > 1 else ''} with a position and no "
            "velocities cannot show an orbit; at least 3 nights are needed"
        )
    if data.positions is None and len(data.velocities) < 4:
        raise InputError(
            f"{len(data.velocities)} velocities and no positions cannot show an orbit; "
            "at least 4 are needed"
        )
    if data.velocities is None and not _moves(data):
        raise NothingFound(
            "the positions agree with one place that does not move; nothing about an orbit follows"
        )


def _moves(data: Data) -> bool:
    """Whether the positions differ from a fixed place (chi-square, 3 sigma)."""
    from scipy.stats import chi2

    xy, covariance = data.positions.xy, data.positions.covariance
    if data.nights < len(xy) or data.model.outliers:
        return True
    weight = np.linalg.inv(covariance)
    mean = np.linalg.solve(weight.sum(axis=0), np.einsum("nij,nj->i", weight, xy))
    square = np.einsum("ni,nij,nj->", xy - mean, weight, xy - mean)
    return bool(chi2.sf(square, 2 * len(xy) - 2) < 0.0027)
