"""Import of the fixed-width lines in which orbits of visual binaries are handed round.

Columns as in the Sixth Catalog of Orbits of Visual Binary Stars (Hartkopf, Mason & Worley, US
Naval Observatory). Periods carry a unit flag (m minutes, h hours, d days, y years, c centuries),
times of periastron y (years) or d (Julian date, full or less 2 400 000), semimajor axes a (arcsec)
or m (mas), nodes an asterisk where they are known to be ascending. A lone point stands for a
missing number.

Years are Besselian, periods included: a visual orbit counts its epochs, its periastron and its
period in the same years, so that published ephemerides come out to their last digit.
"""

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from ..errors import InputError
from ..times import tdb_of_year
from .columns import same
from .entry import Entry

BESSELIAN_YEAR = 365.242198781
"""d (Lieske 1979, A&A 73, 282)."""

_DAYS = {
    "m": 1 / 1440,
    "h": 1 / 24,
    "d": 1.0,
    "y": BESSELIAN_YEAR,
    "c": 100 * BESSELIAN_YEAR,
}
_MAS = {"a": 1000.0, "m": 1.0}
_JD_OF_RJD = 2_400_000.0
_JD_OF_MJD = 2_400_000.5

_FIELDS = {
    "place": (0, 18),
    "wds": (19, 29),
    "name": (30, 44),
    "ads": (45, 50),
    "hd": (51, 57),
    "hip": (58, 64),
    "period": (80, 92),
    "period_unit": (92, 93),
    "period_error": (93, 105),
    "axis": (105, 114),
    "axis_unit": (114, 115),
    "axis_error": (115, 124),
    "inclination": (124, 133),
    "inclination_error": (133, 142),
    "node": (142, 151),
    "node_flag": (151, 152),
    "node_error": (152, 161),
    "periastron": (161, 174),
    "periastron_unit": (174, 175),
    "periastron_error": (175, 186),
    "eccentricity": (186, 195),
    "eccentricity_error": (195, 205),
    "argument": (205, 214),
    "argument_error": (214, 223),
    "equinox": (223, 228),
    "last": (228, 233),
    "grade": (233, 234),
    "reference": (237, 246),
}
"""First character and the one after the last of each field, counted from 0."""


@dataclass(frozen=True, kw_only=True)
class Refusal:
    """A line that could not be imported."""

    line: int
    """Counted from 1."""
    name: str
    reason: str


class _Unusable(Exception):
    """Why one line cannot become an entry."""


def import_visual_orbits(path: Path) -> tuple[list[Entry], list[Refusal]]:
    """Entries of all lines that give an orbit, and the lines that do not, with the reason.

    Lines before the first one that starts with coordinates are taken for the head of the file;
    after it every line that is not blank is in one list or the other.

    Raises
    ------
    InputError
        If the file cannot be read or has no line of that form.
    """
    try:
        lines = Path(path).read_text(encoding="latin-1").splitlines()
    except OSError as error:
        raise InputError(f"{path}: cannot be read: {error.strerror}") from error
    head = next((n for n, line in enumerate(lines) if _place(line[:18]) is not None), None)
    if head is None:
        raise InputError(f"{path}: no line starts with coordinates as in 000019.10-441726.0")
    entries: list[Entry] = []
    refusals: list[Refusal] = []
    for number, line in enumerate(lines[head:], start=head + 1):
        if not line.strip():
            continue
        fields = {name: line[start:end].strip() for name, (start, end) in _FIELDS.items()}
        try:
            entries.append(_entry(fields))
        except _Unusable as why:
            name = f"{fields['wds']} {fields['name']}".strip()
            refusals.append(Refusal(line=number, name=name, reason=str(why)))
    return _with_unique_keys(entries), refusals


