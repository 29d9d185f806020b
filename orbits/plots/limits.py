"""What a night excludes: limits against separation by three routes, and over the field."""

from typing import TYPE_CHECKING

import astropy.units as u
import numpy as np

from ..companion.limit_result import Limits
from ..companion.limit_tables import delta_magnitude
from . import style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_NAMES = {
    "recovered": "found blind",
    "profile": "chi-square difference",
    "published": "total chi-square of closure phases",
}
_SHADES = ("#0c1f33", "#1b4b73", "#7fa3bf", "#cfdde8", "#ffffff")
"""Dark where faint companions are excluded."""
_LEVELS = 8


@style.styled
def draw_limits(limits: Limits, *, parallax: u.Quantity | None = None) -> "Figure":
    """Draw the limits against separation, and those by recovery over the field.

    Thick lines are medians over the position angles, thin ones the worst of them. With a parallax
    the separations are given in au too.
    """
    drawing = style.figure(2, height_mm=80)
    curve, field = drawing.subplots(1, 2, width_ratios=(1.15, 1))
    _curve(curve, limits, parallax)
    _field(drawing, field, limits)
    handles, _ = curve.get_legend_handles_labels()
    style.legend_below(drawing, handles, columns=3)
    return drawing


def _curve(axes: "Axes", limits: Limits, parallax: u.Quantity | None) -> None:
    columns = limits.curve()
    x = columns["separation"]
    for (name, words), (colour, dashes) in zip(_NAMES.items(), style.SERIES, strict=False):
        if name not in limits.maps:
            continue
        for part, width in (("median", 1.6), ("worst", 0.7)):
            y = np.where(np.isfinite(columns[f"{name}_{part}"]), columns[f"{name}_{part}"], np.nan)
            label = words if part == "median" else None
            axes.plot(x, y, color=colour, ls=dashes, lw=width, label=label)
    axes.set_yscale("log")
    axes.grid(True)
    axes.set_xlim(0, limits.field)
    axes.set_xlabel("separation (mas)")
    axes.set_ylabel("contrast excluded (thick: median angle, thin: worst)")
    magnitude = axes.twinx()  # linear in magnitudes is logarithmic in contrast
    magnitude.set_ylim(*delta_magnitude(np.array(axes.get_ylim())))
    magnitude.set_ylabel("magnitudes fainter")
    title = f"{limits.target}, MJD {limits.nights[0][0]:.3f}"
    if len(limits.nights) > 1:
        title = f"{limits.target}, {len(limits.nights)} nights"
    if parallax is not None:
        mas = parallax.to_value(u.mas)
        au = axes.secondary_xaxis("top", functions=(lambda s: s / mas, lambda s: s * mas))
        au.set_xlabel("separation (au)")
    axes.set_title(title)


def _field(drawing: "Figure", axes: "Axes", limits: Limits) -> None:
    from matplotlib.colors import BoundaryNorm, LinearSegmentedColormap
    from matplotlib.ticker import MaxNLocator

    fainter = delta_magnitude(limits.maps["recovered"])
    seen = fainter[np.isfinite(fainter)]
    low, high = np.quantile(seen, [0.02, 1.0]) if seen.size else (0.0, 1.0)
    steps = MaxNLocator(_LEVELS).tick_values(low, max(high, low + 0.1))
    colours = LinearSegmentedColormap.from_list("limits", _SHADES[::-1])
    half = limits.axis[-1] + np.diff(limits.axis).mean() / 2
    image = axes.imshow(
        np.where(np.isfinite(fainter), fainter, -np.inf)[:, ::-1], origin="lower",
        extent=(half, -half, -half, half), cmap=colours, norm=BoundaryNorm(steps, colours.N),
        interpolation="nearest",
    )  # fmt: skip
    axes.plot(0, 0, marker=(6, 1, 0), ms=7, color=style.INK, mec="white", mew=0.6)
    for one in limits.removed:
        if one is not None:
            axes.plot(one.x_mas, one.y_mas, "o", ms=7, mfc="none", mec="white", mew=2.2)
            axes.plot(one.x_mas, one.y_mas, "o", ms=7, mfc="none", mec=style.DATUM, mew=1.2)
    axes.set_aspect("equal")
    axes.set_xlabel("East (mas)")
    axes.set_ylabel("North (mas)")
    axes.set_title(f"found in {100 * limits.completeness:g}% of trials")
    bar = drawing.colorbar(image, ax=axes, shrink=0.8, pad=0.02, extend="min")
    bar.set_label("magnitudes fainter")
    bar.outline.set_visible(False)
