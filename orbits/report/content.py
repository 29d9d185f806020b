"""What the page says, gathered from the system file and its results as plain values."""

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from ..bundle import Bundle
from ..dates import show_date
from ..fitting.solution import Solution
from ..provenance import Input, Run, fingerprint
from ..rounding import rounded
from ..system import System


@dataclass(frozen=True, kw_only=True)
class Quantity:
    """A line of the table of results."""

    words: str
    unit: str
    value: str
    plus: str
    minus: str
    bounded: bool
    """The data say no more than that it lies within the bounds of its prior."""


@dataclass(frozen=True, kw_only=True)
class Place:
    """A line of the table of positions: one solution of one night."""

    night: str
    key: str
    """The same for all solutions of a night."""
    date: str
    mjd: float
    instrument: str
    separation: float
    separation_text: str
    angle: float
    angle_text: str
    contrast: float
    contrast_text: str
    weight: float
    rest_east: float
    rest_east_text: str
    rest_north: float
    rest_north_text: str
    sigma: float
    """Distance from the orbit in terms of the error ellipse."""


@dataclass(frozen=True, kw_only=True)
class Speed:
    """A line of the table of velocities."""

    date: str
    mjd: float
    star: str
    instrument: str
    velocity: float
    velocity_text: str
    rest: float
    rest_text: str
    sigma: float


@dataclass(frozen=True, kw_only=True)
class NightMap:
    """What the search of a night saw."""

    key: str
    label: str
    verdict: str
    data: str
    picture: str


@dataclass(frozen=True, kw_only=True)
class CheckedInput:
    """An input of a run, and whether it is still the same."""

    input: Input
    state: str


@dataclass(frozen=True, kw_only=True)
class Content:
    """All of the page."""

    name: str
    headline: str
    observed: str
    """What the result rests on."""
    quantities: list[Quantity]
    fit: dict[str, Any]
    statements: list[str]
    """What is determined and what is not."""
    places: list[Place]
    speeds: list[Speed]
    runs: dict[str, Run]
    inputs: list[CheckedInput]
    versions: dict[str, str]
    date: str
    drawings: dict[str, str] = field(default_factory=dict)
    maps: list[NightMap] = field(default_factory=list)

    @property
    def ambiguous(self) -> bool:
        """Whether a night has alternatives, whose weights are then shown."""
        return any(place.weight < 1 for place in self.places)

    @property
    def instruments(self) -> bool:
        """Whether the velocities say what they were measured with."""
        return any(speed.instrument for speed in self.speeds)


_WORDS = {
    "period_d": ("period", "d"),
    "periastron_mjd": ("time of periastron", "MJD TDB"),
    "eccentricity": ("eccentricity", ""),
    "semimajor_axis_mas": ("semimajor axis", "mas"),
    "inclination_deg": ("inclination", "deg"),
    "node_deg": ("position angle of the node", "deg"),
    "argument_deg": ("argument of periastron (companion)", "deg"),
    "k1_kms": ("velocity amplitude of the primary", "km/s"),
    "k2_kms": ("velocity amplitude of the companion", "km/s"),
    "gamma_kms": ("velocity of the centre of mass", "km/s"),
    "parallax_mas": ("parallax", "mas"),
    "total_msun": ("total mass", "M☉"),
    "primary_msun": ("mass of the primary", "M☉"),
    "companion_msun": ("mass of the companion", "M☉"),
    "mass_ratio": ("mass ratio, companion over primary", ""),
    "primary_sin3i_msun": ("mass of the primary times sin³ i", "M☉"),
    "companion_sin3i_msun": ("mass of the companion times sin³ i", "M☉"),
    "mass_function_msun": ("mass function", "M☉"),
    "semimajor_axis_au": ("semimajor axis", "au"),
    "next_periastron_mjd": ("next periastron", "MJD TDB"),
    "periastron_separation_mas": ("separation at periastron", "mas"),
}
_STARS = ("primary", "companion", "difference, companion − primary")
"""As `Velocities.star` counts them."""
_UNITS = {"d": "d", "mas": "mas", "deg": "deg", "kms": "km/s", "au": "au", "msun": "M☉"}


