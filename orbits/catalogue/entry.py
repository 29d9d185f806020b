"""One solution of one system, as a catalogue keeps it."""

import os
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from ..bundle import Bundle, Orbits, draw_orbits, read_samples
from ..errors import InputError
from .columns import NUMBERS, WITH_ERRORS

if TYPE_CHECKING:
    from ..elements import Elements
    from ..system import System

DRAWS = 400
"""Orbits drawn from the errors: the edge of a one-sigma band is then known to 0.08 sigma."""


@dataclass(frozen=True, kw_only=True)
class Entry:
    """A row of a catalogue. Missing texts are "", missing numbers NaN."""

    system: str
    solution: str
    aliases: tuple[str, ...] = ()
    preferred: bool = False
    ascending: bool = False
    """The node is known to be the one where the companion recedes."""
    date: str = ""
    data: str = ""
    source: str = ""
    remark: str = ""
    positions: str = ""
    samples: str = ""
    numbers: Mapping[str, float] = field(default_factory=dict)
    """By the names of the numeric columns, errors included, in the units of `columns.NUMBERS`."""
    folder: Path = Path()
    """Where the files `positions` and `samples` are sought."""

    @property
    def key(self) -> str:
        """``system/solution``, unique in a catalogue."""
        return f"{self.system}/{self.solution}"

    def moved_to(self, folder: Path) -> "Entry":
        """The entry as it stands in a catalogue in `folder`: its files are sought from there."""

        def seen_from_there(name: str) -> str:
            if not name:
                return name
            return Path(os.path.relpath(self.folder / name, folder)).as_posix()

        return replace(
            self,
            folder=folder,
            positions=seen_from_there(self.positions),
            samples=seen_from_there(self.samples),
        )

    def number(self, name: str) -> float:
        """The number of that column, NaN where it is missing."""
        if name.removesuffix("_error") not in NUMBERS:
            raise ValueError(f"a catalogue has no column {name!r}")
        return self.numbers.get(name, np.nan)

    @property
    def elements(self) -> "Elements":
        """The elements with their units."""
        import astropy.units as u
        from astropy.time import Time

        from ..elements import Elements

        return Elements(
            period=self.numbers["period"] * u.day,
            periastron=Time(self.numbers["periastron"], format="mjd", scale="tdb"),
            eccentricity=self.numbers["eccentricity"],
            semimajor_axis=self.numbers["semimajor_axis"] * u.mas,
            inclination=self.numbers["inclination"] * u.deg,
            node=self.numbers["node"] * u.deg,
            argument=self.numbers["argument"] * u.deg,
        )

    def bundle(self, rng: np.random.Generator) -> Bundle:
        """The orbit with those that its posterior samples or its errors allow, and its positions.

        Raises
        ------
        InputError
            If a file that the entry names cannot be read.
        """
        from ..positions import read_positions

        if self.samples:
            draws, spread = read_samples(self.folder / self.samples), "posterior"
        else:
            best = {name: self.number(name) for name in Orbits.names()}
            errors = {name: self.number(f"{name}_error") for name in Orbits.names()}
            draws = draw_orbits(best, errors, DRAWS, rng)
            spread = "errors, as if independent" if len(draws) else ""
        return Bundle(
            name=self.system,
            best=Orbits.of({name: [self.number(name)] for name in Orbits.names()}),
            draws=draws,
            spread=spread,
            ascending=self.ascending,
            positions=read_positions(self.folder / self.positions) if self.positions else None,
        )

    def turn(self, equinox: np.ndarray | float) -> np.ndarray | float:
        """What to add to the node, deg, to have it of `equinox` (Julian year or years).

        Raises
        ------
        InputError
            If the node is of another equinox and the entry has no place on the sky.
        """
        own = self.number("equinox")
        own = 2000.0 if np.isnan(own) else own
        if np.all(np.asarray(equinox) == own):
            return 0.0
        if not np.isfinite(self.number("ra") + self.number("dec")):
            raise InputError(
                f"{self.key}: its node is of the equinox {own:g}; without ra and dec it cannot be "
                f"turned to another (--equinox {own:g} leaves it as it is)"
            )
        from ..precession import turn

        return turn(self.number("ra"), self.number("dec"), own, np.asarray(equinox, dtype=float))

    def to_json(self) -> dict[str, object]:
        """Everything that is known of the entry, with the unit in the names of the numbers."""
        texts = ("system", "solution", "date", "data", "source", "remark", "positions", "samples")
        known = {name: getattr(self, name) for name in texts if getattr(self, name)}
        known |= {
            "aliases": list(self.aliases),
            "preferred": self.preferred,
            "ascending": self.ascending,
        }
        for name in NUMBERS:
            if np.isfinite(self.number(name)):
                known[full_name(name)] = self.number(name)
            if name in WITH_ERRORS and np.isfinite(self.number(f"{name}_error")):
                known[full_name(name, error=True)] = self.number(f"{name}_error")
        return known


def entry_of_system(
    system: "System", *, solution: str, place: tuple[float, float] | None = None, **more: object
) -> Entry:
    """The entry of a fitted system: its best orbit, and half of the 68.3% intervals as errors.

    The best orbit is one that fits; the medians of correlated elements together need not.

    Parameters
    ----------
    system : System
        With results of ``nodeline orbit``.
    solution : str
        What this solution is called.
    place : (ra, dec)
        ICRS, deg.
    **more
        Further fields of the entry: aliases, preferred, source, remark.

    Raises
    ------
    InputError
        If there are no results, or positions had no part in the fit.
    """
    from ..fitting.solution import POSITIONS_FILE, SAMPLES_FILE, Solution
    from ..provenance import history

    fitted = Solution.read(system.results)
    if fitted.positions is None:
        raise InputError(f"{fitted.name}: without positions there is no orbit on the sky")
    orbit = Bundle.of_solution(fitted).best
    numbers = {name: float(getattr(orbit, name)[0]) for name in Orbits.names()}
    for name in WITH_ERRORS:
        if full_name(name) in fitted.summary:
            median, plus, minus = fitted.summary[full_name(name)]
            numbers[f"{name}_error"] = (plus + minus) / 2
            numbers.setdefault(name, median)
    if place is not None:
        numbers |= {"ra": place[0], "dec": place[1]}
    run = history(system.results).get("orbit")
    used = [(fitted.positions, "positions"), (fitted.velocities, "velocities")]
    return Entry(
        system=fitted.name,
        solution=solution,
        ascending=fitted.velocities is not None,
        date="" if run is None else run.date[:10],
        data=", ".join(f"{len(data)} {words}" for data, words in used if data is not None),
        positions=POSITIONS_FILE,
        samples=SAMPLES_FILE,
        numbers=numbers,
        folder=system.results,
        **more,
    )


def full_name(name: str, *, error: bool = False) -> str:
    """The name of a numeric column with its unit, as results and JSON call it."""
    if error:
        return f"{name.removesuffix('_mass')}_err{_ENDINGS[name].replace('_mjd', '_d')}"
    return name.removesuffix("_mass") + _ENDINGS[name]


_ENDINGS = {
    "ra": "_deg",
    "dec": "_deg",
    "equinox": "_year",
    "period": "_d",
    "periastron": "_mjd",
    "eccentricity": "",
    "semimajor_axis": "_mas",
    "inclination": "_deg",
    "node": "_deg",
    "argument": "_deg",
    "k1": "_kms",
    "k2": "_kms",
    "gamma": "_kms",
    "parallax": "_mas",
    "total_mass": "_msun",
    "primary_mass": "_msun",
    "companion_mass": "_msun",
}
