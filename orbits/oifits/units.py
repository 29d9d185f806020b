"""Units of OIFITS columns: the spellings in circulation, and the factors between them."""

import math

SYNONYMS = {
    "m": {"m", "meter", "meters", "metre", "metres"},
    "s": {"s", "sec", "second", "seconds"},
    "day": {"day", "days", "d", "mjd"},
    "deg": {"deg", "degree", "degrees"},
    "yr": {"yr", "year", "years", "a"},
    "m/s": {"m/s", "m s-1", "m s**-1", "m.s-1"},
    "deg/yr": {"deg/yr", "deg/year", "degrees/year", "deg yr-1", "deg.yr-1"},
    "arcsec": {"arcsec", "arcsecond", "arcseconds", '"'},
    "": {"", "none", "-", "1", "adim", "dimensionless", "unitless", "no unit", "n/a"},
}
"""Ways to write each unit of the standard, in lower case."""

FACTORS = {
    ("", "%"): 1e-2,
    ("", "percent"): 1e-2,
    ("deg", "rad"): math.degrees(1.0),
    ("deg", "radian"): math.degrees(1.0),
    ("deg", "radians"): math.degrees(1.0),
    ("deg", "arcsec"): 1 / 3600,
    ("deg", "mas"): 1 / 3.6e6,
    ("deg/yr", "mas/yr"): 1 / 3.6e6,
    ("deg/yr", "arcsec/yr"): 1 / 3600,
    ("m", "um"): 1e-6,
    ("m", "micron"): 1e-6,
    ("m", "microns"): 1e-6,
    ("m", "micrometer"): 1e-6,
    ("m", "nm"): 1e-9,
    ("m", "nanometer"): 1e-9,
    ("m", "angstrom"): 1e-10,
    ("m", "cm"): 1e-2,
    ("m", "km"): 1e3,
    ("m/s", "km/s"): 1e3,
    ("s", "ms"): 1e-3,
    ("s", "min"): 60.0,
    ("s", "h"): 3600.0,
}
"""(unit of the standard, unit stated in lower case): what to multiply by."""


def factor(standard: str, stated: str) -> float | None:
    """What turns values in the `stated` unit into the unit of the `standard`; None if unknown.

    A unit that is not stated is the standard's.
    """
    stated = stated.strip(" []()").lower()
    if not stated or stated in SYNONYMS[standard]:
        return 1.0
    return FACTORS.get((standard, stated))
