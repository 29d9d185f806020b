"""The observables of a binary: where OIFITS keeps each, and which of its data can be used."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Self

import astropy.units as u
import numpy as np

from .model import T3, BaselineTable, DataTable, Vis, Vis2, Wavelength

LONGEST = 1e4
"""No optical interferometer has a baseline of 10 km; longer ones are in other units than m."""
SHORTEST_WAVE, LONGEST_WAVE = 1e-7, 1e-3
"""Wavelengths that OIFITS is used for, m; 1.65 (micron) and 1650 (nm) lie far outside."""
OLDEST_MJD, YOUNGEST_MJD = 10_000.0, 100_000.0
"""1886 and 2132: no star was measured by interferometry before, and this is not for ever."""


LARGEST_TYPICAL_AMPLITUDE = 2.0
LEAST_ERROR = 1e-3
"""Of what is typical of its table: smaller errors are slips of a pipeline, and one datum with such
an error would outweigh all others."""
LARGEST_VALUE = 1e9
"""No visibility, nor a phase in degrees, is as large."""
ENOUGH = 100_000
"""So many data tell what is typical of a table of any length."""


@dataclass(frozen=True)
class Kind:
    """Where an observable of an `Observation` is found in the tables."""

    name: str
    """The attribute of `Observation`."""
    table: type[BaselineTable]
    value: str
    error: str
    index: str
    """The column with the number of its first channel in OI_CORR."""
    phase: bool
    words: str
    """What people call its data."""

    @property
    def legs(self) -> int:
        """Independent baselines of a datum."""
        return 2 if self.table is T3 else 1


KINDS = {
    kind.name: kind
    for kind in (
        Kind("v2", Vis2, "VIS2DATA", "VIS2ERR", "CORRINDX_VIS2DATA", False, "squared visibilities"),
        Kind("t3", T3, "T3PHI", "T3PHIERR", "CORRINDX_T3PHI", True, "closure phases"),
        Kind("t3amp", T3, "T3AMP", "T3AMPERR", "CORRINDX_T3AMP", False, "triple amplitudes"),
        Kind("visamp", Vis, "VISAMP", "VISAMPERR", "CORRINDX_VISAMP", False, "amplitudes"),
        Kind("visphi", Vis, "VISPHI", "VISPHIERR", "CORRINDX_VISPHI", True, "phases"),
    )
}


@dataclass(frozen=True, kw_only=True)
class ErrorBars:
    """Changes to the errors of a file: first scaled, then raised to the floor.

    Raises
    ------
    ValueError
        If a name is not an observable, a scale is not positive, or a floor is negative.
    """

    scale: Mapping[str, float] = field(default_factory=dict)
    """Factor, by observable: v2, t3, t3amp, visamp, visphi."""
    floor: Mapping[str, float | u.Quantity] = field(default_factory=dict)
    """Smallest error, by observable; for phases an angle."""

    @classmethod
    def of(cls, scale: Mapping[str, float], floor: Mapping[str, float]) -> Self:
        """From plain numbers, those of phases in deg."""
        units = {name: u.deg if kind.phase else 1.0 for name, kind in KINDS.items()}
        return cls(scale=scale, floor={n: x * units.get(n, 1.0) for n, x in floor.items()})

    def __post_init__(self) -> None:
        for name in (*self.scale, *self.floor):
            if name not in KINDS:
                raise ValueError(f"unknown observable {name!r}; there are {', '.join(KINDS)}")
        for name, factor in self.scale.items():
            if not factor > 0:
                raise ValueError(f"scale of {name} must be positive, got {factor!r}")
        for name in self.floor:
            if not self._floor(name) >= 0:
                raise ValueError(f"floor of {name} must not be negative, got {self.floor[name]!r}")

    def apply(self, name: str, error: np.ndarray) -> np.ndarray:
        """The errors (rad for phases) of the observable `name` after these changes."""
        if name in self.scale:
            error = error * self.scale[name]
        return np.maximum(error, self._floor(name)) if name in self.floor else error

    def _floor(self, name: str) -> float:
        unit = u.rad if KINDS[name].phase else u.dimensionless_unscaled
        return float(u.Quantity(self.floor.get(name, 0.0 * unit)).to_value(unit))


def usable(table: BaselineTable, kind: Kind) -> np.ndarray:
    """(nrow, nwave) bool: the data of an observable that can be used.

    A datum counts unless it is flagged, it or its error is not finite or absurd, its error is not
    positive, or its row has no time or no believable baseline. Amplitudes of a table in which they
    are not those of a visibility do not count at all.
    """
    value, error = table[kind.value], table[kind.error]
    keep = ~table.flag
    keep &= error > least_error(error, table.flag)  # false for NaN
    keep &= error < np.inf
    keep &= value < LARGEST_VALUE
    keep &= value > -LARGEST_VALUE
    keep &= (timed(table) & (table.sides < LONGEST).all(axis=1))[:, None]
    some = sampled(keep)
    amplitude, spread = value[some][keep[some]], error[some][keep[some]]
    if (kind.name == "t3amp" and unnormalised(amplitude, spread)) or (
        kind.name == "visamp" and not (is_visibility(table) and fringes(amplitude))
    ):
        keep[:] = False
    return keep


def least_error(error: np.ndarray, flag: np.ndarray) -> float:
    """The error below which data of a table with errors and flags (nrow, nwave) do not count."""
    some = sampled(error)
    known = error[some][~flag[some]]
    known = known[(known > 0) & (known < np.inf)]
    return LEAST_ERROR * float(np.median(known)) if known.size else 0.0


def is_visibility(table: Vis) -> bool:
    """Whether the amplitudes of a table are said to be those of a visibility."""
    return (table.amptyp or "absolute").strip().lower() == "absolute"


def fringes(amplitude: np.ndarray) -> bool:
    """Whether amplitudes are typically such as a visibility can have."""
    return not amplitude.size or float(np.median(amplitude)) <= LARGEST_TYPICAL_AMPLITUDE


def timed(table: DataTable) -> np.ndarray:
    """(nrow,) bool: the rows whose MJD can be a time, if only that of a test (0)."""
    return (table.mjd >= 0) & (table.mjd < YOUNGEST_MJD)


def sound(spectrum: Wavelength) -> np.ndarray:
    """(nwave,) bool: the channels whose wavelength can be one in metres."""
    return (spectrum.eff_wave >= SHORTEST_WAVE) & (spectrum.eff_wave <= LONGEST_WAVE)


def sampled(data: np.ndarray) -> slice:
    """Rows that tell what is typical of a table of any length: `ENOUGH` data (nrow, nwave)."""
    return slice(None, None, 1 + data.size // ENOUGH)


def unnormalised(amplitude: np.ndarray, error: np.ndarray) -> bool:
    """Whether triple amplitudes are in other units than those of a visibility.

    Noise lifts few data above 1 by three times their error; a wrong scale lifts many.
    """
    above = amplitude > 1 + 3 * error
    return bool(above.mean() > 0.1) if above.size else False