def quantities(solution: Solution) -> list[Quantity]:
    """The table of results: median and the distances to the ends of the 68.3% interval."""
    bounded = set(solution.account.get("undetermined", ()))
    lines = []
    for name, (median, plus, minus) in solution.summary.items():
        words, unit = _WORDS.get(name, _unknown_words(name))
        value, up, down = rounded(median, plus, minus)
        lines.append(
            Quantity(
                words=words, unit=unit, value=value, plus=up, minus=down, bounded=name in bounded
            )
        )
    return lines


def _unknown_words(name: str) -> tuple[str, str]:
    stem, _, ending = name.rpartition("_")
    if ending in _UNITS:
        return stem.replace("_", " "), _UNITS[ending]
    return name.replace("_", " "), ""


def headline(solution: Solution) -> str:
    """The result in a sentence."""
    summary = solution.summary

    def short(name: str) -> str:
        median, plus, minus = summary[name]
        number, error = rounded(median, (plus + minus) / 2)
        return f"{number} ± {error}" if error else number

    parts = [f"period {short('period_d')} d", f"eccentricity {short('eccentricity')}"]
    if "semimajor_axis_mas" in summary:
        parts.append(f"semimajor axis {short('semimajor_axis_mas')} mas")
    if "primary_msun" in summary:
        parts.append(f"masses {short('primary_msun')} and {short('companion_msun')} M☉")
    elif "total_msun" in summary:
        parts.append(f"total mass {short('total_msun')} M☉")
    return "; ".join(parts)


def observed(solution: Solution) -> str:
    """What was observed, in a sentence."""

    def span(mjd: np.ndarray) -> str:
        first, last = show_date(mjd.min()), show_date(mjd.max())
        return f"on {first}" if first == last else f"from {first} to {last}"

    parts = []
    if solution.positions is not None:
        nights = len(set(solution.positions.night))
        used = sorted(filter(None, set(solution.positions.instrument)))
        parts.append(
            f"positions of {nights} night{'s' if nights > 1 else ''}"
            f"{' with ' + ', '.join(used) if used else ''} {span(solution.positions.mjd)}"
        )
    if solution.velocities is not None:
        counts = np.bincount(solution.velocities.star, minlength=len(_STARS))
        each = [f"{n} of the {star}" for n, star in zip(counts, _STARS, strict=True) if n]
        parts.append(f"velocities, {' and '.join(each)}, {span(solution.velocities.mjd)}")
    return "Observed: " + "; ".join(parts) + "."


def statements(solution: Solution) -> list[str]:
    """What the data determine and what they leave open, one sentence each."""
    summary, account = solution.summary, solution.account
    has_places, has_speeds = solution.positions is not None, solution.velocities is not None
    said = []
    if has_places and has_speeds:
        said.append(
            "The velocities tell the nodes apart: the node is the one where the companion recedes."
        )
    elif has_speeds:
        said.append(
            "Without positions the size, the inclination and the node of the orbit are not known."
        )
    if "primary_msun" in summary:
        said.append("The masses of both stars follow from the data.")
    elif "total_msun" in summary:
        said.append("Only the sum of the masses follows from the data, not each of them.")
    else:
        said.append(
            "No mass follows from the data: it takes a parallax, or the velocities of both stars "
            "together with positions."
        )
    solutions = account.get("solutions", [])
    if len(solutions) > 1:
        shares = ", ".join(f"{one['weight']:.3f}" for one in solutions)
        said.append(
            f"{len(solutions)} orbits fit, with probabilities {shares}; the table shows the first, "
            "the cloud of the drawings all of them."
        )
    bounded = [_WORDS.get(n, _unknown_words(n))[0] for n in account.get("undetermined", ())]
    if bounded:
        said.append(f"Only bounded, not measured: {', '.join(bounded)}.")
    for night in account.get("nights", ()):
        if night.get("outlier_probability", 0.0) > 0.5:
            said.append(
                f"Night {night['night']} is an outlier with probability "
                f"{night['outlier_probability']:.3f}."
            )
    said.append(_goodness(account["chi2"], account["dof"]))
    return said + list(account.get("notes", ()))


