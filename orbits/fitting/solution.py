"""Solution: what a fit found, for people, for files and for the drawings."""

import json
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, Self

import numpy as np
from astropy.table import Table

from ..elements import Elements
from ..errors import InputError
from ..files import refuse_existing, whole_file
from ..positions import Positions, read_positions, write_positions
from ..velocities import Velocities, read_velocities, write_velocities
from .comparing import orbit_of, position_residuals, velocity_residuals

if TYPE_CHECKING:
    import pandas as pd

ELEMENTS = (
    "period_d",
    "periastron_mjd",
    "eccentricity",
    "semimajor_axis_mas",
    "inclination_deg",
    "node_deg",
    "argument_deg",
)
MASSES = (
    "total_msun",
    "primary_msun",
    "companion_msun",
    "mass_ratio",
    "primary_sin3i_msun",
    "companion_sin3i_msun",
    "mass_function_msun",
)
UNITS = {"d": "d", "mas": "mas", "deg": "deg", "kms": "km / s", "au": "AU", "msun": "Msun"}

JSON_FILE, SAMPLES_FILE, SCAN_FILE = "orbit.json", "samples.ecsv", "period-scan.ecsv"
POSITIONS_FILE, VELOCITIES_FILE = "fitted-positions.ecsv", "fitted-velocities.ecsv"

Interval = tuple[float, float, float]


@dataclass(frozen=True, eq=False, kw_only=True)
class Solution:
    """Samples of the posterior, the data behind them, and the account of the fit."""

    name: str
    samples: "pd.DataFrame"
    """Equally weighted; columns are named with their units, `solution` numbers the solutions."""
    best: Mapping[str, float]
    """The sample of the greatest likelihood."""
    account: Mapping[str, Any]
    """All else that `to_json` tells: evidence, chi-square, priors, solutions, nights."""
    positions: Positions | None
    velocities: Velocities | None
    scan: "pd.DataFrame"
    """Columns period_d and chi2: the least chi-square found near each period."""

    @property
    def elements(self) -> Elements | None:
        """The elements of the best sample; None without positions."""
        if self.positions is None:
            return None
        return orbit_of(self.best)

    @property
    def residuals(self) -> "dict[str, pd.DataFrame]":
        """Data less the best sample: "positions" and "velocities", as far as there are any.

        Row by row as in `positions` and `velocities`; the columns are told at `comparing`.
        """
        sets = (self.positions, self.velocities)
        times = np.concatenate([data.mjd for data in sets if data is not None])
        made = {}
        if self.positions is not None:
            made["positions"] = position_residuals(self.best, self.positions)
        if self.velocities is not None:
            middle = float(times.min() + times.max()) / 2
            made["velocities"] = velocity_residuals(self.best, self.velocities, middle)
        return made

    @property
    def summary(self) -> dict[str, Interval]:
        """Median, and the distances up and down to the ends of the central 68.3 per cent.

        Of the most probable solution, where there are several.
        """
        return summarise(self.samples[self.samples["solution"] == 0])

    @property
    def correlation(self) -> "pd.DataFrame":
        """Correlation matrix of all quantities in the most probable solution."""
        mine = self.samples[self.samples["solution"] == 0].drop(columns="solution")
        return mine.loc[:, mine.std() > 0].corr()

    def to_json(self) -> dict[str, Any]:
        """The result as plain numbers; a quantity that the data cannot give is absent."""
        summary = summarise_json(self.summary)
        known = {*ELEMENTS, *MASSES, "parallax_mas"}
        velocities = {k: v for k, v in summary.items() if k not in known and "_kms" in k}
        parallax = {"parallax_mas": summary["parallax_mas"]} if "parallax_mas" in summary else {}
        return {
            "name": self.name,
            "elements": {k: summary[k] for k in ELEMENTS if k in summary},
            "velocities": velocities,
            "masses": {k: summary[k] for k in MASSES if k in summary},
            **parallax,
            "further": {k: v for k, v in summary.items() if k not in known and k not in velocities},
            **self.account,
            "best": dict(self.best),
        }

    def write(self, folder: Path, *, force: bool = False) -> None:
        """Write orbit.json, samples.ecsv, the data that were fitted and the scan of periods.

        Raises
        ------
        InputError
            If one of them exists and `force` is false.
        """
        folder = Path(folder)
        refuse_existing(*outputs(folder), force=force)
        with whole_file(folder / SAMPLES_FILE, force=force) as temporary:
            _table(self.samples).write(temporary, format="ascii.ecsv", overwrite=True)
        with whole_file(folder / SCAN_FILE, force=force) as temporary:
            _table(self.scan).write(temporary, format="ascii.ecsv", overwrite=True)
        if self.positions is not None:
            write_positions(folder / POSITIONS_FILE, self.positions, force=force)
        if self.velocities is not None:
            write_velocities(folder / VELOCITIES_FILE, self.velocities, force=force)
        with whole_file(folder / JSON_FILE, force=force) as temporary:
            text = json.dumps(self.to_json(), indent=2, allow_nan=False)
            temporary.write_text(text + "\n", encoding="utf-8")

    @classmethod
    def read(cls, folder: Path) -> Self:
        """Read what `write` wrote.

        Raises
        ------
        InputError
            If the folder holds no orbit, or files that do not belong together.
        """
        folder = Path(folder)
        path = folder / JSON_FILE
        if not path.is_file():
            raise InputError(f"{path}: no such file; run `nodeline orbit` first")
        try:
            tree = json.loads(path.read_text(encoding="utf-8"))
            samples = Table.read(folder / SAMPLES_FILE, format="ascii.ecsv").to_pandas()
            scan = Table.read(folder / SCAN_FILE, format="ascii.ecsv").to_pandas()
            account = {key: tree[key] for key in tree if key not in _DERIVED}
            name, best, data = tree["name"], tree["best"], tree["data"]
            positions = read_positions(folder / POSITIONS_FILE) if "positions" in data else None
            velocities = read_velocities(folder / VELOCITIES_FILE) if "velocities" in data else None
        except (OSError, ValueError, KeyError, TypeError) as error:
            raise InputError(f"{folder}: not the results of an orbit fit: {error}") from error
        return cls(
            name=name,
            samples=samples,
            best=best,
            account=account,
            positions=positions,
            velocities=velocities,
            scan=scan,
        )


_DERIVED = ("name", "elements", "velocities", "masses", "parallax_mas", "further", "best")


def outputs(folder: Path) -> tuple[Path, ...]:
    """The files that `Solution.write` makes."""
    names = (JSON_FILE, SAMPLES_FILE, SCAN_FILE, POSITIONS_FILE, VELOCITIES_FILE)
    return tuple(folder / name for name in names)


def summarise(samples: "pd.DataFrame") -> dict[str, Interval]:
    """Median, plus and minus of each column but `solution`."""
    made = {}
    for name in samples.columns:
        if name != "solution":
            low, middle, high = np.percentile(samples[name], [15.865, 50.0, 84.135])
            made[name] = (float(middle), float(high - middle), float(middle - low))
    return made


def summarise_json(summary: Mapping[str, Interval]) -> dict[str, dict[str, float]]:
    """The same as plain objects."""
    return {
        name: {"median": median, "plus": plus, "minus": minus}
        for name, (median, plus, minus) in summary.items()
    }


def _table(frame: "pd.DataFrame") -> Table:
    """A table with units taken from the ends of the columns' names."""
    table = Table.from_pandas(frame)
    for name in table.colnames:
        unit = UNITS.get(name.rpartition("_")[2])
        if unit is not None:
            table[name].unit = unit
    return table