def _entry(fields: dict[str, str]) -> Entry:
    place = _place(fields["place"])
    if place is None:
        raise _Unusable(f"{fields['place']!r} are no coordinates")
    period = _factor(fields, "period", _DAYS)
    axis = _factor(fields, "axis", _MAS)
    numbers = {
        "ra": place[0],
        "dec": place[1],
        "period": _positive(fields, "period") * period,
        "periastron": _periastron(fields),
        "eccentricity": _within(fields, "eccentricity", 0.0, 1.0),
        "semimajor_axis": _positive(fields, "axis") * axis,
        "inclination": _within(fields, "inclination", 0.0, 180.0),
        "node": _number(fields, "node") % 360.0,
        "argument": _number(fields, "argument") % 360.0,
        "period_error": _error(fields, "period") * period,
        "periastron_error": _error(fields, "periastron")
        * {"y": BESSELIAN_YEAR, "d": 1.0}[fields["periastron_unit"]],
        "eccentricity_error": _error(fields, "eccentricity"),
        "semimajor_axis_error": _error(fields, "axis") * axis,
        "inclination_error": _error(fields, "inclination"),
        "node_error": _error(fields, "node"),
        "argument_error": _error(fields, "argument"),
    }
    if fields["equinox"]:
        numbers["equinox"] = _within(fields, "equinox", 1500.0, 2500.0)
    # 13 digits hold all that was printed, and not the rounding of the conversion.
    numbers = {name: float(f"{value:.13g}") for name, value in numbers.items()}
    year = re.search(r"[12]\d{3}", fields["reference"])
    catalogues = (("ADS", "ads"), ("HD", "hd"), ("HIP", "hip"))
    remarks = (("grade", "grade"), ("last observed", "last"))
    return Entry(
        system=f"{fields['wds']} {' '.join(fields['name'].split())}".replace("/", "-"),
        solution=fields["reference"].replace("/", "-") or "unnamed",
        aliases=(
            " ".join(fields["name"].split()),
            *(f"{name} {fields[field]}" for name, field in catalogues if fields[field]),
        ),
        ascending=fields["node_flag"] == "*",
        date=year.group() if year else "",
        source=f"reference {fields['reference']}" if fields["reference"] else "",
        remark="; ".join(f"{words} {fields[field]}" for words, field in remarks if fields[field]),
        numbers=numbers,
    )


def _place(text: str) -> tuple[float, float] | None:
    """Right ascension and declination, deg, of ``hhmmss.ss+ddmmss.s``; None for anything else."""
    sign = {"+": 1.0, "-": -1.0}.get(text[9:10])
    try:
        ra = float(text[0:2]) * 15 + float(text[2:4]) / 4 + float(text[4:9]) / 240
        dec = float(text[10:12]) + float(text[12:14]) / 60 + float(text[14:18]) / 3600
    except ValueError:
        return None
    return None if sign is None else (ra, sign * dec)


def _periastron(fields: dict[str, str]) -> float:
    value, unit = _number(fields, "periastron"), fields["periastron_unit"]
    if unit == "y":
        return float(tdb_of_year(value, "besselian"))
    if unit != "d":
        raise _Unusable(f"the unit {unit!r} of the time of periastron is neither y nor d")
    if 0 < value < 100_000:
        return value + _JD_OF_RJD - _JD_OF_MJD
    if 2_000_000 < value < 3_000_000:
        return value - _JD_OF_MJD
    raise _Unusable(f"periastron {value:.8g} is neither a full nor a truncated Julian date")


def _factor(fields: dict[str, str], name: str, units: dict[str, float]) -> float:
    _number(fields, name)  # a missing number is the better reason than its missing unit
    flag = fields[f"{name}_unit"]
    if flag not in units:
        raise _Unusable(f"the unit {flag!r} of the {_WORDS[name]} is none of {', '.join(units)}")
    return units[flag]


def _number(fields: dict[str, str], name: str) -> float:
    text = fields[name]
    if text in ("", "."):
        raise _Unusable(f"no {_WORDS[name]}")
    try:
        return float(text)
    except ValueError:
        raise _Unusable(f"{_WORDS[name]} {text!r} is not a number") from None


def _positive(fields: dict[str, str], name: str) -> float:
    value = _number(fields, name)
    if not value > 0:
        raise _Unusable(f"{_WORDS[name]} {value:g} is not positive")
    return value


def _within(fields: dict[str, str], name: str, low: float, high: float) -> float:
    value = _number(fields, name)
    if not low <= value <= high or (name == "eccentricity" and value == high):
        raise _Unusable(f"{_WORDS[name]} {value:g} is not within {low:g} to {high:g}")
    return value


def _error(fields: dict[str, str], name: str) -> float:
    """The error beside a number, NaN where there is none (0 means that none was given)."""
    text = fields[f"{name}_error"]
    if text in ("", "."):
        return float("nan")
    try:
        value = float(text)
    except ValueError:
        raise _Unusable(f"error {text!r} of the {_WORDS[name]} is not a number") from None
    return value if value > 0 else float("nan")


_WORDS = {
    "period": "period",
    "axis": "semimajor axis",
    "inclination": "inclination",
    "node": "node",
    "periastron": "time of periastron",
    "eccentricity": "eccentricity",
    "argument": "argument of periastron",
    "equinox": "equinox",
}


def _with_unique_keys(entries: Sequence[Entry]) -> list[Entry]:
    """Number the solutions that one reference gives for the same system."""
    seen: dict[tuple[str, str], int] = {}
    unique = []
    for entry in entries:
        key = same(entry.system), same(entry.solution)
        seen[key] = seen.get(key, 0) + 1
        times = seen[key]
        unique.append(
            entry if times == 1 else replace(entry, solution=f"{entry.solution} ({times})")
        )
    return unique
