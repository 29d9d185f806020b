"""An epoch's data against the model: each baseline and triangle with its residuals."""

from collections.abc import Iterator
from typing import TYPE_CHECKING

import numpy as np

from ..binary import model
from ..companion.fit import Fit
from ..companion.result import SearchResult
from ..observation import Observable, Observation
from ..sampling import Sampling
from . import style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_ACROSS = 4
_MOST = 24
"""Panels on one picture; further baselines and triangles are left out, and that is said."""


@style.styled
def draw_epoch(observation: Observation, result: SearchResult) -> "Figure":
    """Draw squared visibilities per baseline, then closure phases per triangle.

    Each panel shows all exposures against wavelength: data, the best model (line), the model
    without companion (dashes), and underneath the residuals in units of their errors.
    """
    panels = list(_panels(observation))
    shown = panels[:_MOST]
    rows = -(-len(shown) // _ACROSS)
    drawing = style.figure(2, height_mm=12 + 44 * rows)
    grid = drawing.add_gridspec(rows, _ACROSS)
    predicted = [_predict(observation, fit) for fit in (result.best.fit, result.null)]
    residual = _residual(observation, predicted[0])
    for number, (label, phase, which) in enumerate(shown):
        cell = grid[number // _ACROSS, number % _ACROSS].subgridspec(2, 1, height_ratios=(3, 1))
        top = drawing.add_subplot(cell[0])
        below = drawing.add_subplot(cell[1], sharex=top)
        _panel(top, below, observation, label, phase, which, predicted, residual)
        if number % _ACROSS == 0 or phase != shown[number - 1][1]:
            top.set_ylabel("closure phase (deg)" if phase else "V²")
            below.set_ylabel("σ")
        if number // _ACROSS == rows - 1:
            below.set_xlabel("wavelength (µm)")
    style.legend_below(drawing, _key(), columns=3)
    title = f"{observation.target}, MJD {observation.mjd:.3f}"
    if len(panels) > len(shown):
        title += f": {len(shown)} of {len(panels)} baselines and triangles"
    drawing.suptitle(title, x=0.01, ha="left", fontsize=7.5, fontweight="bold", color=style.INK)
    return drawing


def _key() -> list:
    from matplotlib.lines import Line2D

    return [
        Line2D([], [], marker="o", ms=2.5, ls="", color=style.DATUM, label="data, later paler"),
        Line2D([], [], color=style.CURVE, label="model"),
        Line2D([], [], color=style.QUIET, lw=0.7, ls=(0, (2, 1.5)), label="without the companion"),
    ]


def _panels(observation: Observation) -> Iterator[tuple[str, bool, np.ndarray]]:
    """(label, is a closure phase, indices of the data) of each baseline and triangle."""
    for phase, table in ((False, observation.v2), (True, observation.t3)):
        if not len(table):
            continue
        _, group = np.unique(table.stations, axis=0, return_inverse=True)
        for g in range(group.max() + 1):
            which = np.flatnonzero(group.ravel() == g)
            yield _label(observation, table, which), phase, which


def _label(observation: Observation, table: Observable, which: np.ndarray) -> str:
    stations = table.stations[which[0]]
    if (stations < 0).any() or not observation.stations:
        return f"{table.baselines[which].mean():.0f} m"
    names = "–".join(observation.stations[s] for s in stations)
    return f"{names}, {table.baselines[which].mean():.3g} m"


def _predict(observation: Observation, fit: Fit) -> np.ndarray:
    offsets = [fit.values[i] for i, n in enumerate(fit.scene.names) if n[:1] in "xy"]
    reach = 1.5 * max(map(abs, offsets), default=0.0)
    return model(fit.scene, fit.values, Sampling.of(observation, radius=reach))[0]


def _residual(observation: Observation, predicted: np.ndarray) -> np.ndarray:
    """(n,) data minus model over the error, phases wrapped."""
    v2, t3 = observation.v2, observation.t3
    n = len(v2)
    phase = t3.value - predicted[n : n + len(t3)]
    phase = (phase + np.pi) % (2 * np.pi) - np.pi
    return np.concatenate([(v2.value - predicted[:n]) / v2.error, phase / t3.error])


def _panel(
    top: "Axes", below: "Axes", observation, label, phase, which, predicted, residual
) -> None:
    """One baseline or triangle; exposures follow each other from dark to light."""
    table = observation.t3 if phase else observation.v2
    at = which + (len(observation.v2) if phase else 0)
    unit = 180 / np.pi if phase else 1.0
    rows = np.unique(table.row[which])
    for number, row in enumerate(rows):
        mine = table.row[which] == row
        order = np.argsort(table.wavelength[which[mine]])
        data, place = which[mine][order], at[mine][order]
        wave = table.wavelength[data] * 1e6
        fade = 1 - 0.7 * number / max(len(rows) - 1, 1)
        line = "-" if len(data) > 1 else "none"
        marker = "none" if len(data) > 1 else "_"
        value, error = table.value[data] * unit, table.error[data] * unit
        top.errorbar(
            wave, value, error, fmt="o", ms=1.6, color=style.DATUM, alpha=fade, elinewidth=0.5
        )
        top.plot(wave, predicted[1][place] * unit, ls=(0, (2, 1.5)), marker=marker,
                 color=style.QUIET, lw=0.7)  # fmt: skip
        top.plot(wave, predicted[0][place] * unit, ls=line, marker=marker, color=style.CURVE,
                 lw=1.0, zorder=3)  # fmt: skip
        below.plot(wave, residual[place], "o", ms=1.4, color=style.DATUM, alpha=fade)
    seen = np.concatenate(
        [s * table.error[which] + table.value[which] for s in (-1, 1)] + [predicted[0][at]]
    )
    # The model without companion may leave the picture: it jumps by 180 deg at a null.
    room = 0.06 * np.ptp(seen) or 0.1
    top.set_ylim((seen.min() - room) * unit, (seen.max() + room) * unit)
    top.set_title(label, fontweight="normal", fontsize=6.5)
    top.tick_params(labelbottom=False)
    largest = max(3.0, float(np.abs(residual[at]).max()) * 1.15)
    below.set_ylim(-largest, largest)
    below.axhline(0, color=style.QUIET, lw=0.6)
    below.axhspan(-1, 1, color=style.GRID, lw=0)
    for axes in (top, below):
        axes.tick_params(labelsize=5.5)
        axes.margins(x=0.04)
