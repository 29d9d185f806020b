"""The scenario file (TOML): a star, an array and a programme of nights to simulate."""

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import astropy.units as u
import numpy as np
from astropy.time import Time

from ..elements import Elements
from ..errors import InputError
from ..masses import amplitudes, kepler_axis
from ..toml import read_toml
from .array import Array
from .nights import Noise, Spectrum


@dataclass(frozen=True, eq=False, kw_only=True)
class Star:
    """A double star and where it stands."""

    ra: float
    """deg"""
    dec: float
    """deg"""
    distance: float
    """pc"""
    systemic_velocity: float = 0.0
    """km/s"""


@dataclass(frozen=True, kw_only=True)
class Orbit:
    """Elements as in `orbits.Elements`, in d, MJD TDB and deg, and what the stars weigh."""

    period: float
    periastron: float
    eccentricity: float
    inclination: float
    node: float
    argument: float
    primary_mass: float
    companion_mass: float


@dataclass(frozen=True, kw_only=True)
class Light:
    """How the two stars shine: flux ratio, and uniform-disc diameters, mas."""

    contrast: float
    primary_diameter: float = 0.0
    companion_diameter: float = 0.0


@dataclass(frozen=True, kw_only=True)
class Programme:
    """When the array looks: `exposures` around the transit of each date, evenly spaced."""

    dates: tuple[float, ...]
    """MJD UTC; the transit nearest to each is used."""
    exposures: int
    spacing: float
    """min"""
    integration: float
    """s"""


@dataclass(frozen=True, kw_only=True)
class Spectroscopy:
    """When velocities are taken (MJD UTC) and how well (km/s; None where a star has no lines)."""

    dates: tuple[float, ...]
    primary_error: float | None = None
    companion_error: float | None = None


@dataclass(frozen=True, eq=False, kw_only=True)
class Scenario:
    """All that a simulation needs, except the random numbers."""

    name: str
    star: Star
    orbit: Orbit
    light: Light
    array: Array
    spectrum: Spectrum
    nights: Programme
    noise: Noise
    velocities: Spectroscopy | None = None

    @property
    def parallax(self) -> float:
        """mas"""
        return 1000.0 / self.star.distance

    @property
    def elements(self) -> Elements:
        """The orbit on the sky: its size follows from the masses and the distance."""
        orbit = self.orbit
        axis = kepler_axis(orbit.period, orbit.primary_mass + orbit.companion_mass)
        return Elements(
            period=orbit.period * u.day,
            periastron=Time(orbit.periastron, format="mjd", scale="tdb"),
            eccentricity=orbit.eccentricity,
            semimajor_axis=axis * self.parallax * u.mas,
            inclination=orbit.inclination * u.deg,
            node=orbit.node * u.deg,
            argument=orbit.argument * u.deg,
        )

    @property
    def amplitudes(self) -> tuple[float, float]:
        """Velocity semi-amplitudes of the primary and of the companion, km/s."""
        orbit = self.orbit
        return amplitudes(
            orbit.period,
            orbit.eccentricity,
            np.radians(orbit.inclination),
            orbit.primary_mass,
            orbit.companion_mass,
        )


SCHEMA: dict[str, Any] = {
    "name": str,
    "star": dict.fromkeys(("ra", "dec", "distance", "systemic_velocity"), float),
    "orbit": dict.fromkeys(Orbit.__dataclass_fields__, float),
    "light": dict.fromkeys(Light.__dataclass_fields__, float),
    "array": {
        "name": str,
        "latitude": float,
        "longitude": float,
        "diameter": float,
        "stations": {"*": list},
    },
    "instrument": {"name": str, "shortest": float, "longest": float, "channels": int},
    "nights": {"dates": list, "exposures": int, "spacing": float, "integration": float},
    "noise": dict.fromkeys(Noise.__dataclass_fields__, float),
    "velocities": {"dates": list, "primary_error": float, "companion_error": float},
}
OPTIONAL = {"velocities", "systemic_velocity", "primary_diameter", "companion_diameter"}


def read_scenario(path: Path) -> Scenario:
    """Read a scenario file; see the one of the demonstration for every key and its unit.

    Raises
    ------
    InputError
        If the file is missing or not TOML, a key is missing or unknown, or a value cannot be used.
    """
    path = Path(path)
    tree = read_toml(path, SCHEMA)
    _complete(path, tree)
    instrument, noise = tree["instrument"], tree["noise"]
    for key in ("closure_phase", "closure_phase_shared"):
        noise[key] = np.radians(noise.get(key, 0.0))
    return Scenario(
        name=tree["name"],
        star=Star(**tree["star"]),
        orbit=Orbit(**tree["orbit"]),
        light=Light(**tree["light"]),
        array=_array(path, tree["array"]),
        spectrum=Spectrum.even(
            instrument["name"],
            instrument["shortest"] * 1e-6,
            instrument["longest"] * 1e-6,
            instrument["channels"],
        ),
        nights=Programme(**_dated(path, tree, "nights")),
        noise=Noise(**noise),
        velocities=Spectroscopy(**_dated(path, tree, "velocities"))
        if "velocities" in tree
        else None,
    )


def _complete(path: Path, tree: dict) -> None:
    """Raise InputError for the first key that is missing."""
    for section, keys in SCHEMA.items():
        if section not in tree:
            if section not in OPTIONAL:
                raise InputError(f"{path}: {section} is missing")
            continue
        if not isinstance(keys, dict) or section in ("noise", "velocities"):
            continue
        for key in keys:
            if key not in tree[section] and key not in OPTIONAL:
                raise InputError(f"{path}: {section}.{key} is missing")


def _array(path: Path, given: dict) -> Array:
    stations = given.pop("stations")
    for name, place in stations.items():
        if len(place) != 3 or not all(isinstance(x, int | float) for x in place):
            raise InputError(
                f"{path}: array.stations.{name} must be [east, north, up] in m, got {place!r}"
            )
    if len(stations) < 2:
        raise InputError(f"{path}: array.stations: an interferometer needs two stations or more")
    local = np.array(list(stations.values()), dtype=float)
    return Array(**given, stations=tuple(stations), local=local)


def _dated(path: Path, tree: dict, section: str) -> dict:
    dates = tree[section].get("dates", [])
    if not dates or not all(type(date) in (int, float) for date in dates):
        raise InputError(f"{path}: {section}.dates must list one MJD or more")
    return {**tree[section], "dates": tuple(float(date) for date in dates)}
