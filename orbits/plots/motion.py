"""Where the companion is in time: separation and position angle against date, and residuals."""

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from ..bundle import ONE_SIGMA, Bundle, Orbits
from ..positions import Positions, position_angle
from . import style
from .velocity import phase_label

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_MOST_DRAWS = 300
_MOST_TURNS = 40
"""More periods run together on paper, and are laid on top of each other."""
_LONG = 1500.0
"""d; a longer stretch of time is labelled in years, a shorter one in days."""


@style.styled
def draw_motion(
    bundle: Bundle, *, start: float | None = None, end: float | None = None, columns: int = 1
) -> "Figure":
    """Draw separation and position angle against date, with the one-sigma band of the draws.

    `start` and `end` are MJD TDB; without them the stretch holds the positions and one period
    after the first of them, or one period from periastron where there are no positions. A stretch
    of more than 40 periods is folded to one: the period in its middle, and all positions at their
    phases.
    """
    first, last = _stretch(bundle, start, end)
    folded = last - first > _MOST_TURNS * bundle.best.period[0]
    if folded:
        bundle, first, last = _fold(bundle, first, last)
    mjd = _fine_times(bundle.best, first, last)
    x, y = bundle.best.offsets(mjd)
    drawing = style.figure(columns, height_mm=84)
    upper, lower = drawing.subplots(2, 1, sharex=True)
    if folded:
        dates, label = (mjd - first) / (last - first), phase_label(bundle.best)
    else:
        dates, label = _dates(mjd, mjd)
    angle = np.unwrap(position_angle(x[0], y[0]), period=360)
    many_turns = np.ptp(angle) > 800
    draws = bundle.thin(_MOST_DRAWS)
    if len(draws):
        cloud_x, cloud_y = draws.offsets(mjd)
        low, high = np.percentile(np.hypot(cloud_x, cloud_y), ONE_SIGMA, axis=0)
        upper.fill_between(dates, low, high, color=style.CLOUD, alpha=0.6, lw=0)
        # The angle of each draw on the turn nearest to that of the best orbit.
        off = (position_angle(cloud_x, cloud_y) - angle + 180) % 360 - 180
        low, high = angle + np.percentile(off, ONE_SIGMA, axis=0)
        if not many_turns:
            lower.fill_between(dates, low, high, color=style.CLOUD, alpha=0.6, lw=0)
    upper.plot(dates, np.hypot(x[0], y[0]), color=style.CURVE)
    lower.plot(dates, _broken(angle % 360) if many_turns else angle, color=style.CURVE)
    if bundle.positions is not None:
        _measured(upper, lower, bundle.positions, mjd, dates, angle, wrapped=many_turns)
    for axes in (upper, lower):
        axes.grid(True)
    upper.set_title(style.title(bundle.name, columns))
    upper.set_ylabel("separation (mas)")
    lower.set_ylabel("position angle (deg)")
    _mark_angles(lower, np.ptp(angle), wrapped=many_turns)
    lower.set_xlabel(label)
    lower.set_xlim(dates[0], dates[-1])
    drawing.align_ylabels()
    return drawing


@style.styled
def draw_residuals(bundle: Bundle, *, columns: int = 1) -> "Figure":
    """Draw what is left of the positions when the best orbit is taken away, against date.

    Raises
    ------
    ValueError
        If the bundle has no positions.
    """
    positions = bundle.positions
    if positions is None:
        raise ValueError(f"{bundle.name}: there are no positions to take residuals of")
    rest = bundle.position_residuals()
    errors = np.sqrt(np.diagonal(positions.covariance, axis1=1, axis2=2))
    dates, label = _dates(positions.mjd, positions.mjd)
    drawing = style.figure(columns, height_mm=70)
    panels = drawing.subplots(2, 1, sharex=True)
    for axes, column, name in zip(panels, (0, 1), ("East", "North"), strict=True):
        axes.grid(True)
        axes.axhline(0, color=style.QUIET, lw=0.6)
        _points(axes, dates, rest[:, column], errors[:, column], positions.weight)
        axes.set_ylabel(f"{name} O − C (mas)")
    panels[0].set_title(style.title(bundle.name, columns))
    panels[1].set_xlabel(label)
    drawing.align_ylabels()
    return drawing


