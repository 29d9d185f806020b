"""What a search saw over its field: the significance of a companion at each position."""

from typing import TYPE_CHECKING

import numpy as np

from ..companion.result import Candidate, SearchResult
from ..positions import error_ellipse
from . import style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_CROWDED = 6.0
"""sigma; a field whose median is above it is full of the companion's own traces."""
_SHADES = ("#ffffff", "#cfdde8", "#7fa3bf", "#1b4b73", "#0c1f33")
_LEVELS = 9
"""Steps of the shading: few enough to be told apart in print."""


@style.styled
def draw_field(result: SearchResult, *, columns: int = 1) -> "Figure":
    """Draw the local significance over the field, North up and East left.

    It is the root of the chi-square gain, scaled as the errors are. A ring marks the solution and
    smaller numbered ones the alternatives; beside it the neighbourhood of the solution with its
    error ellipse of one sigma, enlarged where it would not be seen. Where a bright companion makes
    most of the field gain, the shading begins at the median.
    """
    wide = columns == 2
    drawing = style.figure(columns, height_mm=92 if wide else 158)
    grid = drawing.add_gridspec(1, 2) if wide else drawing.add_gridspec(2, 1)
    whole, close = drawing.add_subplot(grid[0]), drawing.add_subplot(grid[1])
    sigma = np.sqrt(np.maximum(result.maps.gain, 0.0)) / result.best.error_scale
    image = _shade(whole, result, sigma, smooth=False)
    _shade(close, result, sigma, smooth=True)
    bar = drawing.colorbar(image, ax=whole, shrink=0.8, pad=0.02, spacing="proportional")
    words = "local significance (sigma)"
    if image.norm.vmin > 0:
        words += f"; white below {image.norm.boundaries[1]:g}"
    bar.set_label(words)
    bar.outline.set_visible(False)
    whole.set_title(f"{result.target}, MJD {result.mjd:.3f}")
    reach = result.maps.grid.half * result.maps.grid.step
    whole.set(xlim=(reach, -reach), ylim=(-reach, reach))
    _mark(whole, result)
    _zoom(close, result)
    return drawing


def _shade(axes: "Axes", result: SearchResult, sigma: np.ndarray, *, smooth: bool):
    """Shade a map in steps, the highest the darkest."""
    from matplotlib.colors import BoundaryNorm, LinearSegmentedColormap
    from matplotlib.ticker import MaxNLocator

    grid = result.maps.grid
    colours = LinearSegmentedColormap.from_list("field", _SHADES)
    median = float(np.median(sigma))
    lowest = median if median > _CROWDED else 0.0
    steps = MaxNLocator(_LEVELS).tick_values(lowest, max(float(sigma.max()), lowest + 1.0))
    steps = steps[steps >= lowest]
    edge = (grid.half + 0.5) * grid.step
    image = axes.imshow(
        sigma[:, ::-1], origin="lower", extent=(edge, -edge, -edge, edge), cmap=colours,
        norm=BoundaryNorm(steps, colours.N), interpolation="bicubic" if smooth else "nearest",
        interpolation_stage="data",
    )  # fmt: skip
    axes.plot(0, 0, marker=(6, 1, 0), ms=7, color=style.INK, mec="white", mew=0.6)
    axes.set_aspect("equal")
    axes.set_xlabel("East (mas)")
    axes.set_ylabel("North (mas)")
    return image


def _mark(axes: "Axes", result: SearchResult) -> None:
    for number, one in enumerate((result.best, *result.alternatives[:9])):
        size, colour = (11, style.DATUM) if number == 0 else (7, style.COMPANION)
        axes.plot(one.x_mas, one.y_mas, "o", ms=size, mfc="none", mec="white", mew=2.2)
        axes.plot(one.x_mas, one.y_mas, "o", ms=size, mfc="none", mec=colour, mew=1.2)
        if number:
            axes.annotate(
                str(number + 1), (one.x_mas, one.y_mas), xytext=(5, 4),
                textcoords="offset points", color=style.INK, fontsize=6,
                bbox={"boxstyle": "round,pad=0.15", "fc": "white", "ec": "none", "alpha": 0.8},
            )  # fmt: skip


def _zoom(axes: "Axes", result: SearchResult) -> None:
    """Show a few fringes around the solution."""
    from matplotlib.patches import Ellipse

    best, grid = result.best, result.maps.grid
    reach = 12 * grid.step
    axes.set(
        xlim=(best.x_mas + reach, best.x_mas - reach), ylim=(best.y_mas - reach, best.y_mas + reach)
    )
    major, minor, angle = (float(v) for v in error_ellipse(best.covariance_xy_mas2))
    enlarged = 10 ** max(0, int(np.ceil(np.log10(0.03 * reach / major))))
    size = 2 * major * enlarged, 2 * minor * enlarged
    # The patch's angle runs from East, a position angle from North.
    for colour, width in (("white", 2.4), (style.DATUM, 1.2)):
        axes.add_patch(
            Ellipse(
                (best.x_mas, best.y_mas), *size, angle=90 - angle, fc="none", ec=colour, lw=width
            )
        )
    title = _place(best)
    if enlarged > 1:
        title += f"\nerror ellipse drawn {enlarged} times as large"
    axes.set_title(title, fontweight="normal")


def _place(one: Candidate) -> str:
    return (
        f"{one.separation_mas:.3f} mas, PA {one.position_angle_deg:.2f}°\n"
        f"contrast {one.contrast:.3g}, {one.significance_sigma:.1f} sigma"
    )
