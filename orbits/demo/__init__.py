"""The invented system that the demonstration goes through, and what was put into it."""

from dataclasses import dataclass
from importlib.resources import files
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from ..simulation.scenario import Scenario, read_scenario

if TYPE_CHECKING:
    import pandas as pd


def scenario() -> Scenario:
    """Harrow 7: a double-lined binary, an array and twelve nights, all invented."""
    return read_scenario(Path(str(files(__name__) / "harrow-7.toml")))


@dataclass(frozen=True, kw_only=True)
class Comparison:
    """A quantity as it was put in and as it was measured."""

    name: str
    truth: float
    measured: float
    """Median of the posterior."""
    error: float
    """Half of its central 68 per cent."""

    @property
    def deviation(self) -> float:
        """Measured less true, in errors."""
        return (self.measured - self.truth) / self.error


def truth(scenario: Scenario) -> dict[str, float]:
    """What went in, named and in the units of the columns of posterior samples."""
    orbit, elements = scenario.orbit, scenario.elements
    k1, k2 = scenario.amplitudes
    return {
        "period_d": orbit.period,
        "periastron_mjd": orbit.periastron,
        "eccentricity": orbit.eccentricity,
        "semimajor_axis_mas": elements.semimajor_axis.value,
        "inclination_deg": orbit.inclination,
        "node_deg": orbit.node,
        "argument_deg": orbit.argument,
        "k1_kms": k1,
        "k2_kms": k2,
        "gamma_kms": scenario.star.systemic_velocity,
        "parallax_mas": scenario.parallax,
        "total_msun": orbit.primary_mass + orbit.companion_mass,
        "primary_msun": orbit.primary_mass,
        "companion_msun": orbit.companion_mass,
    }


def compare(scenario: Scenario, samples: "pd.DataFrame") -> list[Comparison]:
    """Each quantity of the samples beside its true value.

    Times of periastron are counted modulo the period, and angles modulo a turn.
    """
    rows = []
    for name, true in truth(scenario).items():
        if name not in samples:
            continue
        turn = {"periastron_mjd": scenario.orbit.period}.get(
            name, 360.0 if name.endswith("_deg") else None
        )
        off = samples[name].to_numpy() - true
        if turn is not None:
            off = (off + turn / 2) % turn - turn / 2
        low, middle, high = np.percentile(off, [15.865, 50.0, 84.135])
        rows.append(
            Comparison(name=name, truth=true, measured=true + middle, error=(high - low) / 2)
        )
    return rows
