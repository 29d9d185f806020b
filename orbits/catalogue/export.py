"""Export of a catalogue: ECSV, CSV, VOTable, and a LaTeX table for a paper."""

from pathlib import Path

import numpy as np

from ..errors import InputError
from ..files import whole_file
from ..rounding import latex
from ..tables import csv_name
from .table import Catalogue

FORMATS = (".ecsv", ".csv", ".vot", ".tex")


def export(catalogue: Catalogue, path: Path, *, force: bool = False) -> None:
    """Write `catalogue` to `path` in the format of its ending: .ecsv, .csv, .vot or .tex.

    CSV has the units in the names of its columns (``period_d``, ``period_error_d``), and can be
    read as a catalogue again; so can ECSV.

    Raises
    ------
    InputError
        If the ending is none of these, or `path` exists and `force` is false.
    """
    path = Path(path)
    if path.suffix not in FORMATS:
        raise InputError(f"{path}: a catalogue is written as {', '.join(FORMATS)}")
    with whole_file(path, force=force) as temporary:
        if path.suffix == ".tex":
            temporary.write_text(_latex(catalogue), encoding="utf-8")
        elif path.suffix == ".csv":
            table = catalogue.table
            for name in table.colnames:
                table.rename_column(name, csv_name(name, table[name].unit))
            table.write(temporary, format="ascii.csv", overwrite=True)
        else:
            form = {".ecsv": "ascii.ecsv", ".vot": "votable"}[path.suffix]
            catalogue.table.write(temporary, format=form, overwrite=True)


_ANGLES = (("inclination", "i"), ("node", r"\Omega"), ("argument", r"\omega"))
_FURTHER = (
    ("k1", r"$K_1$ (km\,s$^{-1}$)"),
    ("k2", r"$K_2$ (km\,s$^{-1}$)"),
    ("parallax", r"$\varpi$ (mas)"),
    ("total_mass", r"$M$ ($M_\odot$)"),
    ("primary_mass", r"$M_1$ ($M_\odot$)"),
    ("companion_mass", r"$M_2$ ($M_\odot$)"),
)
"""Columns that stand in the table where at least one orbit fills them."""
_YEAR = 365.25
_LONG = 2000.0
"""d; where half of the periods are longer they are given in Julian years."""


def _latex(catalogue: Catalogue) -> str:
    """A table with one row per orbit; two digits of each error, the value to the same place."""
    years = float(np.median(catalogue.column("period"))) > _LONG
    size, unit = (_YEAR, "yr") if years else (1.0, "d")
    head = ["System", f"$P$ ({unit})", r"$T_0$ (MJD)", "$e$", "$a$ (mas)"]
    further = [(n, words) for n, words in _FURTHER if np.isfinite(catalogue.column(n)).any()]
    head += [rf"${symbol}$ (deg)" for _, symbol in _ANGLES]
    head += [*(words for _, words in further), "Source"]
    rows = []
    for entry in catalogue:
        number, error = entry.number, lambda name, entry=entry: entry.number(f"{name}_error")
        cells = [_escaped(entry.system)]
        cells.append(latex(number("period") / size, error("period") / size))
        names = ("periastron", "eccentricity", "semimajor_axis")
        names += tuple(name for name, _ in (*_ANGLES, *further))
        cells += [latex(number(name), error(name)) for name in names]
        rows.append(" & ".join([*cells, _escaped(entry.source)]) + r" \\")
    return "\n".join(
        [
            rf"\begin{{tabular}}{{l{'r' * (len(head) - 2)}l}}",
            r"\hline",
            " & ".join(head) + r" \\",
            r"\hline",
            *rows,
            r"\hline",
            r"\end{tabular}",
            "",
        ]
    )


def _escaped(text: str) -> str:
    """`text` with the characters that mean something to LaTeX made harmless."""
    special = {
        "\\": r"\textbackslash{}",
        "~": r"\textasciitilde{}",
        "^": r"\textasciicircum{}",
        **{letter: f"\\{letter}" for letter in "&%$#_{}"},
    }
    return "".join(special.get(letter, letter) for letter in text)
