"""The contrast of a companion against wavelength."""

from typing import TYPE_CHECKING

import numpy as np

from ..companion.spectrum import ContrastSpectrum
from . import style

if TYPE_CHECKING:
    from matplotlib.figure import Figure

_MOST_MARKS = 60
"""With more channels than this, lines and bands stand for points and bars."""


@style.styled
def draw_spectrum(spectrum: ContrastSpectrum, *, columns: int = 1) -> "Figure":
    """Draw contrast with one-sigma errors, instrument by instrument.

    The band behind is the error that all channels share: the mean covariance between them.
    """
    drawing = style.figure(columns, height_mm=62)
    axes = drawing.add_subplot()
    axes.grid(True)
    names = list(dict.fromkeys(spectrum.instrument.tolist()))
    for name, (colour, dashes) in zip(names, style.SERIES * len(names), strict=False):
        mine = np.flatnonzero(spectrum.instrument == name)
        mine = mine[np.argsort(spectrum.wavelength[mine])]
        wave, value = 1e6 * spectrum.wavelength[mine], 100 * spectrum.contrast[mine]
        error = 100 * spectrum.error[mine]
        axes.plot(wave, value, color=colour, ls=dashes, lw=0.7)
        if mine.size > _MOST_MARKS:
            axes.fill_between(wave, value - error, value + error, color=colour, alpha=0.25, lw=0)
        else:
            axes.errorbar(wave, value, error, fmt="o", color=colour, ms=3, lw=0.8, label=name)
    k = len(spectrum.contrast)
    if k > 1:
        between = (spectrum.covariance.sum() - np.trace(spectrum.covariance)) / (k * (k - 1))
        shared = 100 * np.sqrt(max(between, 0.0))
        level = 100 * np.average(spectrum.contrast, weights=spectrum.error**-2)
        axes.axhspan(level - shared, level + shared, color=style.GRID, zorder=0, lw=0)
    axes.set_xlabel("wavelength (µm)")
    axes.set_ylabel("contrast (%)")
    where = np.hypot(spectrum.x_mas, spectrum.y_mas)
    axes.set_title(f"{spectrum.target}: companion at {where:.2f} mas")
    if len(names) > 1:
        handles, _ = axes.get_legend_handles_labels()
        style.legend_below(drawing, handles, columns=3)
    return drawing
