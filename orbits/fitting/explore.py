"""Sample the posterior: from the solutions found, or from all that the priors allow.

A proposal that suits the posterior badly may have missed a part of it. All that the priors allow
is then searched as well, and what finds more evidence counts, since what misses a part finds less.
"""

import signal
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor, ThreadPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass
from multiprocessing import get_context

import numpy as np

from ..progress import SILENT, Silent
from .data import Data
from .evidence import Estimate, disagreement, exceeds, importance
from .linear import suits
from .merging import Run, merge
from .nested import Part, sample
from .pieces import FORGOTTEN, Forgotten
from .proposal import Proposal
from .space import Space
from .target import Target

RUNS = 8
"""Runs of nested sampling, which share the live points."""
TRUSTED = 0.15
"""Efficiency below which the adapted proposal may have missed a part of the posterior."""
CHECKS, MANY_CHECKS = 20_000, 200_000
"""Draws of the proposal that check the evidence; many where it is wide."""
SURE = 0.3
"""Error of ln evidence by draws above which a few of them rule it, and the error too."""
UNCHECKED = (
    f"No second way of sampling checks the evidence; its error is the scatter of {RUNS} runs."
)


@dataclass(frozen=True, kw_only=True)
class Work:
    """How the work is done: with what effort, on how many cores, told to whom, kept where."""

    live_points: int
    cores: int = 1
    progress: Silent = SILENT
    pieces: Forgotten = FORGOTTEN


@dataclass(frozen=True, kw_only=True)
class Exploration:
    """The target that was sampled, the samples, and how its evidence was checked."""

    target: Target
    run: Run
    efficiency: float
    """Of the adapted mixture."""
    check: Estimate | None
    """The same evidence by plain draws of a proposal, where that can be trusted."""
    notes: Sequence[str] = ()


def explore(data: Data, adapted: Proposal, work: Work, rng: np.random.Generator) -> Exploration:
    """Sample the posterior with the adapted mixture, and without it if it cannot be trusted."""
    own = [np.random.default_rng(seed) for seed in rng.integers(2**63, size=5)]
    target = Target(data, adapted)
    check = importance(target, own[0], CHECKS)
    efficiency = check.efficiency
    if efficiency >= TRUSTED:
        run = _run(target, "solutions", work, own[1])
        return _checked(target, run, check, efficiency)
    check = importance(target, own[2], MANY_CHECKS)
    wide = Target.prior(data, linear=suits(data))
    run = _run(wide, "priors", work, own[3])
    if check.error < SURE and exceeds(check, run.estimate):
        solutions = _run(target, "solutions", work, own[1])
        if exceeds(solutions.estimate, run.estimate):
            return _checked(target, solutions, check, efficiency)
    if wide.linear:
        check = importance(wide, own[4], MANY_CHECKS)
    elif exceeds(run.estimate, check):  # the mixture does miss a part, and is no check
        check = None
    return _checked(wide, run, check, efficiency)


def features(space: Space) -> tuple[list[str], Callable[[np.ndarray], np.ndarray]]:
    """Names of quantities that are no angles, and the function of points that gives them."""
    angles = {"longitude", "node", "h_x", "h_y"}
    columns = [i for i, n in enumerate(space.names) if n not in angles and not space.normal[i]]
    names = [space.names[i] for i in columns]
    if "h_x" not in space.names:
        return names, lambda points: points[:, columns]
    x, y = space.names.index("h_x"), space.names.index("h_y")
    return [*names, "eccentricity"], lambda points: np.column_stack(
        [points[:, columns], points[:, x] ** 2 + points[:, y] ** 2]
    )


def _checked(target: Target, run: Run, check: Estimate | None, efficiency: float) -> Exploration:
    """The exploration, and what is to be said of the agreement of its two estimates."""
    sure = check is not None and check.error < SURE
    return Exploration(
        target=target,
        run=run,
        efficiency=efficiency,
        check=check if sure else None,
        notes=disagreement(run.estimate, check) if sure else [UNCHECKED],
    )


def _run(target: Target, label: str, work: Work, rng: np.random.Generator) -> Run:
    """The merged runs of a target, each of them a piece with random numbers of its own."""
    seeds = rng.integers(2**63, size=RUNS)
    share = max(work.live_points // RUNS, 2 * (target.data.space.dimensions + 1) + 1)
    # A process takes seconds to start, as long as all runs take where the orbit is confined.
    cores = 1 if target.confined else min(work.cores, RUNS)

    def one(k: int) -> Part:
        own = np.random.default_rng(seeds[k])
        part = work.pieces.take(
            f"{label}-{k + 1}-of-{RUNS}",
            Part,
            lambda: call(sample, target, live_points=share, rng=own),
        )
        step()
        return part

    with work.progress.task(f"sampling {label}", total=RUNS) as step, _processes(cores) as call:
        about = features(target.data.space)[1]
        if cores == 1:
            return merge([one(k) for k in range(RUNS)], about)
        with ThreadPoolExecutor(cores) as pool, _answering(work.pieces):
            return merge(list(pool.map(one, range(RUNS))), about)


@contextmanager
def _answering(pieces: Forgotten) -> Iterator[None]:
    """Answer Ctrl-C at once, since processes first finish what they are at."""
    try:
        yield
    except KeyboardInterrupt:
        pieces.tell("stopping when the pieces at work are done")
        raise


@contextmanager
def _processes(count: int) -> Iterator[Callable]:
    """A function that calls another one in one of `count` processes, here if there is but one."""
    if count == 1:
        yield lambda function, *given, **named: function(*given, **named)
        return
    with ProcessPoolExecutor(count, get_context("spawn"), initializer=_deaf) as pool:
        yield lambda *given, **named: pool.submit(*given, **named).result()


def _deaf() -> None:
    """Leave Ctrl-C to the process that started this one."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
