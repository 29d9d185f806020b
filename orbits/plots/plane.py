"""The orbit in its own plane, seen from above: the true ellipse with the primary in its focus."""

from typing import TYPE_CHECKING

import numpy as np

from ..bundle import Bundle
from . import style

if TYPE_CHECKING:
    from matplotlib.figure import Figure


@style.styled
def draw_plane(bundle: Bundle, *, columns: int = 1) -> "Figure":
    """Draw the true orbit, periastron to the right, the companion going counterclockwise.

    A circular orbit has no periastron to show; the place at the time that stands for it is on the
    right.

    The half of the orbit beyond the plane of the sky is drawn thin. Dots stand at equal steps of
    a twentieth of the period; with positions, the places at their dates are filled.
    """
    from matplotlib.lines import Line2D

    best = bundle.best
    e, a, w = best.eccentricity[0], best.semimajor_axis[0], np.radians(best.argument[0])
    unit, scale = style.angular_unit(2 * a)
    title = style.title(f"{bundle.name}: true orbit", 1)
    drawing = style.figure(columns, height_mm=style.COLUMN_MM[1] + 7 + 3 * title.count("\n"))
    axes = drawing.add_subplot()
    axes.set_aspect("equal", adjustable="datalim")
    axes.grid(True)
    true = np.linspace(0, 2 * np.pi, 1441)
    radius = scale * a * (1 - e * e) / (1 + e * np.cos(true))
    X, Y = radius * np.cos(true), radius * np.sin(true)
    beyond = np.sin(true + w) >= 0  # the companion has gone through the node where it recedes
    for part, width in ((beyond, 0.8), (~beyond, 1.7)):
        axes.plot(np.where(part, X, np.nan), np.where(part, Y, np.nan), color=style.CURVE, lw=width)
    nodes = np.array([-w, np.pi - w])
    reach = scale * a * (1 - e * e) / (1 + e * np.cos(nodes))
    axes.plot(
        reach * np.cos(nodes), reach * np.sin(nodes), color=style.QUIET, lw=0.7, ls=(0, (4, 2))
    )
    node = {"marker": "^", "ms": 5.5, "mec": style.INK}
    node["mfc"] = style.QUIET if bundle.ascending else "white"
    axes.plot(reach[0] * np.cos(nodes[0]), reach[0] * np.sin(nodes[0]), **node)
    steps = best.periastron[0] + best.period[0] * np.arange(20) / 20
    axes.plot(*_places(bundle, steps, scale), "o", ms=2.6, mfc="white", mec=style.CURVE)
    if bundle.positions is not None:
        places = _places(bundle, bundle.positions.mjd, scale)
        axes.plot(*places, "o", ms=3.2, color=style.DATUM, mec="white", mew=0.4)
    periastron = {"marker": "D", "ms": 4.2, "mfc": "white", "mec": style.INK}
    if e > 0:
        axes.plot(scale * a * (1 - e), 0, **periastron)
    axes.plot(0, 0, marker=(6, 1, 0), ms=7, color=style.INK, mec="white", mew=0.5)
    axes.set_title(title)
    axes.set_xlabel(f"towards periastron ({unit})" if e > 0 else f"along ({unit})")
    axes.set_ylabel(f"across ({unit})")
    axes.margins(0.07)
    handles = [
        Line2D([], [], color=style.CURVE, lw=1.7, label="nearer than the primary"),
        Line2D([], [], color=style.CURVE, lw=0.8, label="farther"),
        *([Line2D([], [], ls="", label="periastron", **periastron)] if e > 0 else []),
        Line2D([], [], ls="", label="ascending node" if bundle.ascending else "node", **node),
    ]
    if not bundle.ascending:  # then near and far may be exchanged
        handles[0].set_label("one side of the sky's plane")
        handles[1].set_label("the other side")
    style.legend_below(drawing, handles, columns=2)
    return drawing


def _places(bundle: Bundle, mjd: np.ndarray, scale: float) -> tuple[np.ndarray, np.ndarray]:
    e, a = bundle.best.eccentricity[0], scale * bundle.best.semimajor_axis[0]
    anomaly = bundle.best.anomaly(mjd)[0]
    return a * (np.cos(anomaly) - e), a * np.sqrt(1 - e * e) * np.sin(anomaly)
