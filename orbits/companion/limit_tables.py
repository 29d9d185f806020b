"""Limits as tables with units: against separation, over the field, completeness, night by night."""

import astropy.units as u
import numpy as np
from astropy.table import Table

from .limit_result import ROUTES, Limits

CONTRASTS = 20
"""Rows of completeness for each separation, evenly spaced in magnitude."""


def curve_table(
    limits: Limits, *, parallax: u.Quantity | None = None, magnitude: float | None = None
) -> Table:
    """One row for each annulus of separation; contrasts and magnitudes are inf where none.

    Parameters
    ----------
    parallax : Quantity, optional
        Adds the separation in au.
    magnitude : float, optional
        Of the primary, apparent, in the band of the data; with the parallax it adds the absolute
        magnitude of a companion at each limit.
    """
    columns = limits.curve()
    table = Table(meta=_meta(limits))
    table["separation"] = columns.pop("separation") * u.mas
    if parallax is not None:
        table["separation_au"] = table["separation"].quantity.to_value(u.mas) * u.au
        table["separation_au"] /= parallax.to_value(u.mas)
    for name, contrast in columns.items():
        table[name] = contrast
    for name, contrast in columns.items():
        table[f"delta_mag_{name}"] = delta_magnitude(contrast) * u.mag
    if parallax is not None and magnitude is not None:
        primary = magnitude + 5 * np.log10(parallax.to_value(u.mas) / 100)
        for name, contrast in columns.items():
            table[f"absolute_mag_{name}"] = (primary + delta_magnitude(contrast)) * u.mag
    return table


def map_table(limits: Limits) -> Table:
    """One row for each place of the field."""
    x, y = np.meshgrid(limits.axis, limits.axis)
    table = Table({"x": x.ravel() * u.mas, "y": y.ravel() * u.mas}, meta=_meta(limits))
    for name, values in {**limits.maps, "expected": limits.expected}.items():
        table[name] = values.ravel()
    return table


def completeness_table(limits: Limits) -> Table:
    """Share of companions that the search finds, by separation and contrast."""
    critical = limits.critical[np.isfinite(limits.critical)]
    low, high = np.quantile(critical, [0.001, 0.999]) if critical.size else (1e-4, 1.0)
    contrast = np.geomspace(low, min(high, 1.0), CONTRASTS)
    separation = limits.separations
    found = np.array([limits.found(one, contrast) for one in separation])
    return Table(
        {
            "separation": np.repeat(separation, CONTRASTS) * u.mas,
            "contrast": np.tile(contrast, len(separation)),
            "delta_mag": np.tile(delta_magnitude(contrast), len(separation)) * u.mag,
            "found": found.ravel(),
        },
        meta=_meta(limits),
    )


def nights_table(limits: Limits) -> Table:
    """One row for each night, and a last one for all together: medians over the whole field."""
    every = [*limits.each, limits] if limits.each else [limits]
    nights = [one.nights[0] if len(one.nights) == 1 else (np.nan, "all") for one in every]
    table = Table(meta=_meta(limits))
    table["mjd"] = np.array([mjd for mjd, _ in nights]) * u.day
    table["instrument"] = [instrument for _, instrument in nights]
    for route in ROUTES:
        medians = [np.median(one.maps[route]) if route in one.maps else np.nan for one in every]
        table[route] = np.array(medians)
        table[f"delta_mag_{route}"] = delta_magnitude(np.array(medians)) * u.mag
    table["companion_removed"] = [any(one is not None for one in each.removed) for each in every]
    return table


def delta_magnitude(contrast: np.ndarray) -> np.ndarray:
    """Magnitudes by which a companion is fainter; -inf where any contrast is allowed."""
    with np.errstate(divide="ignore"):
        return -2.5 * np.log10(contrast)


def _meta(limits: Limits) -> dict[str, object]:
    return {
        "target": limits.target,
        "confidence": limits.confidence,
        "completeness": limits.completeness,
        "false_alarm_probability": limits.false_alarm,
        "threshold": float(limits.threshold),
    }
