"""Constants of the IAU resolutions, and the conversions built from them."""

import math

GM_SUN = 1.327_124_4e20
"""Nominal solar mass parameter, m3 s-2 (IAU 2015 Resolution B3; Prsa et al. 2016, AJ 152, 41)."""

AU = 149_597_870_700.0
"""Astronomical unit, m (IAU 2012 Resolution B2)."""

DAY = 86_400.0
"""Day, s."""

JULIAN_YEAR = 365.25
"""Julian year, d."""

SPEED_OF_LIGHT = 299_792_458.0
"""Speed of light, m/s (exact)."""

MAS = math.pi / (180 * 3600 * 1000)
"""One milliarcsecond, rad."""

GM_SUN_AU_DAY = GM_SUN * DAY**2 / AU**3
"""Nominal solar mass parameter, au3 d-2."""

KMS_IN_AU_PER_DAY = 1000.0 * DAY / AU
"""One km/s, au/d."""
