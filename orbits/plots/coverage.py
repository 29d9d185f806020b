"""What a night measured: (u, v) coverage, V2 and closure phases, coloured by time or wavelength."""

from typing import TYPE_CHECKING

import numpy as np

from ..observation import Observable, Observation
from . import style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

MEGA = 1e-6
"""Spatial frequencies are drawn in millions of cycles per radian."""
MOST_BARS = 3000
"""With more data than this, error bars would hide the points."""
SHADES = ("#16324f", "#2f6690", "#5b9a8b", "#d9a441", "#d9722b")
"""From dark to light and from blue to orange: ordered in grey too, but for the last step."""


@style.styled
def draw_coverage(observations: list[Observation], *, by: str | None = None) -> "Figure":
    """Draw the data of one or several nights of a target.

    Parameters
    ----------
    observations : list of Observation
        The nights.
    by : str, optional
        What colours mean: "time" or "wavelength"; by default wavelength, if there are several.

    Raises
    ------
    ValueError
        If `by` is neither.
    """
    if by not in (None, "time", "wavelength"):
        raise ValueError(f"by must be 'time' or 'wavelength', got {by!r}")
    v2 = Observable.concatenate([o.v2 for o in observations])
    t3 = Observable.concatenate([o.t3 for o in observations])
    waves = np.concatenate([v2.wavelength, t3.wavelength])
    if by is None:
        by = "wavelength" if np.unique(waves).size > 1 else "time"
    shade = _Shade(by, v2, t3)
    drawing = style.figure(2, height_mm=62)
    plane, visibility, phase = drawing.subplots(1, 3, width_ratios=(1.2, 1.1, 1.1))
    _plane(plane, v2, t3, shade)
    _against_frequency(visibility, v2, np.linalg.norm(v2.frequencies[:, 0], axis=1), shade, 1.0)
    longest = t3.baselines / t3.wavelength
    _against_frequency(phase, t3, longest, shade, np.degrees(1.0))
    visibility.set_ylabel("squared visibility")
    _frame(visibility, v2)
    phase.set_ylabel("closure phase (deg)")
    visibility.set_xlabel("spatial frequency (10⁶/rad)")
    phase.set_xlabel("that of the longest side (10⁶/rad)")
    names = " ".join(dict.fromkeys(o.instrument for o in observations))
    plane.set_title(f"{observations[0].target}")
    visibility.set_title(names)
    phase.set_title(f"{len(v2)} V2, {len(t3)} closure phases", weight="normal")
    drawing.colorbar(shade.scale(), ax=phase, label=shade.label, pad=0.02, aspect=30)
    return drawing


class _Shade:
    """The colour of each datum."""

    def __init__(self, by: str, *parts: Observable) -> None:
        self.by = by
        values = np.concatenate([self._raw(part) for part in parts])
        self.start = np.floor(values.min()) if by == "time" and values.size else 0.0
        self.low = float(values.min(initial=np.inf)) - self.start
        self.high = float(values.max(initial=-np.inf)) - self.start
        if not self.low < self.high:
            self.low, self.high = self.low - 0.5, self.low + 0.5
        self.label = f"MJD - {self.start:.0f}" if by == "time" else "wavelength (µm)"

    def _raw(self, part: Observable) -> np.ndarray:
        return part.mjd if self.by == "time" else part.wavelength * 1e6

    def scale(self):
        """Numbers to colours, for points and colour bar."""
        from matplotlib.cm import ScalarMappable
        from matplotlib.colors import LinearSegmentedColormap, Normalize

        shades = LinearSegmentedColormap.from_list("dusk", SHADES)
        return ScalarMappable(Normalize(self.low, self.high), shades)

    def __call__(self, part: Observable) -> np.ndarray:
        """(n, 4) colours of the data of `part`."""
        return self.scale().to_rgba(self._raw(part) - self.start)


def _plane(axes: "Axes", v2: Observable, t3: Observable, shade: _Shade) -> None:
    """Spatial frequencies of V2, and of the sides of triangles, with their mirror images."""
    axes.grid(True)
    for part in (t3, v2):
        legs = part.frequencies
        if legs.shape[1] == 2:
            legs = np.concatenate([legs, legs.sum(axis=1, keepdims=True)], axis=1)
        colours = np.repeat(shade(part), legs.shape[1], axis=0)
        u, v = legs.reshape(-1, 2).T * MEGA
        for sign in (1, -1):
            axes.scatter(sign * u, sign * v, s=2.5, c=colours, lw=0, rasterized=len(u) > MOST_BARS)
    reach = 1.05 * max(np.abs(axes.dataLim.get_points()).max(), 1e-9)
    axes.set(xlim=(reach, -reach), ylim=(-reach, reach), aspect="equal")  # East to the left
    axes.set_xlabel("u, East (10⁶/rad)")
    axes.set_ylabel("v, North (10⁶/rad)")


def _against_frequency(
    axes: "Axes", part: Observable, frequency: np.ndarray, shade: _Shade, unit: float
) -> None:
    axes.grid(True)
    axes.axhline(0, color=style.QUIET, lw=0.6)
    if not len(part):
        axes.text(0.5, 0.5, "none", ha="center", transform=axes.transAxes, color=style.QUIET)
        return
    colours, value, error = shade(part), part.value * unit, part.error * unit
    x = frequency * MEGA
    if len(part) <= MOST_BARS:
        axes.vlines(x, value - error, value + error, colors=colours, lw=0.5, alpha=0.5)
    axes.scatter(x, value, s=3, c=colours, lw=0, rasterized=len(part) > MOST_BARS)
    axes.set_xlim(0, 1.03 * x.max())


def _frame(axes: "Axes", part: Observable) -> None:
    """Show 0 to 1 and nearly all values: a few wild ones must not flatten the others, but count."""
    low, high = np.percentile(part.value, [0.5, 99.5]) if len(part) else (0.0, 1.0)
    edges = min(-0.05, 1.1 * low), max(1.05, 1.1 * high)
    axes.set_ylim(*edges)
    beyond = np.count_nonzero((part.value < edges[0]) | (part.value > edges[1]))
    if beyond:
        axes.text(
            0.97, 0.97, f"{beyond} beyond the frame",
            ha="right", va="top", transform=axes.transAxes, color=style.QUIET,
        )  # fmt: skip
