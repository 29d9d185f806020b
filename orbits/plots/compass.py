"""Compass and scale bar of a map of the sky, and the corners where they cover nothing."""

from collections.abc import Callable
from typing import TYPE_CHECKING

import numpy as np

from . import style

if TYPE_CHECKING:
    from matplotlib.axes import Axes

Field = tuple[np.ndarray, np.ndarray]
"""Lowest and highest East offset, and the same of North."""
Corner = tuple[float, float]
"""As fractions of the axes."""

_CORNERS = ((0.0, 1.0), (1.0, 1.0), (0.0, 0.0), (1.0, 0.0))
_CORNER_SIZE = 0.19
"""Side of the square that the compass or the scale bar needs, as a fraction of the axes."""


def free_corners(
    field: Field, busy: Callable[[float], np.ndarray], cloud: np.ndarray, *, wanted: int
) -> tuple[Field, list[Corner]]:
    """The field, widened if need be, and its `wanted` emptiest corners.

    Parameters
    ----------
    busy : callable
        Gives, for the width of the field, the points (m, 2) that may not be covered.
    cloud : ndarray of shape (m, 2)
        Points that had better not be covered.
    """
    for _ in range(8):
        crowd = _crowd(busy(float(np.ptp(field[0]))), field), _crowd(cloud, field)
        order = sorted(range(4), key=lambda corner: (crowd[0][corner], crowd[1][corner]))[:wanted]
        if crowd[0][order[-1]] == 0:
            break
        field = tuple(v.mean() + 1.08 * (v - v.mean()) for v in field)
    return field, [_CORNERS[number] for number in order]


def draw_compass(axes: "Axes", corner: Corner) -> None:
    """Arrows to North (up) and East (left) in a corner of the axes."""
    # The angle of the L lies away from its two tips, which point up and to the left.
    x = 0.16 if corner[0] == 0 else 0.95
    y = 0.84 if corner[1] == 1 else 0.05
    for tip, label, offset in (
        ((x, y + 0.09), "N", (0.0, 0.028)),
        ((x - 0.09, y), "E", (-0.028, 0.0)),
    ):
        axes.annotate(
            "",
            tip,
            (x, y),
            xycoords="axes fraction",
            textcoords="axes fraction",
            arrowprops={
                "arrowstyle": "-|>",
                "color": style.INK,
                "lw": 0.8,
                "shrinkA": 0,
                "shrinkB": 0,
                "mutation_scale": 6,
            },
            zorder=9,
        )
        axes.text(
            tip[0] + offset[0],
            tip[1] + offset[1],
            label,
            transform=axes.transAxes,
            ha="center",
            va="center",
            fontsize=6.5,
            zorder=9,
        )


def draw_scale_bar(axes: "Axes", corner: Corner, width: float, unit: str) -> None:
    """A bar of a round length, about an eighth of the field, whose `width` is in `unit`."""
    decade = 10.0 ** np.floor(np.log10(0.16 * width))
    length = max(step for step in (1, 2, 5) if step * decade <= 0.16 * width) * decade
    half = length / width / 2
    x = 0.1 if corner[0] == 0 else 0.9
    y = 0.94 if corner[1] == 1 else 0.05
    axes.plot(
        [x - half, x + half],
        [y, y],
        transform=axes.transAxes,
        color=style.INK,
        lw=1.6,
        solid_capstyle="butt",
        zorder=9,
    )
    axes.text(
        x,
        y + (0.02 if corner[1] == 0 else -0.02),
        f"{length:g} {unit}",
        transform=axes.transAxes,
        ha="center",
        va="bottom" if corner[1] == 0 else "top",
        fontsize=6.5,
        zorder=9,
    )


def _crowd(points: np.ndarray, field: Field) -> list[int]:
    """How many of the points (m, 2) lie in each corner of the field."""
    fraction = (points - [field[0][0], field[1][0]]) / np.ptp(field[0])
    fraction[:, 0] = 1 - fraction[:, 0]  # East is to the left
    return [
        int(np.sum(np.all(np.abs(fraction - corner) < _CORNER_SIZE, axis=1))) for corner in _CORNERS
    ]
