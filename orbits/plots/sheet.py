"""Contact sheets: many orbits at a glance, each on its own scale."""

from collections.abc import Sequence
from typing import TYPE_CHECKING

from ..bundle import Bundle
from . import style
from .sky import draw_sky_on

if TYPE_CHECKING:
    from matplotlib.figure import Figure

ACROSS, DOWN = 4, 5
PAGE = ACROSS * DOWN
"""Orbits on one sheet."""


@style.styled
def draw_sheet(bundles: Sequence[Bundle]) -> "Figure":
    """Draw up to `PAGE` orbits side by side; North is up and East left in all of them.

    The width of each field and the period stand under the name.
    """
    if not 0 < len(bundles) <= PAGE:
        raise ValueError(f"a sheet holds 1 to {PAGE} orbits, got {len(bundles)}")
    rows = -(-len(bundles) // ACROSS)
    side = style.COLUMN_MM[2] / ACROSS
    drawing = style.figure(2, height_mm=rows * (side + 7))
    panels = drawing.subplots(rows, ACROSS, squeeze=False).ravel()
    for axes, bundle in zip(panels, bundles, strict=False):
        width = draw_sky_on(axes, [bundle], small=True)
        axes.set_title(style.literal(_short(bundle.name)), fontsize=6.5)
        axes.set_xlabel(f"{width} wide, P {_period(bundle.best.period[0])}", fontsize=6)
    for axes in panels[len(bundles) :]:
        axes.set_axis_off()
    return drawing


def _short(name: str) -> str:
    return name if len(name) <= 26 else f"{name[:25]}…"


def _period(days: float) -> str:
    return f"{days:.3g} d" if days < 1000 else f"{days / 365.25:.3g} yr"
