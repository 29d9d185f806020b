"""Chi-square against period: what the scan saw, and the periods that were kept."""

from typing import TYPE_CHECKING

from . import style

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from ..fitting.solution import Solution


@style.styled
def draw_periods(solution: "Solution", *, columns: int = 1) -> "Figure":
    """Draw the least chi-square of the scan at each period; marks show the solutions."""
    scan = solution.scan.sort_values("period_d")
    drawing = style.figure(columns, height_mm=56)
    axes = drawing.subplots()
    axes.plot(scan["period_d"], scan["chi2"], color=style.CURVE, lw=0.6)
    axes.set_xscale("log")
    axes.set_yscale("log")
    for number, one in enumerate(solution.account["solutions"]):
        period = one["elements"]["period_d"]["median"]
        axes.axvline(period, color=style.MARK, lw=0.8, dashes=(3, 2), zorder=0)
        axes.annotate(
            f"{period:.5g} d  {100 * one['weight']:.0f} %",
            (period, 0.0),
            xycoords=("data", "axes fraction"),
            xytext=(3, 4 + 8 * number),
            textcoords="offset points",
            fontsize=6,
            color=style.MARK,
        )
    axes.set_xlabel("period (d)")
    axes.set_ylabel(r"least $\chi^2$ of the scan")
    axes.set_title(style.title(solution.name, columns))
    axes.grid(True)
    return drawing
