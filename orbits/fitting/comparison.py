"""Hypotheses about the same data, by their evidence."""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

from .model import Model
from .solution import Solution

CHANGES: dict[str, dict[str, bool]] = {
    "circular": {"circular": True},
    "drift": {"drift": True},
    "position-jitter": {"position_jitter": True},
    "velocity-jitter": {"velocity_jitter": True},
    "outliers": {"outliers": True},
}
"""What each hypothesis adds to the model of the system."""
LARGEST = 700.0
"""ln of odds, either way, that a number of 64 bits still holds with all its digits."""


@dataclass(frozen=True, kw_only=True)
class Hypothesis:
    """One model and how well it does."""

    name: str
    log_evidence: float
    log_evidence_err: float
    log_odds: float
    """ln of the evidence over that of the first hypothesis."""
    odds: float | None
    """The same without ln; None beyond what a number can hold."""
    chi2: float
    dof: int


def compare(
    names: Sequence[str],
    model: Model,
    solve: Callable[[Model], Solution],
    base: Solution,
) -> list[Hypothesis]:
    """The model itself, which led to `base`, and each variation of it named, solved by `solve`.

    Raises
    ------
    ValueError
        If a name is unknown.
    """
    unknown = [name for name in names if name not in CHANGES]
    if unknown:
        raise ValueError(f"no hypothesis {', '.join(unknown)}; there are {', '.join(CHANGES)}")
    solutions = {"as given": base}
    solutions |= {name: solve(replace(model, **CHANGES[name])) for name in names}
    first = base.account["log_evidence"]
    return [
        Hypothesis(
            name=name,
            log_evidence=one.account["log_evidence"],
            log_evidence_err=one.account["log_evidence_err"],
            log_odds=one.account["log_evidence"] - first,
            odds=_odds(one.account["log_evidence"] - first),
            chi2=one.account["chi2"],
            dof=one.account["dof"],
        )
        for name, one in solutions.items()
    ]


def _odds(log_odds: float) -> float | None:
    return math.exp(log_odds) if abs(log_odds) < LARGEST else None
