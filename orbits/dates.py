"""Dates as people write and read them."""

import re

import numpy as np

from .errors import InputError
from .times import tdb_of_utc, tdb_of_year, utc_of_tdb

_J2000, _JULIAN_YEAR = 51544.5, 365.25
FORMS = "2026-12-01, 2026-12-01T22:30, 2026.92, B1980.0, MJD 61375.5 or JD 2461376.0"


def read_date(text: str) -> float:
    """MJD TDB of a date: a calendar date (UTC), a year, or a (Modified) Julian date (UTC).

    A number below 10 000 is a Julian year, B before it makes it a Besselian one; from there to a
    million it is an MJD, above a JD. The words MJD and JD may stand before it.

    Raises
    ------
    InputError
        If `text` is none of these.
    """
    words = text.strip().upper()
    kind, number = re.fullmatch(r"(B|J|MJD|JD|)\s*([+-]?\d+\.?\d*)|.*", words).groups()
    if number is None:
        return _calendar(text)
    value = float(number)
    if kind == "B" or kind == "J" or (kind == "" and abs(value) < 10_000):
        return float(tdb_of_year(value, "besselian" if kind == "B" else "julian"))
    if kind == "JD" or (kind == "" and value >= 1_000_000):
        value -= 2_400_000.5
    return float(tdb_of_utc(value))


def dates_between(start: float, end: float, step: str) -> np.ndarray:
    """MJD from `start` to `end` (both within) in steps such as ``30 d``, ``6 h`` or ``0.5 yr``.

    Raises
    ------
    InputError
        If the step is no positive time, the end comes before the start, or there would be more
        than a million dates.
    """
    import astropy.units as u

    try:
        days = u.Quantity(step).to_value(u.day)
    except (TypeError, ValueError, u.UnitConversionError) as error:
        raise InputError(f"{step!r} is no step in time such as '30 d', '6 h' or '1 yr'") from error
    if not days > 0 or end < start or (end - start) / days > 1e6:
        raise InputError(f"no dates lie between MJD {start:.3f} and {end:.3f} in steps of {step}")
    return start + days * np.arange(int((end - start) / days + 1e-9) + 1)


def show_date(mjd: float, *, minutes: bool = False) -> str:
    """Calendar date (UTC) of an MJD TDB to the nearest minute, with hours and minutes if wanted."""
    from astropy.time import Time

    year = 2000 + (mjd - _J2000) / _JULIAN_YEAR
    if not 1 <= year < 9999:  # beyond what calendar dates are written for
        return f"year {year:.1f}"
    # Half a second more keeps the rounding of the division from showing the minute before.
    minute = (np.rint(utc_of_tdb(mjd) * 1440) + 1 / 120) / 1440
    moment = Time(minute, format="mjd", scale="tai")  # a scale without leap seconds
    return moment.strftime("%Y-%m-%d %H:%M" if minutes else "%Y-%m-%d")


def _calendar(text: str) -> float:
    from astropy.time import Time

    try:
        moment = Time(text.strip().removesuffix("Z"), scale="tai")
    except ValueError as error:
        raise InputError(f"{text!r} is no date; write it as {FORMS}") from error
    return float(tdb_of_utc(moment.mjd))
