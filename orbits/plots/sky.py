"""The apparent orbit on the sky: North up, East left, equal scale.

The primary stands at the origin. Everything is in mas until the axes are labelled; an orbit of
several arcseconds gets them in arcsec.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..bundle import Bundle, Orbits
from ..positions import Positions, error_ellipse
from . import style
from .compass import Field, draw_compass, draw_scale_bar, free_corners

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_TURN = np.linspace(-np.pi, np.pi, 721)
_FINE_TURN = np.linspace(-np.pi, np.pi, 7201)
_DETAIL = 0.22
"""Positions that fill less than this fraction of the field get a picture of their own."""
_LONG_LABEL = 26
"""Letters; of labels in the key that are longer there is one per column."""
MOST_DRAWS = 60
"""Orbits of the cloud that are drawn: more only blacken it."""


@dataclass(frozen=True, kw_only=True)
class Mark:
    """A date to be marked on the orbit."""

    mjd: float
    """TDB."""
    label: str


@style.styled
def draw_sky(
    bundles: Bundle | Sequence[Bundle], *, columns: int = 1, marks: Sequence[Mark] = ()
) -> "Figure":
    """Draw the apparent orbit of one solution, or of several on top of each other.

    Parameters
    ----------
    bundles : Bundle or sequence of Bundle
        With several, each has its own colour and dashes, and all their positions are shown.
    columns : 1 or 2
        Width of the picture in columns of a journal.
    marks : sequence of Mark
        Dates at which the place of the companion (of the first solution) is marked.

    Raises
    ------
    ValueError
        If the elements of a bundle do not make an orbit on the sky, as without positions.
    """
    bundles = [bundles] if isinstance(bundles, Bundle) else list(bundles)
    for bundle in bundles:
        if not bundle.on_the_sky:
            raise ValueError(f"{bundle.name}: its size or inclination is not known")
    detail = _detail(bundles)
    handles = _key(bundles, bool(marks))
    name = style.title(_common_name(bundles), 1)
    longest = max(len(handle.get_label()) for handle in handles)
    per_row = columns * (2 if longest <= _LONG_LABEL else 1)
    side = 80.0 if columns == 1 or detail is not None else 120.0
    panels = 1 if detail is None else 2
    lines = -(-sum(_lines(handle.get_label()) for handle in handles) // per_row)
    height = side * (panels if columns == 1 else 1) + 9 + 3 * _lines(name) + 4 * lines
    drawing = style.figure(columns, height_mm=height)
    axes = drawing.add_subplot(*((panels, 1) if columns == 1 else (1, panels)), 1)
    axes.set_title(name)
    draw_sky_on(axes, bundles, marks=marks)
    if detail is not None:
        close = drawing.add_subplot(*((panels, 1) if columns == 1 else (1, panels)), 2)
        draw_sky_on(close, bundles, marks=marks, field=detail)
        close.set_title("where it was measured", fontweight="normal")
        _frame(axes, close, _limits(bundles), detail)
    style.legend_below(drawing, handles, columns=per_row)
    return drawing


def draw_sky_on(
    axes: "Axes",
    bundles: Sequence[Bundle],
    *,
    marks: Sequence[Mark] = (),
    field: Field | None = None,
    small: bool = False,
) -> str:
    """Draw on `axes` without title or key; returns the width of the field with its unit.

    `field` is the part of the sky that is shown, all of the orbit by default; `small` leaves out
    what a thumbnail cannot show.
    """
    first = bundles[0]
    whole = field is None
    limits = _limits(bundles) if whole else field
    unit, scale = style.angular_unit(np.ptp(limits[0]))
    axes.set_aspect("equal")
    axes.grid(True)
    for number, bundle in enumerate(bundles):
        _cloud(axes, bundle.thin(MOST_DRAWS), scale, number if len(bundles) > 1 else None)
    for number, bundle in enumerate(bundles):
        colour, dashes = style.SERIES[number % len(style.SERIES)]
        x, y = bundle.best.at_anomaly(_TURN)
        axes.plot(x[0] * scale, y[0] * scale, color=colour, linestyle=dashes, lw=1.2, zorder=4)
    _line_of_nodes(axes, first, scale)
    if first.best.eccentricity[0] > 0:
        _periastron(axes, first.best, scale)
    for bundle in bundles:
        if bundle.positions is not None:
            _measurements(axes, bundle.positions, bundle.best, scale, small=small)
    for mark in marks:
        _mark(axes, first.best, mark, scale)
    axes.plot(0, 0, marker=(6, 1, 0), ms=7, color=style.INK, mec="white", mew=0.5, zorder=8)
    busy, cloud = _busy_places(bundles)

    def taken(width: float) -> np.ndarray:
        arrows = _arrows(first.best, width).reshape(-1, 2) if whole else np.zeros((0, 2))
        return np.concatenate([busy, arrows])

    limits, corners = free_corners(limits, taken, cloud, wanted=1 if small else 2)
    axes.set_xlim(limits[0][1] * scale, limits[0][0] * scale)  # East grows to the left
    axes.set_ylim(limits[1][0] * scale, limits[1][1] * scale)
    if whole:
        _direction(axes, first.best, np.ptp(limits[0]), scale)
    draw_compass(axes, corners[0])
    if small:
        axes.tick_params(labelbottom=False, labelleft=False, length=0)
    else:
        draw_scale_bar(axes, corners[1], np.ptp(limits[0]) * scale, unit)
        axes.set_xlabel(f"East offset ({unit})")
        axes.set_ylabel(f"North offset ({unit})")
    return f"{np.ptp(limits[0]) * scale:.4g} {unit}"


def _lines(text: str) -> int:
    return text.count("\n") + 1


def _common_name(bundles: Sequence[Bundle]) -> str:
    """The system, if all solutions are of the same; solutions are called system/solution."""
    if len(bundles) == 1:
        return bundles[0].name
    systems = {bundle.name.partition("/")[0] for bundle in bundles}
    return systems.pop() if len(systems) == 1 else "Compared orbits"


def _extent(bundle: Bundle) -> tuple[np.ndarray, np.ndarray]:
    """Lowest and highest (East, North) of the positions with their errors."""
    spread = np.sqrt(np.diagonal(bundle.positions.covariance, axis1=1, axis2=2))
    return (bundle.positions.xy - spread).min(axis=0), (bundle.positions.xy + spread).max(axis=0)


def _detail(bundles: Sequence[Bundle]) -> Field | None:
    """The field of the positions, if they would be a speck in that of the orbit."""
    extents = [_extent(bundle) for bundle in bundles if bundle.positions is not None]
    if not extents:
        return None
    low, high = np.min([e[0] for e in extents], axis=0), np.max([e[1] for e in extents], axis=0)
    if (high - low).max() > _DETAIL * np.ptp(_limits(bundles)[0]):
        return None
    centre, half = (low + high) / 2, 0.75 * (high - low).max()
    return (centre[0] + half * np.array([-1, 1]), centre[1] + half * np.array([-1, 1]))


def _frame(axes: "Axes", close: "Axes", whole: Field, detail: Field) -> None:
    """A thin frame on `axes` around the part of the sky that `close` shows."""
    # Either may be in arcsec.
    ratio = style.angular_unit(np.ptp(whole[0]))[1] / style.angular_unit(np.ptp(detail[0]))[1]
    (left, right), (low, high) = close.get_xlim(), close.get_ylim()
    x, y = [left, right, right, left, left], [low, low, high, high, low]
    axes.plot(np.array(x) * ratio, np.array(y) * ratio, color=style.QUIET, lw=0.6, zorder=3)


def _limits(bundles: Sequence[Bundle]) -> Field:
    """A square field that holds the orbits, their positions, the primary and most of the draws."""
    xs, ys = [np.zeros(1)], [np.zeros(1)]
    for bundle in bundles:
        x, y = bundle.best.at_anomaly(_TURN)
        xs.append(x[0])
        ys.append(y[0])
        if bundle.positions is not None:
            extent = np.array(_extent(bundle))
            xs.append(extent[:, 0])
            ys.append(extent[:, 1])
    x, y = np.concatenate(xs), np.concatenate(ys)
    low, high = np.array([x.min(), y.min()]), np.array([x.max(), y.max()])
    half = 0.5 * (high - low).max()
    for bundle in bundles:
        draws = bundle.thin(MOST_DRAWS)
        if len(draws):
            dx, dy = draws.at_anomaly(_TURN[::12])
            lows = np.array([np.quantile(v.min(axis=1), 0.16) for v in (dx, dy)])
            highs = np.array([np.quantile(v.max(axis=1), 0.84) for v in (dx, dy)])
            # The cloud may widen the field by half, lest it shrink the orbit to a speck.
            low = np.maximum(np.minimum(low, lows), low - half)
            high = np.minimum(np.maximum(high, highs), high + half)
    centre, half = (low + high) / 2, 0.58 * (high - low).max() or 1.0
    return np.array([centre[0] - half, centre[0] + half]), np.array(
        [centre[1] - half, centre[1] + half]
    )


def _cloud(axes: "Axes", draws: Orbits, scale: float, number: int | None) -> None:
    if len(draws) == 0:
        return
    colour = style.CLOUD if number is None else style.SERIES[number % len(style.SERIES)][0]
    x, y = draws.at_anomaly(_TURN)
    axes.plot(x.T * scale, y.T * scale, color=colour, lw=0.4, alpha=0.3, zorder=2)


def _line_of_nodes(axes: "Axes", bundle: Bundle, scale: float) -> None:
    """The chord through the primary, and a triangle where the companion passes the node."""
    nodes = np.concatenate([bundle.best.anomaly_at(longitude) for longitude in (0.0, 180.0)])
    x, y = (offset[0] for offset in bundle.best.at_anomaly(nodes))
    axes.plot(x * scale, y * scale, color=style.QUIET, lw=0.7, ls=(0, (4, 2)), zorder=3)
    axes.plot(
        x[0] * scale,
        y[0] * scale,
        marker="^",
        ms=5.5,
        mfc=style.QUIET if bundle.ascending else "white",
        mec=style.INK,
        zorder=6,
    )


def _periastron(axes: "Axes", best: Orbits, scale: float) -> None:
    x, y = best.at_anomaly(np.zeros(1))
    axes.plot(x[0] * scale, y[0] * scale, marker="D", ms=4.2, mfc="white", mec=style.INK, zorder=7)


def _measurements(
    axes: "Axes", positions: Positions, best: Orbits, scale: float, *, small: bool
) -> None:
    """One-sigma ellipses, and lines from what was measured to what the orbit says."""
    from matplotlib.collections import EllipseCollection, LineCollection

    xy = positions.xy * scale
    x, y = best.offsets(positions.mjd)
    predicted = np.stack([x[0], y[0]], axis=-1) * scale
    major, minor, angle = error_ellipse(positions.covariance)
    shade = np.clip(positions.weight, 0.25, 1.0)  # alternatives of a night are paler
    axes.add_collection(
        LineCollection(np.stack([xy, predicted], axis=1), colors=style.INK, lw=0.5, zorder=5),
        autolim=False,
    )
    if not small:
        # The collection counts angles from the x axis of the data, East, towards North.
        axes.add_collection(
            EllipseCollection(
                2 * major * scale,
                2 * minor * scale,
                90.0 - angle,
                units="xy",
                offsets=xy,
                offset_transform=axes.transData,
                facecolors=style.DATUM,
                edgecolors=style.DATUM,
                alpha=0.35 * shade,
                zorder=5,
            ),
            autolim=False,
        )
    dots = axes.scatter(*xy.T, s=3 if small else 6, color=style.DATUM, alpha=shade, lw=0, zorder=6)
    dots.set_gid(f"positions-{len(axes.figure.axes)}")  # by which a page of HTML finds them


def _mark(axes: "Axes", best: Orbits, mark: Mark, scale: float) -> None:
    place, _, outward = _course(best, best.anomaly(np.array([mark.mjd]))[0])
    axes.plot(*place.T * scale, marker="s", ms=4, mfc="white", mec=style.MARK, mew=1.1, zorder=7)
    # The label stands on the inner side of the orbit, away from the arrows and the frame.
    right, up = outward[0] * (1, -1)  # East is to the left
    axes.annotate(
        mark.label,
        place[0] * scale,
        xytext=(7 * right, 7 * up),
        textcoords="offset points",
        ha="center" if abs(right) < 0.4 else "left" if right > 0 else "right",
        va="center" if abs(up) < 0.4 else "bottom" if up > 0 else "top",
        fontsize=6.5,
        color=style.MARK,
        zorder=9,
        bbox={"facecolor": "white", "edgecolor": "none", "alpha": 0.8, "pad": 0.6},
    )


def _busy_places(bundles: Sequence[Bundle]) -> tuple[np.ndarray, np.ndarray]:
    """(m, 2) points that no compass may cover, and points of the cloud that it had better not."""
    places, cloud = [np.zeros((1, 2))], [np.zeros((0, 2))]
    for bundle in bundles:
        x, y = bundle.best.at_anomaly(_FINE_TURN)
        places.append(np.stack([x[0], y[0]], axis=-1))
        if bundle.positions is not None:
            places.append(bundle.positions.xy)
        x, y = bundle.thin(MOST_DRAWS).at_anomaly(_TURN)
        cloud.append(np.stack([x.ravel(), y.ravel()], axis=-1))
    return np.concatenate(places), np.concatenate(cloud)


def _course(best: Orbits, anomaly: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """(m, 2) places at eccentric anomalies, and unit vectors along the motion and outwards."""
    x, y = best.at_anomaly(np.concatenate([anomaly, anomaly + 1e-4]))
    place, ahead = np.stack([x[0], y[0]], axis=-1).reshape(2, -1, 2)
    along = ahead - place
    along /= np.hypot(*along.T)[:, None]
    # Where the angle grows, North turns to East: the outside lies towards (-North, East).
    turn = 1.0 if best.inclination[0] <= 90 else -1.0
    return place, along, turn * np.stack([-along[:, 1], along[:, 0]], axis=-1)


def _arrows(best: Orbits, size: float) -> np.ndarray:
    """(2, 3, 2) tail, middle and head of two arrows outside the orbit, in a field of `size`."""
    place, along, outward = _course(best, np.radians([-115.0, 115.0]))
    centre, half = place + 0.035 * size * outward, 0.055 * size * along
    return np.stack([centre - half, centre, centre + half], axis=1)


def _direction(axes: "Axes", best: Orbits, size: float, scale: float) -> None:
    """Arrows that say which way the companion goes."""
    for tail, _, head in _arrows(best, size) * scale:
        axes.annotate(
            "",
            head,
            tail,
            arrowprops={
                "arrowstyle": "-|>",
                "color": style.CURVE,
                "lw": 1.0,
                "shrinkA": 0,
                "shrinkB": 0,
                "mutation_scale": 8,
            },
            zorder=7,
        )


def _key(bundles: Sequence[Bundle], marks: bool) -> list:
    """Handles of the key, each with its label."""
    from matplotlib.lines import Line2D

    def point(marker, label, **kwargs):
        return Line2D([], [], ls="", marker=marker, label=label, **kwargs)

    first = bundles[0]
    handles = [point((6, 1, 0), "primary", ms=7, color=style.INK, mec="white", mew=0.5)]
    if len(bundles) > 1:
        handles = []
        for number, bundle in enumerate(bundles):
            colour, dashes = style.SERIES[number % len(style.SERIES)]
            label = style.title(bundle.name, 1)
            handles.append(Line2D([], [], color=colour, ls=dashes, lw=1.2, label=label))
    if any(bundle.positions is not None for bundle in bundles):
        handles.append(point("o", "measured, 1σ", ms=4, mfc=style.DATUM, mec="none"))
    if len(bundles) == 1 and len(first.draws):
        handles.append(Line2D([], [], color=style.CLOUD, lw=1.2, label=first.spread))
    if first.best.eccentricity[0] > 0:
        handles.append(point("D", "periastron", ms=4.2, mfc="white", mec=style.INK))
    handles.append(
        Line2D(
            [],
            [],
            color=style.QUIET,
            lw=0.7,
            ls=(0, (4, 2)),
            marker="^",
            ms=5.5,
            mfc=style.QUIET if first.ascending else "white",
            mec=style.INK,
            label="ascending node" if first.ascending else "a node, either one",
        )
    )
    if marks:
        handles.append(point("s", "date marked", ms=4, mfc="white", mec=style.MARK, mew=1.1))
    return handles
