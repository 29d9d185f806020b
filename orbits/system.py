"""The system file (TOML): what belongs together.

name = "Harrow 7"
[nights]
files = ["nights/*.fits"]      # OIFITS, relative to this file
use = ["v2", "t3", "visphi"]   # observables; v2 and t3 by default
error_floor = {t3 = 0.5}       # deg for phases; error_scale multiplies the errors first
v2_calibration = 0.02          # an error that all channels of a baseline share
[positions]
tables = ["positions.ecsv"]
[velocities]
tables = ["velocities.ecsv"]
[parallax]
value = 12.3                   # mas
error = 0.2
[primary]
magnitude = 4.9                # apparent, in the band of the nights
[fit]
live_points = 500
outliers = true                # a share of the positions may be wrong
[priors]
period = [50, 5000]            # d
[priors.normal]
inclination_deg = [90, 0.5]    # mean and standard deviation
"""

from collections.abc import Mapping
from dataclasses import dataclass
from dataclasses import field as made
from pathlib import Path
from typing import Any

from .errors import InputError
from .observation import DEFAULT, OBSERVABLES
from .toml import read_toml


@dataclass(frozen=True, kw_only=True)
class Parallax:
    """A measured parallax, mas."""

    value: float
    error: float


@dataclass(frozen=True, kw_only=True)
class System:
    """A star and all that was gathered about it; paths are absolute."""

    path: Path
    name: str
    nights: tuple[Path, ...] = ()
    target: str | None = None
    field: float | None = None
    """Half-width of the searched field, mas; from the data where None."""
    diameter: float | None = None
    """Uniform-disc diameter of the primary, mas; fitted where None."""
    flip_phase: bool = False
    """The OIFITS files use the opposite sign of phase."""
    instrument: str | None = None
    """INSNAME of the only spectral set-up to use."""
    wavelengths: tuple[float, float] | None = None
    """Shortest and longest, um."""
    baselines: tuple[float, float] | None = None
    """Shortest and longest, m."""
    stations: tuple[str, ...] = ()
    """Only data between these; all where empty."""
    gap: float = 8.0
    """A pause longer than this, h, starts a new night."""
    use: tuple[str, ...] = DEFAULT
    """The observables that are used."""
    error_scale: Mapping[str, float] = made(default_factory=dict)
    """Factors for the errors that the files state, by observable."""
    error_floor: Mapping[str, float] = made(default_factory=dict)
    """Smallest errors, by observable; deg for phases."""
    shared_baselines: bool = False
    """Closure phases share the noise of their baselines."""
    v2_calibration: float = 0.0
    """Error of V2 that all channels of a baseline share, as a part of V2."""
    t3_calibration: float = 0.0
    """Error of the closure phase that all channels of a triangle share, deg."""
    positions: tuple[Path, ...] = ()
    velocities: tuple[Path, ...] = ()
    parallax: Parallax | None = None
    magnitude: float | None = None
    """Apparent magnitude of the primary in the band of the nights."""
    live_points: int = 500
    model: Mapping[str, Any] = made(default_factory=dict)
    """What besides the orbit may explain the data: arguments of `fitting.model.Model`."""
    priors: Mapping[str, Any] = made(default_factory=dict)
    """Prior densities that replace the default ones: arguments of `fitting.priors.Priors`."""

    @property
    def results(self) -> Path:
        """The folder beside the system file that holds what was derived from it."""
        return self.path.with_name(f"{self.path.stem}-results")


def read_system(path: Path) -> System:
    """Read a system file.

    Raises
    ------
    InputError
        If the file is missing or not TOML, a key is unknown, a value has the wrong type, or a
        file that it names does not exist.
    """
    path = Path(path).absolute()
    values = read_toml(path, SCHEMA)
    return System(
        path=path,
        name=values.get("name", path.stem),
        nights=_files(path, values, "nights", "files"),
        positions=_files(path, values, "positions", "tables"),
        velocities=_files(path, values, "velocities", "tables"),
        parallax=_parallax(path, values),
        magnitude=values.get("primary", {}).get("magnitude"),
        **_nights(path, values.get("nights", {})),
        **_fit(path, values),
    )


_NIGHTS = {
    "target": str,
    "field": float,
    "diameter": float,
    "flip_phase": bool,
    "instrument": str,
    "wavelengths": list,
    "baselines": list,
    "stations": list,
    "gap": float,
    "use": list,
    "error_scale": dict.fromkeys(OBSERVABLES, float),
    "error_floor": dict.fromkeys(OBSERVABLES, float),
    "shared_baselines": bool,
    "v2_calibration": float,
    "t3_calibration": float,
}