def _stretch(bundle: Bundle, start: float | None, end: float | None) -> tuple[float, float]:
    period, periastron = bundle.best.period[0], bundle.best.periastron[0]
    seen = bundle.positions.mjd if bundle.positions is not None else np.array([periastron])
    margin = 0.02 * period
    first = seen.min() - margin if start is None else start
    last = max(seen.max(), seen.min() + period) + margin if end is None else end
    if not last > first:
        raise ValueError(f"the end must come after the start, got MJD {first} and {last}")
    return first, last


def _fold(bundle: Bundle, first: float, last: float) -> tuple[Bundle, float, float]:
    """The period in the middle of a stretch, with all positions of the stretch brought into it."""
    period, periastron = bundle.best.period[0], bundle.best.periastron[0]
    start = periastron + period * np.floor(((first + last) / 2 - periastron) / period)
    positions = bundle.positions
    if positions is not None:
        positions = positions.select((positions.mjd >= first) & (positions.mjd <= last))
        mjd = start + (positions.mjd - start) % period
        positions = replace(positions, mjd=mjd)
    return replace(bundle, positions=positions), start, start + period


def _fine_times(best: Orbits, first: float, last: float) -> np.ndarray:
    """(m,) times from `first` to `last`, close together where the companion is fast.

    Of each period there are 400, at equal steps of the eccentric anomaly: the shape of the curve
    at periastron is then as smooth as anywhere.
    """
    e, period, periastron = best.eccentricity[0], best.period[0], best.periastron[0]
    turns = (np.array([first, last]) - periastron) / period
    anomaly = 2 * np.pi * np.arange(400 * np.floor(turns[0]), 400 * np.ceil(turns[1])) / 400
    mjd = periastron + period * (anomaly - e * np.sin(anomaly)) / (2 * np.pi)
    return np.concatenate([[first], mjd[(mjd > first) & (mjd < last)], [last]])


def _dates(mjd: np.ndarray, whole: np.ndarray) -> tuple[np.ndarray, str]:
    """Times in years where `whole` is long, else in days from a round day; and their label."""
    if np.ptp(whole) > _LONG:
        return 2000.0 + (mjd - 51544.5) / 365.25, "date (year)"
    origin = 100 * np.floor(whole.min() / 100)
    return mjd - origin, f"MJD − {origin:.0f}"


def _mark_angles(axes: "Axes", extent: float, *, wrapped: bool) -> None:
    """Ticks at round parts of a turn, labelled from 0 to 360 deg."""
    if extent > 60:
        from matplotlib.ticker import MultipleLocator

        steps = (15, 30, 45, 90, 180)
        step = 90 if wrapped else next(step for step in steps if extent < 6.5 * step)
        axes.yaxis.set_major_locator(MultipleLocator(step))
    if not wrapped:
        axes.yaxis.set_major_formatter(lambda value, _: f"{value % 360:g}")


def _broken(angle: np.ndarray) -> np.ndarray:
    """The angle with a gap wherever it leaps from 360 to 0 or back."""
    return np.where(np.abs(np.diff(angle, prepend=angle[0])) > 180, np.nan, angle)


def _measured(
    upper: "Axes",
    lower: "Axes",
    positions: Positions,
    mjd: np.ndarray,
    dates: np.ndarray,
    angle: np.ndarray,
    *,
    wrapped: bool,
) -> None:
    inside = (positions.mjd >= mjd[0]) & (positions.mjd <= mjd[-1])
    if not inside.any():
        return
    seen = positions.select(inside)
    along, error = seen.polar_errors
    # The turn nearest to the curve.
    near = np.interp(seen.mjd, mjd, angle)
    turned = near + (seen.position_angle - near + 180) % 360 - 180
    turned = turned % 360 if wrapped else turned
    place = np.interp(seen.mjd, mjd, dates)
    _points(upper, place, seen.separation, along, seen.weight)
    _points(lower, place, turned, error, seen.weight)


def _points(axes: "Axes", x, y, error, weight: np.ndarray) -> None:
    """Points with error bars; the alternatives of a night are paler."""
    for probable in (True, False):
        which = (weight >= 0.5) == probable
        axes.errorbar(
            x[which],
            y[which],
            yerr=error[which],
            ls="",
            marker="o",
            ms=3.2,
            color=style.DATUM,
            mec="white",
            mew=0.4,
            elinewidth=0.7,
            alpha=1.0 if probable else 0.35,
        )
