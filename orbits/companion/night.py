"""A night about the scene that it is known to show, from which a limit on more starts."""

from dataclasses import dataclass, replace
from typing import Any

import astropy.units as u
import numpy as np

from ..errors import NothingFound
from ..observation import OBSERVABLES, Observation
from ..progress import SILENT, Silent
from .covariance import ErrorModel
from .epoch import Epoch
from .grid import Grid
from .maps import Field
from .result import Candidate, SearchResult
from .search import search
from .stars import Stars, settled_stars


@dataclass(frozen=True, eq=False)
class Night:
    """One observation and what it is known to show."""

    epoch: Epoch
    """The search for one companion more than it shows."""
    field: Field
    phases: Field | None
    """Of its closure phases alone, taken as independent; None where there are none."""
    removed: Candidate | None
    """The companion that it shows."""


@dataclass(frozen=True, kw_only=True)
class NightSearch:
    """How nights are searched: what all searches for a limit have in common."""

    grid: Grid
    diameter: u.Quantity | None = None
    stars: Stars
    errors: ErrorModel
    smearing: bool = True

    def search(self, observation: Observation, **options: Any) -> SearchResult:
        """`search` of the field, by default without noise searches."""
        return search(
            observation,
            field=self.grid.half * self.grid.step * u.mas,
            step=self.grid.step * u.mas,
            diameter=self.diameter,
            stars=self.stars,
            errors=self.errors,
            smearing=self.smearing,
            **{"noise_searches": 0, **options},
        )

    def claimed(
        self, observation: Observation, *, false_alarm: float, noise_searches: int,
        rng: np.random.Generator, progress: Silent = SILENT,
    ) -> SearchResult | None:  # fmt: skip
        """What a search of the night finds, where it can be claimed."""
        try:
            result = self.search(
                observation, noise_searches=noise_searches, rng=rng, progress=progress
            )
        except NothingFound:
            return None
        return result if result.best.false_alarm_probability < false_alarm else None

    def night(self, observation: Observation, shown: SearchResult | None = None) -> Night:
        """A night that shows a single star, or what was found in it."""
        # The companion to be excluded is a point: its diameter would not show.
        stars = settled_stars(observation, self.stars, self.diameter, 0.0 * u.mas)
        count = 1 if shown is None else 2
        epoch = Epoch(observation, stars, self.grid, self.errors, count, self.smearing)
        null = epoch.null(shown)
        phases = None
        if len(observation.t3):
            others = {
                name: np.zeros(len(getattr(observation, name)), dtype=bool)
                for name in OBSERVABLES
                if name != "t3"
            }
            alone, known = observation.select(**others), ErrorModel(correlated=False)
            independent = Epoch(alone, stars, self.grid, known, count, self.smearing)
            fixed = replace(null, free=(), priors={}, squares={}, covariance=np.empty((0, 0)))
            phases = independent.field(fixed)
        return Night(epoch, epoch.field(null), phases, None if shown is None else shown.best)
