"""The look that all drawings share: sizes for print, colours by role, one way to save.

The colours differ in lightness as well as in hue, so that they stay apart in grey and with any
colour-vision deficiency; wherever two things must be told apart their shapes differ as well.
"""

from collections.abc import Callable
from functools import wraps
from pathlib import Path
from textwrap import wrap
from typing import TYPE_CHECKING, Any

from ..files import whole_file

if TYPE_CHECKING:
    from matplotlib.figure import Figure

COLUMN_MM = {1: 84.0, 2: 174.0}
"""Widths of a picture over one and over two columns of a journal."""

FORMATS = ("png", "pdf", "svg")

INK = "#23262d"
"""Text, axes, the primary star."""
QUIET = "#7d8590"
"""Lines that help the eye: line of nodes, zero lines, compass."""
GRID = "#e4e7eb"
CURVE = "#1b4b73"
"""The best orbit or model."""
CLOUD = "#9dbcd6"
"""Other orbits that the data allow; error bands."""
DATUM = "#c2571a"
"""What was measured."""
PRIMARY, COMPANION = "#1b4b73", "#d9892b"
"""The two stars of a pair, where both are shown."""
MARK = "#7a3b78"
"""A date or place asked for."""
SERIES = (
    ("#1b4b73", "-"),
    ("#d9892b", (0, (5, 1.5))),
    ("#5b9a8b", (0, (2, 1.2))),
    ("#7a3b78", (0, (6, 1.5, 1, 1.5))),
    ("#a9a13a", (0, (1, 1))),
)
"""Colour and dashes of several solutions in one picture, dark and light by turns."""

_SETTINGS: dict[str, Any] = {
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans"],  # comes with matplotlib: the same picture everywhere
    "mathtext.fontset": "dejavusans",
    "font.size": 7.0,
    "axes.labelsize": 7.0,
    "axes.titlesize": 7.5,
    "axes.titlelocation": "left",
    "axes.titleweight": "bold",
    "axes.edgecolor": QUIET,
    "axes.labelcolor": INK,
    "axes.titlecolor": INK,
    "axes.linewidth": 0.6,
    "axes.axisbelow": True,
    "axes.formatter.useoffset": False,
    "text.color": INK,
    "xtick.color": QUIET,
    "ytick.color": QUIET,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "xtick.labelsize": 6.5,
    "ytick.labelsize": 6.5,
    "xtick.direction": "in",
    "ytick.direction": "in",
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "xtick.major.size": 3.0,
    "ytick.major.size": 3.0,
    "grid.color": GRID,
    "grid.linewidth": 0.5,
    "lines.linewidth": 1.0,
    "lines.markersize": 3.5,
    "lines.markeredgewidth": 0.7,
    "patch.linewidth": 0.6,
    "legend.fontsize": 6.5,
    "legend.frameon": False,
    "legend.handlelength": 1.8,
    "legend.columnspacing": 1.2,
    "legend.handletextpad": 0.6,
    "figure.dpi": 100,
    "savefig.dpi": 300,
    "savefig.facecolor": "white",
    "pdf.fonttype": 42,  # letters stay letters in the file
    "svg.fonttype": "path",  # looks the same without our font
    "svg.hashsalt": "nodeline",  # the same picture gives the same file
}


def styled(draw: Callable) -> Callable:
    """Make `draw` work under the shared settings, leaving those of the caller as they were."""

    @wraps(draw)
    def wrapper(*args: Any, **kwargs: Any) -> Any:
        from matplotlib import rc_context

        with rc_context(_SETTINGS):
            return draw(*args, **kwargs)

    return wrapper


def figure(columns: int = 1, *, height_mm: float) -> "Figure":
    """An empty figure as wide as `columns` (1 or 2) columns; call it in a `styled` function.

    Raises
    ------
    ValueError
        If `columns` is neither 1 nor 2.
    """
    from matplotlib.figure import Figure

    if columns not in COLUMN_MM:
        raise ValueError(f"columns must be 1 or 2, got {columns!r}")
    return Figure(figsize=(COLUMN_MM[columns] / 25.4, height_mm / 25.4), layout="constrained")


@styled
def save(drawing: "Figure", path: Path, *, force: bool = False) -> None:
    """Write `drawing` to `path`, whose ending (.png, .pdf, .svg) is the format.

    Raises
    ------
    ValueError
        If the ending is none of the three.
    InputError
        If `path` exists and `force` is false.
    """
    form = Path(path).suffix[1:].lower()
    if form not in FORMATS:
        raise ValueError(f"a picture's name ends in .png, .pdf or .svg, got {str(path)!r}")
    # No date in the file, for the same picture to give the same bytes.
    metadata = {"png": {}, "pdf": {"CreationDate": None}, "svg": {"Date": None}}[form]
    with whole_file(path, force=force) as temporary:
        drawing.savefig(temporary, format=form, metadata=metadata)


def legend_below(drawing: "Figure", handles: list, *, columns: int) -> None:
    """Put the key under the picture, where it cannot cover anything."""
    if handles:
        drawing.legend(handles=handles, loc="outside lower center", ncols=columns)


def title(words: str, columns: int) -> str:
    """`words` in lines that fit above a drawing of that width."""
    return literal("\n".join(wrap(words, 38 if columns == 1 else 88)))


def literal(words: str) -> str:
    """`words` so that a dollar in them is drawn as one, and does not begin a formula."""
    return words.replace("$", r"\$")


def angular_unit(extent: float) -> tuple[str, float]:
    """Name of the unit to label an angle of `extent` mas in, and its number in one mas."""
    return ("arcsec", 1e-3) if extent > 4000 else ("mas", 1.0)
