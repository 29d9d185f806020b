"""Hypotheses about the same data, by their evidence."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

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


@dataclass(frozen=True, kw_only=True)
class Hypothesis:
    """One model and how well it does."""

    name: str
    log_evidence: float
    log_evidence_err: float
    odds: float
    """Evidence over that of the first hypothesis."""
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
            odds=float(np.exp(np.clip(one.account["log_evidence"] - first, -700, 700))),
            chi2=one.account["chi2"],
            dof=one.account["dof"],
        )
        for name, one in solutions.items()
    ]