def _goodness(chi2: float, dof: int) -> str:
    """How probable so large a chi-square is if model and errors are right."""
    if dof < 1:
        return f"Chi-square is {chi2:.1f} with no degree of freedom left: the fit tests nothing."
    from scipy.stats import chi2 as law

    chance = float(law.sf(chi2, dof))
    words = f"Chi-square is {chi2:.1f} for {dof} degrees of freedom"
    if chance < 1e-3:
        return f"{words}: larger than errors of the stated size allow (probability {chance:.1g})."
    if chance > 0.999:
        return f"{words}: the stated errors look too large (probability {chance:.4f})."
    return f"{words}: as expected for errors of the stated size (probability {chance:.2f})."


def places(bundle: Bundle) -> list[Place]:
    """The table of positions with their distances from the best orbit."""
    positions = bundle.positions
    if positions is None:
        return []
    rest = bundle.position_residuals()
    sigma = np.sqrt(np.einsum("ni,nij,nj->n", rest, np.linalg.inv(positions.covariance), rest))
    errors = np.sqrt(np.diagonal(positions.covariance, axis1=1, axis2=2))
    along_error, angle_error = positions.polar_errors
    keys = {night: f"n{number}" for number, night in enumerate(dict.fromkeys(positions.night), 1)}
    lines = []
    for row in range(len(positions)):
        separation, angle = positions.separation[row], positions.position_angle[row]
        lines.append(
            Place(
                night=positions.night[row],
                key=keys[positions.night[row]],
                date=show_date(positions.mjd[row], minutes=True),
                mjd=float(positions.mjd[row]),
                instrument=positions.instrument[row],
                separation=float(separation),
                separation_text=" ± ".join(rounded(separation, along_error[row])),
                angle=float(angle),
                angle_text=" ± ".join(rounded(angle, angle_error[row])),
                contrast=float(positions.contrast[row]),
                contrast_text=" ± ".join(
                    filter(None, rounded(positions.contrast[row], positions.contrast_error[row]))
                ),
                weight=float(positions.weight[row]),
                rest_east=float(rest[row, 0]),
                rest_east_text=_signed(rest[row, 0], errors[row, 0]),
                rest_north=float(rest[row, 1]),
                rest_north_text=_signed(rest[row, 1], errors[row, 1]),
                sigma=float(sigma[row]),
            )
        )
    return lines


def speeds(bundle: Bundle) -> list[Speed]:
    """The table of velocities with their distances from the best orbit."""
    measured = bundle.velocities
    if measured is None:
        return []
    rest = bundle.velocity_residuals()
    return [
        Speed(
            date=show_date(measured.mjd[row], minutes=True),
            mjd=float(measured.mjd[row]),
            star=_STARS[measured.star[row]],
            instrument=measured.instrument[row],
            velocity=float(measured.velocity[row]),
            velocity_text=" ± ".join(rounded(measured.velocity[row], measured.error[row])),
            rest=float(rest[row]),
            rest_text=_signed(rest[row], measured.error[row]),
            sigma=float(rest[row] / measured.error[row]),
        )
        for row in range(len(measured))
    ]


def _signed(value: float, error: float) -> str:
    """A difference to the digits of its error, with its sign."""
    text = rounded(value, error)[0]
    return text if text.startswith("-") else f"+{text}"


def inputs(system: System, runs: dict[str, Run]) -> list[CheckedInput]:
    """Every input of the runs, and whether the file is still what it was."""
    base = system.results.parent
    found: dict[str, Input] = {}
    for run in runs.values():
        found |= {item.path: item for item in run.inputs}
    if not found:
        here = (system.path, *system.nights, *system.positions, *system.velocities)
        return [CheckedInput(input=fingerprint(path, base), state="as it is now") for path in here]
    return [CheckedInput(input=item, state=_state(item, base)) for item in found.values()]


def _state(item: Input, base: Path) -> str:
    path = base / item.path
    if not path.is_file():
        return "missing now"
    return "unchanged" if fingerprint(path, base) == item else "changed since"
