"""The joint distribution of elements and masses: pairs below, correlations above the diagonal."""

from typing import TYPE_CHECKING

import numpy as np

from . import style

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from ..fitting.solution import Solution

SHOWN = {
    "period_d": "period (d)",
    "eccentricity": "eccentricity",
    "semimajor_axis_mas": "axis (mas)",
    "inclination_deg": "incl. (deg)",
    "node_deg": "node (deg)",
    "k1_kms": "$K_1$ (km/s)",
    "k2_kms": "$K_2$ (km/s)",
    "parallax_mas": "parallax (mas)",
    "primary_msun": r"$M_1$ (M$_\odot$)",
    "companion_msun": r"$M_2$ (M$_\odot$)",
    "total_msun": r"$M$ (M$_\odot$)",
}
MOST = 7
"""Quantities in one picture, masses and parallax before amplitudes and node."""
LAST = ("total_msun", "k2_kms", "k1_kms", "node_deg")


@style.styled
def draw_joint(solution: "Solution", *, columns: int = 2) -> "Figure":
    """Draw samples of pairs of quantities, their histograms, and their correlations.

    Solutions keep their colours apart; the correlations are those of the most probable one.
    """
    names = _names(solution.samples)
    count = len(names)
    drawing = style.figure(columns, height_mm=style.COLUMN_MM[columns])
    grid = drawing.subplots(count, count, squeeze=False, gridspec_kw={"wspace": 0, "hspace": 0})
    correlation = solution.correlation
    for i, low in enumerate(names):
        for j, left in enumerate(names):
            axes = grid[i, j]
            axes.set_xticks([])
            axes.set_yticks([])
            if i == j:
                _histogram(axes, solution, low)
            elif i > j:
                _pair(axes, solution.samples, left, low)
            else:
                _correlation(axes, correlation, low, left)
            if i == count - 1:
                axes.set_xlabel(SHOWN[left], fontsize=6)
            if j == 0:
                axes.set_ylabel(SHOWN[low], fontsize=6)
    drawing.suptitle(style.title(solution.name, columns))
    return drawing


def _names(samples: "pd.DataFrame") -> list[str]:
    names = [name for name in SHOWN if name in samples and samples[name].std() > 0]
    for name in LAST:
        if len(names) > MOST and name in names:
            names.remove(name)
    return names[:MOST]


def _histogram(axes: "Axes", solution: "Solution", name: str) -> None:
    """The distribution of one quantity, its 68.3 per cent interval shaded, numbers above."""
    values = solution.samples[name]
    edges = np.histogram_bin_edges(values, bins=min(40, max(10, int(np.sqrt(len(values))))))
    for label, part in solution.samples.groupby("solution"):
        colour, _ = style.SERIES[int(label) % len(style.SERIES)]
        axes.hist(part[name], bins=edges, histtype="step", color=colour, lw=0.9)
    median, plus, minus = solution.summary[name]
    axes.axvspan(median - minus, median + plus, color=style.CLOUD, alpha=0.4, lw=0)
    axes.axvline(median, color=style.QUIET, lw=0.6)
    digits = max(1 - int(np.floor(np.log10(max(min(plus, minus), 1e-12)))), 0)
    axes.set_title(
        f"{median:.{digits}f}\n$^{{+{plus:.{digits}f}}}_{{-{minus:.{digits}f}}}$",
        fontsize=6,
        loc="center",
        fontweight="normal",
        pad=2,
    )


def _pair(axes: "Axes", samples: "pd.DataFrame", left: str, low: str) -> None:
    for label, part in samples.groupby("solution"):
        colour, _ = style.SERIES[int(label) % len(style.SERIES)]
        axes.plot(part[left], part[low], ".", ms=1.2, alpha=0.35, mew=0, color=colour)


def _correlation(axes: "Axes", correlation: "pd.DataFrame", low: str, left: str) -> None:
    """A disc as large as the correlation, filled where it is positive, and its number."""
    for spine in axes.spines.values():
        spine.set_visible(False)
    if low not in correlation or left not in correlation:
        return
    value = float(correlation.loc[low, left])
    axes.scatter(
        [0.5],
        [0.5],
        s=500 * abs(value),
        facecolor=style.CLOUD if value > 0 else "none",
        edgecolor=style.CLOUD,
        transform=axes.transAxes,
    )
    words = f"{value:+.2f}".replace("-", "\N{MINUS SIGN}")
    axes.text(0.5, 0.5, words, transform=axes.transAxes, ha="center", va="center",
              fontsize=6)  # fmt: skip