SCHEMA: dict[str, Any] = {
    "name": str,
    "nights": {"files": list, **_NIGHTS},
    "positions": {"tables": list},
    "velocities": {"tables": list},
    "parallax": {"value": float, "error": float},
    "primary": {"magnitude": float},
    "fit": {
        "live_points": int,
        "circular": bool,
        "drift": bool,
        "position_jitter": bool,
        "velocity_jitter": bool,
        "outliers": bool,
        "scale": list,
        "position_angle_zero": list,
    },
    "priors": {
        "period": list,
        "semimajor_axis": list,
        "eccentricity": list,
        "amplitude": list,
        "position_jitter": list,
        "velocity_jitter": list,
        "systemic": float,
        "zero_point": float,
        "drift": float,
        "outlier_fraction": float,
        "scale": float,
        "position_angle_zero": float,
        "normal": {"*": list},
    },
}


def _files(path: Path, values: dict, section: str, key: str) -> tuple[Path, ...]:
    """The files that the patterns of a section match, each of which must match one."""
    found: list[Path] = []
    for pattern in values.get(section, {}).get(key, []):
        if not isinstance(pattern, str):
            raise InputError(f"{path}: {section}.{key} must list file names, got {pattern!r}")
        base = Path(pattern)
        matches = (
            sorted(base.parent.glob(base.name))
            if base.is_absolute()
            else sorted(path.parent.glob(pattern))
        )
        if not matches:
            raise InputError(f"{path}: {section}.{key}: no file matches {pattern!r}")
        found += [match for match in matches if match not in found]
    return tuple(found)


def _nights(path: Path, given: dict[str, Any]) -> dict[str, Any]:
    """How the files of the nights are read."""
    for name in given.get("use", []):
        if name not in OBSERVABLES:
            raise InputError(
                f"{path}: nights.use: no observable {name!r}; there are {', '.join(OBSERVABLES)}"
            )
    for key in ("error_scale", "error_floor"):
        for name, value in given.get(key, {}).items():
            if not value > 0:
                raise InputError(f"{path}: nights.{key}.{name} must be positive, got {value!r}")
    if not given.get("gap", 1.0) > 0:
        raise InputError(f"{path}: nights.gap must be a positive number of hours")
    chosen = {key: given[key] for key in _NIGHTS if key in given}
    for key in ("wavelengths", "baselines"):
        if key in chosen:
            chosen[key] = _pair(path, f"nights.{key}", chosen[key])
    for key in ("use", "stations"):
        if key in chosen:
            chosen[key] = _names(path, f"nights.{key}", chosen[key])
    return chosen


def _fit(path: Path, values: dict) -> dict[str, Any]:
    """Live points, model and priors, with lists made pairs or names."""
    model = dict(values.get("fit", {}))
    live_points = model.pop("live_points", 500)
    if live_points < 50:
        raise InputError(f"{path}: fit.live_points must be at least 50, got {live_points}")
    for key in ("scale", "position_angle_zero"):
        if key in model:
            model[key] = _names(path, f"fit.{key}", model[key])
    priors = dict(values.get("priors", {}))
    for key, value in priors.items():
        if isinstance(value, list):
            priors[key] = _pair(path, f"priors.{key}", value)
    normal = {
        key: _pair(path, f"priors.normal.{key}", value)
        for key, value in priors.get("normal", {}).items()
    }
    if normal:
        priors["normal"] = normal
    return {"live_points": live_points, "model": model, "priors": priors}


def _names(path: Path, name: str, value: list) -> tuple[str, ...]:
    if not all(isinstance(one, str) for one in value):
        raise InputError(f"{path}: {name} must list names, got {value!r}")
    return tuple(value)


def _pair(path: Path, name: str, value: list) -> tuple[float, float]:
    if len(value) != 2 or not all(type(number) in (int, float) for number in value):
        raise InputError(f"{path}: {name} must be two numbers, got {value!r}")
    return float(value[0]), float(value[1])


def _parallax(path: Path, values: dict) -> Parallax | None:
    given = values.get("parallax")
    if given is None:
        return None
    for key in ("value", "error"):
        if not given.get(key, 0) > 0:
            raise InputError(f"{path}: parallax.{key} must be a positive number of mas")
    return Parallax(**given)
