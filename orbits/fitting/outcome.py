"""From the merged runs to a Solution: samples, and the account of how they came about."""

import numpy as np

from .account import chi_square, nights, notes, solutions_of, told_name, undetermined
from .data import Data
from .explore import RUNS, Exploration, features
from .merging import Run
from .posterior import equal_weight, sample_table
from .scan import Scan
from .solution import Solution, summarise, summarise_json


def solution_of(
    data: Data, explored: Exploration, found: Scan, *, name: str, rng: np.random.Generator
) -> Solution:
    """The samples of an exploration by solution, with all that is told about them."""
    import pandas as pd

    target, run, check = explored.target, explored.run, explored.check
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
    checked = {}
    if check is not None:
        checked["log_evidence_check"] = {"value": check.value, "error": check.error}
    names, _ = features(data.space)
    unsettled = [told_name(data, names[k]) for k in np.flatnonzero(run.differ)]
    account = {
        "log_evidence": run.log_evidence,
        "log_evidence_err": run.log_evidence_error,
        **checked,
        "effective_samples": run.effective_samples,
        "likelihood_calls": run.calls,
        "proposal_efficiency": explored.efficiency,
        **chi_square(data, points[top]),
        "solutions": [
            {
                "weight": float((label == k).mean()),
                "log_evidence": run.log_evidence + float(np.log((label == k).mean())),
                "elements": summarise_json(summarise(samples[label == k])),
            }
            for k in range(len(parts))
        ],
        "undetermined": list(
            dict.fromkeys([*undetermined(data, points[label == label[0]]), *unsettled])
        ),
        "nights": nights(data, points),
        "model": {k: v for k, v in vars(data.model).items() if v},
        "priors": data.priors.to_json(),
        "notes": [
            *notes(data, confined=target.confined),
            *explored.notes,
            *runs_differ(run, unsettled),
        ],
    }
    return Solution(
        name=name,
        samples=samples,
        best={key: float(value) for key, value in best.items()},
        account=account,
        positions=data.positions,
        velocities=data.velocities,
        scan=pd.DataFrame({"period_d": found.period, "chi2": found.chi2.min(axis=1)}),
    )


def runs_differ(run: Run, unsettled: list[str]) -> list[str]:
    """A sentence where the merged runs do not agree about some quantities."""
    if not unsettled:
        return []
    return [
        f"The {RUNS} runs of the sampling differ about {', '.join(unsettled)}: their samples are "
        f"worth some {run.effective_samples:.0f} independent ones, so medians, intervals and the "
        "weights of periods are rough, and some may be missing; more live points (fit.live_points) "
        "or more nights help."
    ]
