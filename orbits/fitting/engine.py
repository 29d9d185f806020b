"""The fit from data to solution: scan, refine, adapt, sample."""

import time

import numpy as np

from ..errors import InputError, NothingFound
from ..positions import Positions
from ..progress import SILENT, Silent
from ..system import Parallax
from ..velocities import Velocities
from .account import Estimate, chi_square, disagreement, nights, notes, solutions_of, undetermined
from .adaptation import adapt
from .data import Data, make_data
from .knowledge import check_knowledge
from .laplace import normals
from .linear import LinearTarget
from .model import Model
from .nested import sample
from .posterior import equal_weight, sample_table
from .priors import Priors
from .proposal import Proposal, Target
from .refine import refine
from .scan import Scan, doubtful, scan
from .solution import Solution, summarise, summarise_json

STARTS = 40
"""Minima of the scan that are refined."""
DOUBTFUL_STARTS = 200
"""The same where nights have alternatives or outliers, which make false minima."""
SOLUTIONS = 16
"""Solutions that the proposal may hold."""
NEGLIGIBLE = 16.0
"""A solution whose ln evidence is lower by this much than the best is not kept."""
TRUSTED = 0.15
"""Efficiency below which the adapted proposal may have missed a part of the posterior: the data do
not confine the orbit, and the prior takes over, but for what is linear in the data."""
CHECKS = 10_000
LINEAR_CHECKS = 200_000
"""Draws of the proposal that check the evidence; many where it is wide."""


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
        Threads for the scan. The result does not depend on it.

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
    found = scan(data, cores=cores, rng=rng, progress=progress)
    target, efficiency = propose(data, found, rng)
    run = sample(target, live_points=live_points, rng=rng, progress=progress)
    return _solution(data, found, target, efficiency, run, name, rng, begin)


def propose(data: Data, found: Scan, rng: np.random.Generator) -> tuple[Target, float]:
    """The adapted proposal around the solutions that the scan leads to, and its efficiency.

    Where that is too low to be trusted, the proposal is the prior, with the Thiele-Innes constants
    drawn as the data want them if the positions are simple enough for that.
    """
    most = DOUBTFUL_STARTS if doubtful(data) else STARTS
    fits = refine(data, found, most=most, rng=rng)
    solutions = sorted(normals(data, fits), key=lambda s: -s.log_weight)
    kept = [s for s in solutions if s.log_weight > solutions[0].log_weight - NEGLIGIBLE]
    proposal, efficiency = adapt(
        data, Proposal.around(kept[:SOLUTIONS], data.space.dimensions), rng
    )
    if efficiency < TRUSTED:
        if LinearTarget.suits(data):
            return LinearTarget(data), efficiency
        proposal = Proposal.prior(data.space.dimensions)
    return Target(data, proposal), efficiency


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


def _solution(data, found, target, efficiency, run, name, rng, begin) -> Solution:
    import pandas as pd

    chosen = equal_weight(run, rng)
    points = run.points[chosen]
    label = solutions_of(target, points)
    order = np.argsort(label, kind="stable")
    points, label = points[order], label[order]
    parts = [points[label == k] for k in range(label.max() + 1)]
    samples = pd.concat([sample_table(data, part, rng) for part in parts], ignore_index=True)
    samples.insert(0, "solution", label)
    top = int(np.argmax(target.log_likelihood(points)))
    best = samples.drop(columns="solution").iloc[top].to_dict()
    account = {
        "log_evidence": run.log_evidence,
        "log_evidence_err": run.log_evidence_error,
        "effective_samples": run.effective_samples,
        "likelihood_calls": run.calls,
        "proposal_efficiency": efficiency,
        **chi_square(data, points[top]),
        "solutions": [
            {
                "weight": float((label == k).mean()),
                "log_evidence": run.log_evidence + float(np.log((label == k).mean())),
                "elements": summarise_json(summarise(samples[label == k])),
            }
            for k in range(len(parts))
        ],
        "undetermined": undetermined(data, points[label == label[0]]),
        "nights": nights(data, points),
        "model": {k: v for k, v in vars(data.model).items() if v},
        "priors": data.priors.to_json(),
        "notes": notes(data, confined=len(target.proposal) > 0),
    }
    check = _check(target, rng)
    if check is not None:
        account["log_evidence_check"] = {"value": check[0], "error": check[1]}
        account["notes"] += disagreement((run.log_evidence, run.log_evidence_error), check)
    account["seconds"] = time.monotonic() - begin
    return Solution(
        name=name,
        samples=samples,
        best={key: float(value) for key, value in best.items()},
        account=account,
        positions=data.positions,
        velocities=data.velocities,
        scan=pd.DataFrame({"period_d": found.period, "chi2": found.chi2.min(axis=1)}),
    )


def _check(target: Target, rng: np.random.Generator) -> Estimate | None:
    """A second estimate of the evidence, where plain draws of the proposal can give one."""
    if isinstance(target, LinearTarget):
        return importance(target, rng, LINEAR_CHECKS)
    return importance(target, rng, CHECKS) if len(target.proposal) else None


def importance(target: Target, rng: np.random.Generator, count: int) -> Estimate:
    """ln evidence and its error from plain draws of the proposal: it checks the nested sampling."""
    log_weight = target.log_weight(target.draw(count, rng))
    most = log_weight.max()
    weight = np.exp(log_weight - most)
    error = weight.std() / weight.mean() / np.sqrt(count)
    return float(most + np.log(weight.mean())), float(error)
