"""Masses, sizes and parallaxes from elements and velocity amplitudes.

All functions take plain numbers or arrays: period in d, velocity semi-amplitudes in km/s, angles
in rad, semimajor axes in mas or au, parallaxes in mas. Masses are in nominal solar masses.
The formulas are Kepler's third law and the projection of circular motion; see e.g. Torres,
Andersen & Gimenez (2010, A&ARv 18, 67). Compiled code may call them, with plain numbers.
"""

import math

import numpy as np
from numba.extending import register_jitable

from .constants import GM_SUN_AU_DAY, KMS_IN_AU_PER_DAY


@register_jitable
def projected_axis(period, eccentricity, k):
    """Semimajor axis times sin i, au, of the orbit whose velocity semi-amplitude is `k`."""
    minor = np.sqrt((1 - eccentricity) * (1 + eccentricity))
    return k * KMS_IN_AU_PER_DAY * period / (2 * math.pi) * minor


@register_jitable
def kepler_mass(period, axis):
    """Total mass from the semimajor axis of the relative orbit, au."""
    return 4 * math.pi**2 / GM_SUN_AU_DAY * axis**3 / period**2


def kepler_axis(period, total):
    """Semimajor axis of the relative orbit, au, from the total mass."""
    return np.cbrt(total * GM_SUN_AU_DAY / (4 * math.pi**2) * np.square(period))


@register_jitable
def total_mass(period, semimajor_axis, parallax):
    """Total mass from a visual orbit and the parallax."""
    return kepler_mass(period, semimajor_axis / parallax)


@register_jitable
def double_lined_axis(period, eccentricity, inclination, k1, k2):
    """Semimajor axis of the relative orbit, au, from both velocity curves."""
    return projected_axis(period, eccentricity, k1 + k2) / np.sin(inclination)


@register_jitable
def double_lined_masses(period, eccentricity, inclination, k1, k2):
    """Masses of primary and companion from both velocity curves."""
    total = kepler_mass(period, double_lined_axis(period, eccentricity, inclination, k1, k2))
    return total * (k2 / (k1 + k2)), total * (k1 / (k1 + k2))


@register_jitable
def orbital_parallax(period, eccentricity, inclination, k1, k2, semimajor_axis):
    """Parallax, mas, from both velocity curves and the apparent semimajor axis, mas."""
    return semimajor_axis / double_lined_axis(period, eccentricity, inclination, k1, k2)


@register_jitable
def single_lined_masses(period, eccentricity, inclination, k1, semimajor_axis, parallax):
    """Masses of primary and companion from the primary's velocities and a parallax.

    The share of the companion in the total mass is the share of the primary's orbit in the
    relative one; it must come out below 1 for the data to be consistent.
    """
    axis = semimajor_axis / parallax
    total = kepler_mass(period, axis)
    share = projected_axis(period, eccentricity, k1) / (axis * np.sin(inclination))
    return total * (1 - share), total * share


@register_jitable
def mass_function(period, eccentricity, k):
    """(M_other sin i)**3 / M_total**2, in solar masses, from the velocity semi-amplitude `k`."""
    return kepler_mass(period, projected_axis(period, eccentricity, k))


def amplitudes(period, eccentricity, inclination, primary, companion):
    """Velocity semi-amplitudes of primary and companion, km/s, from their masses."""
    total = primary + companion
    along = kepler_axis(period, total) * np.sin(inclination)
    scale = along / projected_axis(period, eccentricity, 1.0)
    return scale * companion / total, scale * primary / total
