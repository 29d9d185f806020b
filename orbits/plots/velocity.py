"""Velocity curves: both stars against phase from periastron, with the residuals beneath."""

from typing import TYPE_CHECKING

import numpy as np

from ..bundle import ONE_SIGMA, Bundle, Orbits
from ..velocities import Velocities
from . import style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_STARS = (
    ("primary", style.PRIMARY, "o"),
    ("companion", style.COMPANION, "s"),
    ("companion − primary", style.MARK, "^"),
)
_DIFFERENCE = 2
_MOST_DRAWS = 300


@style.styled
def draw_velocities(bundle: Bundle, *, columns: int = 1) -> "Figure":
    """Draw the velocity curve against phase from periastron, with the residuals beneath.

    Raises
    ------
    ValueError
        If neither k1 nor k2 of the bundle is known.
    """
    best = bundle.best
    stars = [star for star, k in enumerate((best.k1[0], best.k2[0])) if np.isfinite(k)]
    if not stars:
        raise ValueError(f"{bundle.name}: no velocity amplitude is known")
    measured = bundle.velocities
    if measured is not None and (measured.star == _DIFFERENCE).any():
        stars.append(_DIFFERENCE)
    drawing = style.figure(columns, height_mm=76 if measured is not None else 58)
    if measured is None:
        curve = drawing.add_subplot()
    else:
        curve, rest = drawing.subplots(2, 1, sharex=True, height_ratios=(3, 1.2))
        _velocity_residuals(rest, bundle)
    _velocity_curves(curve, bundle, stars)
    if measured is not None:
        _points(curve, best.phase(measured.mjd)[0], measured.velocity, measured)
    curve.set_title(style.title(bundle.name, columns))
    curve.set_ylabel("velocity (km/s)")
    curve.set_xlim(-0.02, 1.02)
    drawing.axes[-1 if measured is not None else 0].set_xlabel(phase_label(best))
    drawing.align_ylabels()
    style.legend_below(drawing, _velocity_key(bundle, stars), columns=3)
    return drawing


def phase_label(best: Orbits) -> str:
    """A circle has no periastron; its phase counts from the time that stands for it."""
    if best.eccentricity[0] > 0:
        return "phase from periastron"
    return "phase from the time of the elements"


def _velocity_curves(axes: "Axes", bundle: Bundle, stars: list[int]) -> None:
    """The curves of the best orbit, and the bands of the draws at the same times.

    At the same phases, each from a periastron of its own, the draws would seem to differ where
    errors of periastron and argument cancel. The times are those of the period amid the data.
    """
    phase = np.linspace(-0.02, 1.02, 801)
    period, periastron = bundle.best.period[0], bundle.best.periastron[0]
    middle = periastron if bundle.velocities is None else np.median(bundle.velocities.mjd)
    mjd = periastron + period * (phase + np.floor((middle - periastron) / period))
    axes.grid(True)
    if np.isfinite(bundle.best.gamma[0]):
        axes.axhline(bundle.best.gamma[0], color=style.QUIET, lw=0.6, ls=(0, (4, 2)))
    draws = bundle.thin(_MOST_DRAWS)
    for star in stars:
        _, colour, _ = _STARS[star]
        if len(draws):
            low, high = np.percentile(draws.curves(mjd)[star], ONE_SIGMA, axis=0)
            axes.fill_between(phase, low, high, color=colour, alpha=0.25, lw=0)
        axes.plot(phase, bundle.best.curves(mjd)[star][0], color=colour, lw=1.1)


def _velocity_residuals(axes: "Axes", bundle: Bundle) -> None:
    phase = bundle.best.phase(bundle.velocities.mjd)[0]
    axes.grid(True)
    axes.axhline(0, color=style.QUIET, lw=0.6)
    _points(axes, phase, bundle.velocity_residuals(), bundle.velocities)
    axes.set_ylabel("O − C (km/s)")


def _points(axes: "Axes", phase: np.ndarray, values: np.ndarray, measured: Velocities) -> None:
    """Points with error bars, in the colour and shape of their star."""
    look = {"ls": "", "ms": 3.2, "mec": "white", "mew": 0.4, "elinewidth": 0.7}
    for star, (_, colour, marker) in enumerate(_STARS):
        mine = measured.star == star
        bars = measured.error[mine]
        axes.errorbar(phase[mine], values[mine], bars, color=colour, marker=marker, **look)


def _velocity_key(bundle: Bundle, stars: list[int]) -> list:
    from matplotlib.lines import Line2D

    marked = bundle.velocities is not None
    handles = [
        Line2D([], [], color=colour, marker=marker if marked else "", ms=3.2, lw=1.1, label=name)
        for star, (name, colour, marker) in enumerate(_STARS)
        if star in stars
    ]
    if np.isfinite(bundle.best.gamma[0]):
        handles.append(
            Line2D([], [], color=style.QUIET, lw=0.6, ls=(0, (4, 2)), label="centre of mass")
        )
    return handles
